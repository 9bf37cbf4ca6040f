"""What stands beside the main test: mixed model, weights by measurement error, repeatability."""

import warnings
from dataclasses import dataclass

import numpy as np

from ..quantities import Undefined
from .difference import GroupTest, design_matrix

__all__ = ["Spread", "mixed_model", "precision_weighted", "spread_of_stacks"]


@dataclass(frozen=True, slots=True)
class Spread:
    """Variance among subjects and among the stacks of one subject, groups' means taken out."""

    among_subjects: float
    among_stacks: float
    subjects: int
    stacks: int

    @property
    def icc(self) -> float | Undefined:
        """Intraclass correlation of single stacks, ICC(1)."""
        whole = self.among_subjects + self.among_stacks
        if whole <= 0:
            return Undefined("all stacks of a group have the same value")
        return self.among_subjects / whole

    def of_subject_mean(self, stacks: int) -> float:
        """Return the variance of a subject's figure made of so many stacks."""
        return max(self.among_subjects, 0.0) + self.among_stacks / stacks


def spread_of_stacks(
    value: np.ndarray, subject: np.ndarray, group: np.ndarray
) -> Spread | Undefined:
    """Split the variance of single stacks into subjects and stacks within subjects.

    One-way analysis of variance of subjects nested in groups, for unequal numbers of stacks
    (Searle 1971, Linear Models); its intraclass correlation is ICC(1,1) of Shrout & Fleiss 1979,
    Psychol Bull 86:420-428. An estimate below zero is left as it is.

    Parameters
    ----------
    value : (n,) float
        One value per stack.
    subject, group : (n,) array
        The subject of each stack and the subject's group.

    Returns
    -------
    Spread or Undefined
        Undefined where no subject has several stacks or no group has several subjects.

    Examples
    --------
    >>> value = np.array([1.0, 2.0, 5.0, 6.0, 9.0, 10.0])
    >>> spread = spread_of_stacks(value, np.array([1, 1, 2, 2, 3, 3]), np.zeros(6))
    >>> spread.among_subjects, spread.among_stacks
    (15.75, 0.5)
    """
    _, of_subject, size = np.unique(subject, return_inverse=True, return_counts=True)
    _, first = np.unique(of_subject, return_index=True)
    _, group_code = np.unique(group, return_inverse=True)
    group_of_subject = group_code[first]
    n, n_subjects, n_groups = len(value), len(size), int(group_code.max(initial=-1)) + 1
    if n == n_subjects:
        return Undefined("no subject has more than one stack")
    if n_subjects == n_groups:
        return Undefined("no group has more than one subject")
    subject_mean = np.bincount(of_subject, value) / size
    group_mean = np.bincount(group_code, value) / np.bincount(group_code)
    within = float(np.sum((value - subject_mean[of_subject]) ** 2)) / (n - n_subjects)
    shift = subject_mean - group_mean[group_of_subject]
    between = float(np.sum(size * shift**2)) / (n_subjects - n_groups)
    group_size = np.bincount(group_of_subject, size)
    effective = n - float(np.sum(np.bincount(group_of_subject, size**2) / group_size))
    per_subject = effective / (n_subjects - n_groups)
    return Spread((between - within) / per_subject, within, n_subjects, n)


def mixed_model(
    value: np.ndarray,
    second: np.ndarray,
    subject: np.ndarray,
    batch: np.ndarray,
    *,
    level: float = 0.95,
) -> GroupTest | Undefined:
    """Fit value = batch + group + random subject to single stacks by restricted likelihood.

    The p and the interval use the t distribution with the degrees of freedom of the subjects, not
    of the stacks, since the fit itself offers the normal distribution only, which is too sure of
    few subjects.

    Parameters
    ----------
    value : (n,) float
        One value per stack.
    second : (n,) bool
        True for stacks of the second group's subjects.
    subject, batch : (n,) array
        Subject and batch of each stack.
    level : float
        Level of the interval.

    Returns
    -------
    GroupTest or Undefined
        Undefined where each subject has one stack, or the fit does not converge.

    Examples
    --------
    >>> value = np.array([1.0, 2.0, 5.0, 6.0, 4.0, 3.0, 9.0, 10.0])
    >>> subject = np.array([1, 1, 2, 2, 3, 3, 4, 4])
    >>> fit = mixed_model(value, subject > 2, subject, np.zeros(8))
    >>> round(fit.estimate, 3), fit.df
    (3.0, 2)
    """
    from scipy.stats import t as t_law  # noqa: PLC0415 - scipy.stats costs a second at start-up

    design = design_matrix(second, batch)
    n_subjects = len(np.unique(subject))
    df = n_subjects - design.shape[1]
    if n_subjects == len(value):
        return Undefined("each subject has one stack")
    if df < 1:
        return Undefined(f"too few subjects: {n_subjects} for {design.shape[1]} fixed effects")
    fitted = _fit(value, design, subject)
    if isinstance(fitted, Undefined):
        return fitted
    estimate, error = fitted
    t = estimate / error
    reach = float(t_law.ppf(0.5 + level / 2, df)) * error
    p = float(2 * t_law.sf(abs(t), df))
    return GroupTest(estimate, estimate - reach, estimate + reach, t, df, p)


def _fit(
    value: np.ndarray, design: np.ndarray, subject: np.ndarray
) -> tuple[float, float] | Undefined:
    """Return the group's coefficient and its standard error; the scale of the values is free."""
    from statsmodels.regression.mixed_linear_model import MixedLM  # noqa: PLC0415 - slow to import

    scale = float(np.std(value))
    if scale <= 1e-12 * max(1e-300, float(np.max(np.abs(value)))):
        return Undefined("all stacks have the same value")
    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")  # convergence is asked of the result below
            result = MixedLM(value / scale, design, groups=subject).fit(reml=True)
    except (np.linalg.LinAlgError, ValueError) as failure:
        return Undefined(f"the fit failed: {failure}")
    error = float(result.bse_fe[0])
    if not result.converged or not np.isfinite(error) or error <= 0:
        return Undefined("the fit did not converge")
    return float(result.fe_params[0]) * scale, error * scale


def precision_weighted(
    value: np.ndarray,
    measurement_sd: np.ndarray,
    second: np.ndarray,
    batch: np.ndarray,
    *,
    level: float = 0.95,
) -> GroupTest | Undefined:
    """Compare the groups again with each subject weighted by how well it was measured.

    Weights are 1 / (spread among subjects + measurement variance); the spread is the one for which
    the weighted residuals have their expected size (Paule & Mandel 1982, J Res NBS 87:377-385),
    the standard error is scaled as by Knapp & Hartung 2003, Stat Med 22:2693-2710, never downwards.

    Parameters
    ----------
    value : (n,) float
        One value per subject.
    measurement_sd : (n,) float
        Standard error of each value, > 0.
    second : (n,) bool
        True for subjects of the second group.
    batch : (n,) array
        Batch of each subject.
    level : float
        Level of the interval.

    Returns
    -------
    GroupTest or Undefined
        Undefined where a standard error is missing or there are too few subjects.

    Examples
    --------
    >>> value = np.array([1.0, 2.0, 3.0, 3.0, 5.0, 7.0])
    >>> test = precision_weighted(value, np.full(6, 0.1), np.arange(6) > 2, np.zeros(6))
    >>> round(test.estimate, 3), test.df
    (3.0, 4)
    """
    from scipy.stats import t as t_law  # noqa: PLC0415 - scipy.stats costs a second at start-up

    design = design_matrix(second, batch)
    df = len(value) - design.shape[1]
    if df < 1:
        return Undefined(f"too few subjects: {len(value)}")
    if not np.all(np.isfinite(measurement_sd) & (measurement_sd > 0)):
        return Undefined("not every subject's figure has an interval")
    spread = variance_among_subjects(value, measurement_sd, design)
    weight = 1 / (spread + measurement_sd**2)
    estimate, misfit, inverse = _weighted_fit(value, weight, design)
    error = float(np.sqrt(inverse[0, 0] * max(1.0, misfit / df)))
    t = estimate / error
    reach = float(t_law.ppf(0.5 + level / 2, df)) * error
    p = float(2 * t_law.sf(abs(t), df))
    return GroupTest(estimate, estimate - reach, estimate + reach, t, df, p)


def variance_among_subjects(
    value: np.ndarray, measurement_sd: np.ndarray, design: np.ndarray
) -> float:
    """Return the variance that remains when measurement error is taken out (Paule & Mandel)."""
    from scipy.optimize import brentq  # noqa: PLC0415 - only where statistics are asked for

    df = len(value) - design.shape[1]

    def surplus(spread: float) -> float:
        misfit = _weighted_fit(value, 1 / (spread + measurement_sd**2), design)[1]
        return float(misfit - df)

    if surplus(0.0) <= 0:
        return 0.0
    highest = float(np.ptp(value)) ** 2 + 1e-300
    while surplus(highest) > 0:
        highest *= 4
    return float(brentq(surplus, 0.0, highest, xtol=1e-12 * highest, rtol=1e-12))


def _weighted_fit(
    value: np.ndarray, weight: np.ndarray, design: np.ndarray
) -> tuple[float, float, np.ndarray]:
    """Return the group's coefficient, the weighted sum of squared residuals, and the covariance."""
    inverse = np.linalg.inv(design.T @ (weight[:, None] * design))
    coefficients = inverse @ (design.T @ (weight * value))
    residual = value - design @ coefficients
    return float(coefficients[0]), float(np.sum(weight * residual**2)), inverse
