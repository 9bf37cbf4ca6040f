"""Two groups of subjects: the difference, its tests, its size, and what could have been found.

Every function takes one value per subject. With batches the groups are compared inside the
batches: the model is value = batch + group, and subjects whose batch holds one group alone have
to be left out beforehand (`comparable`).
"""

from dataclasses import dataclass
from itertools import combinations
from math import comb, prod

import numpy as np

from .._checks import checked_positive
from ..errors import UnusableInputError
from ..quantities import Estimate, Undefined

__all__ = [
    "GroupTest",
    "Permutation",
    "comparable",
    "hedges_g",
    "hodges_lehmann",
    "permutation_test",
    "pooled_sd",
    "smallest_detectable_g",
    "welch_test",
]


@dataclass(frozen=True, slots=True)
class GroupTest:
    """Difference of two groups (second minus first) with its t interval and p."""

    estimate: float
    low: float
    high: float
    t: float
    df: float
    p: float


@dataclass(frozen=True, slots=True)
class Permutation:
    """A permutation test: two-sided p, the smallest p that these numbers allow, how it was made."""

    p: float
    floor: float
    arrangements: int
    exact: bool


def comparable(second: np.ndarray, batch: np.ndarray) -> np.ndarray:
    """Tell which subjects sit in a batch that holds both groups.

    Parameters
    ----------
    second : (n,) bool
        True for subjects of the second group.
    batch : (n,) array
        The batch of each subject; one label for all where there are none.

    Returns
    -------
    (n,) bool
        Where none is True, group and batch cannot be told apart.

    Examples
    --------
    >>> comparable(np.array([False, True, True]), np.array(["a", "a", "b"]))
    array([ True,  True, False])
    """
    shared = set(batch[second]) & set(batch[~second])
    return np.isin(batch, sorted(shared))


def welch_test(
    value: np.ndarray, second: np.ndarray, batch: np.ndarray, *, level: float = 0.95
) -> GroupTest | Undefined:
    """Compare two groups without taking their spreads for equal.

    Least squares of value = batch + group, with the variance of MacKinnon & White 1985 (HC2, J
    Econometrics 29:305-325) and Satterthwaite's degrees of freedom from the groups' own variances.
    With one batch this is Welch's test (Welch 1947, Biometrika 34:28-35); with one subject of
    each group in every batch it is the paired t-test.

    Parameters
    ----------
    value : (n,) float
        One value per subject, on the scale of the comparison.
    second : (n,) bool
        True for subjects of the second group.
    batch : (n,) array
        Batch of each subject; every batch holds both groups.
    level : float
        Level of the interval.

    Returns
    -------
    GroupTest or Undefined
        Undefined where too few subjects are left or all residuals are zero.

    Examples
    --------
    >>> value = np.array([1.0, 2.0, 3.0, 3.0, 5.0, 7.0])
    >>> test = welch_test(value, np.arange(6) > 2, np.zeros(6))
    >>> round(test.estimate, 3), round(test.df, 3), round(test.p, 4)
    (3.0, 2.941, 0.1045)
    """
    from scipy.stats import t as t_law  # noqa: PLC0415 - scipy.stats costs a second at start-up

    design = design_matrix(second, batch)
    if reason := _too_few(second, design):
        return Undefined(reason)
    weights, leftover = _contrast(design)
    residual = leftover @ value
    if _is_flat(residual, value):
        return Undefined("all subjects of a group have the same value")
    free = np.diag(leftover)
    variance = float(np.sum(weights**2 * residual**2 / free))
    df = _satterthwaite_df(residual, second, weights, leftover)
    if variance <= 0 or df <= 0:
        return Undefined("the spread within the groups cannot be estimated")
    estimate, error = float(weights @ value), variance**0.5
    reach = float(t_law.ppf(0.5 + level / 2, df)) * error
    t = estimate / error
    return GroupTest(
        estimate, estimate - reach, estimate + reach, t, df, float(2 * t_law.sf(abs(t), df))
    )


def design_matrix(second: np.ndarray, batch: np.ndarray) -> np.ndarray:
    """Return the columns of value = batch + group: the group first, then one per batch."""
    _, code = np.unique(batch, return_inverse=True)
    return np.column_stack([second, np.eye(code.max(initial=0) + 1)[code]]).astype(np.float64)


def _too_few(second: np.ndarray, design: np.ndarray) -> str:
    n_first, n_second = int(np.sum(~second)), int(np.sum(second))
    if min(n_first, n_second) < 2:
        return f"too few subjects: {n_first} and {n_second}, at least 2 in each group are needed"
    if len(second) <= design.shape[1]:
        return f"too few subjects for {design.shape[1] - 1} batches: {len(second)}"
    return ""


def _contrast(design: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Return the weights that give the group's coefficient, and the matrix that gives residuals."""
    inverse = np.linalg.pinv(design)
    return inverse[0], np.eye(len(design)) - design @ inverse


def _is_flat(residual: np.ndarray, value: np.ndarray) -> bool:
    """Tell whether nothing but rounding is left."""
    return bool(np.max(np.abs(residual)) <= 1e-12 * max(1e-300, float(np.max(np.abs(value)))))


def _satterthwaite_df(
    residual: np.ndarray, second: np.ndarray, weights: np.ndarray, leftover: np.ndarray
) -> float:
    """Match the first two moments of the variance estimate, each group with its own variance."""
    free = np.diag(leftover)
    scaled = residual**2 / free
    variance = np.where(second, scaled[second].mean(), scaled[~second].mean())
    form = leftover @ np.diag(weights**2 / free) @ leftover * variance
    spread = float(np.sum(form * form.T))
    return float(np.trace(form)) ** 2 / spread if spread > 0 else 0.0


def permutation_test(
    value: np.ndarray,
    second: np.ndarray,
    batch: np.ndarray,
    *,
    exact_limit: int = 200_000,
    random_permutations: int = 20_000,
    seed: int = 1,
) -> Permutation | Undefined:
    """Exchange the groups' labels inside the batches and see how often so much comes of it.

    The statistic is the absolute group difference of the least-squares model, so that equal
    arrangements of both signs count. All arrangements are listed where they are few enough;
    else they are drawn, the observed one included (Phipson & Smyth 2010, Stat Appl Genet Mol
    Biol 9:39).

    Parameters
    ----------
    value : (n,) float
        One value per subject.
    second : (n,) bool
        True for subjects of the second group.
    batch : (n,) array
        Batch of each subject; labels change places inside a batch only.
    exact_limit : int
        Most arrangements that are listed.
    random_permutations : int
        Arrangements drawn beyond that.
    seed : int
        Seed of the draw.

    Returns
    -------
    Permutation or Undefined
        Undefined where a group is empty.

    Examples
    --------
    Three against three, fully separated: 2 of 20 arrangements are as extreme.

    >>> permutation_test(np.arange(6.0), np.arange(6) > 2, np.zeros(6)).p
    0.1
    """
    if second.all() or not second.any():
        return Undefined("a group has no subject")
    strata = [(value[batch == name], second[batch == name]) for name in np.unique(batch)]
    weights = np.array([np.sum(s) * np.sum(~s) / len(s) for _, s in strata])
    weights = weights / weights.sum()
    observed = sum(w * _difference(v, s) for w, (v, s) in zip(weights, strata, strict=True))
    count = prod(comb(len(s), int(s.sum())) for _, s in strata)
    exact = count <= exact_limit
    if exact:
        drawn = _all_differences(strata, weights)
    else:
        drawn = _drawn_differences(strata, weights, random_permutations, seed)
    slack = 1e-9 * max(1e-300, float(np.ptp(value)))
    as_extreme = int(np.sum(np.abs(drawn) >= abs(observed) - slack))
    if exact:
        most = float(np.abs(drawn).max())
        floor = float(np.mean(np.abs(drawn) >= most - slack))
        return Permutation(as_extreme / count, floor, count, exact)
    n_drawn = len(drawn) + 1
    return Permutation((as_extreme + 1) / n_drawn, 1 / n_drawn, n_drawn, exact)


def _difference(value: np.ndarray, second: np.ndarray) -> float:
    return float(value[second].mean() - value[~second].mean())


def _all_differences(
    strata: list[tuple[np.ndarray, np.ndarray]], weights: np.ndarray
) -> np.ndarray:
    """List the weighted difference of every arrangement of every batch."""
    total = np.zeros(1)
    for weight, (value, second) in zip(weights, strata, strict=True):
        chosen = np.array(list(combinations(range(len(value)), int(second.sum()))))
        total = np.add.outer(total, weight * _differences(value, value[chosen])).ravel()
    return total


def _differences(value: np.ndarray, chosen: np.ndarray) -> np.ndarray:
    """Return the mean of the chosen less the mean of the others, a row an arrangement."""
    n_second = chosen.shape[1]
    in_second = chosen.sum(axis=1)
    difference: np.ndarray = in_second / n_second - (value.sum() - in_second) / (
        len(value) - n_second
    )
    return difference


def _drawn_differences(
    strata: list[tuple[np.ndarray, np.ndarray]], weights: np.ndarray, number: int, seed: int
) -> np.ndarray:
    random = np.random.default_rng(seed)
    total = np.zeros(number)
    for weight, (value, second) in zip(weights, strata, strict=True):
        shuffled = random.permuted(np.tile(value, (number, 1)), axis=1)
        total += weight * _differences(value, shuffled[:, : int(second.sum())])
    return total


def hodges_lehmann(value: np.ndarray, second: np.ndarray, batch: np.ndarray) -> float:
    """Return the median of all differences between a second and a first subject of one batch.

    Hodges & Lehmann 1963, Ann Math Stat 34:598-611.

    Parameters
    ----------
    value : (n,) float
        One value per subject.
    second : (n,) bool
        True for subjects of the second group.
    batch : (n,) array
        Batch of each subject.

    Returns
    -------
    float
        The shift of the second group against the first.

    Raises
    ------
    UnusableInputError
        If no batch holds both groups.

    Examples
    --------
    >>> hodges_lehmann(np.array([1.0, 2.0, 4.0, 9.0]), np.arange(4) > 1, np.zeros(4))
    5.0
    """
    pairs = [
        np.subtract.outer(value[(batch == name) & second], value[(batch == name) & ~second]).ravel()
        for name in np.unique(batch)
    ]
    differences = np.concatenate(pairs)
    if not differences.size:
        msg = f"batch: found {len(pairs)} batches, none with both groups; expected at least one"
        raise UnusableInputError(msg)
    return float(np.median(differences))


def hedges_g(
    value: np.ndarray, second: np.ndarray, batch: np.ndarray, *, level: float = 0.95
) -> Estimate | Undefined:
    """Return the difference in units of the spread within groups, free of its small-sample bias.

    Hedges 1981, J Educ Stat 6:107-128; the interval inverts the noncentral t distribution (Hedges
    & Olkin 1985) and is exact for normal values of equal variance.

    Parameters
    ----------
    value : (n,) float
        One value per subject.
    second : (n,) bool
        True for subjects of the second group.
    batch : (n,) array
        Batch of each subject.
    level : float
        Level of the interval.

    Returns
    -------
    Estimate or Undefined
        Hedges' g.

    Examples
    --------
    >>> value = np.array([1.0, 2.0, 3.0, 3.0, 5.0, 7.0])
    >>> g = hedges_g(value, np.arange(6) > 2, np.zeros(6))
    >>> round(g.value, 3), round(g.low, 3), round(g.high, 3)
    (1.514, -0.167, 3.091)
    """
    design = design_matrix(second, batch)
    if reason := _too_few(second, design):
        return Undefined(reason)
    weights, leftover = _contrast(design)
    residual = leftover @ value
    if _is_flat(residual, value):
        return Undefined("all subjects of a group have the same value")
    df = len(value) - design.shape[1]
    length = float(np.sqrt(weights @ weights))
    d = float(weights @ value) / float(np.sqrt(residual @ residual / df))
    low, high = (length * shift for shift in _noncentrality(d / length, df, level))
    unbias = _unbias(df)
    return Estimate(unbias * d, unbias * low, unbias * high, level)


def pooled_sd(value: np.ndarray, second: np.ndarray, batch: np.ndarray) -> float:
    """Return the standard deviation of subjects within groups (and batches).

    Parameters
    ----------
    value : (n,) float
        One value per subject.
    second : (n,) bool
        True for subjects of the second group.
    batch : (n,) array
        Batch of each subject.

    Returns
    -------
    float
        Root of the residual sum of squares over its degrees of freedom; NaN where none is left.

    Examples
    --------
    >>> round(pooled_sd(np.array([1.0, 2.0, 3.0, 3.0, 5.0, 7.0]), np.arange(6) > 2, np.zeros(6)), 4)
    1.5811
    """
    design = design_matrix(second, batch)
    df = len(value) - design.shape[1]
    residual = _contrast(design)[1] @ value
    return float(np.sqrt(residual @ residual / df)) if df > 0 else float("nan")


def _unbias(df: int) -> float:
    """Return Hedges' exact factor; 1 - 3 / (4 df - 1) is its usual approximation."""
    from scipy.special import gammaln  # noqa: PLC0415 - only where statistics are asked for

    if df < 2:
        return 1.0  # the factor is not defined for one degree of freedom: left as it is
    return float(np.exp(gammaln(df / 2) - gammaln((df - 1) / 2)) / np.sqrt(df / 2))


def _noncentrality(t: float, df: int, level: float) -> tuple[float, float]:
    """Return the noncentralities for which t sits at either tail."""
    from scipy.special import nctdtrinc  # noqa: PLC0415 - only where statistics are asked for

    return float(nctdtrinc(df, 0.5 + level / 2, t)), float(nctdtrinc(df, 0.5 - level / 2, t))


def smallest_detectable_g(
    second: np.ndarray, batch: np.ndarray, *, alpha: float = 0.05, power: float = 0.8
) -> float | Undefined:
    """Return the difference, in units of the spread, that is found with the given power.

    Parameters
    ----------
    second : (n,) bool
        True for subjects of the second group.
    batch : (n,) array
        Batch of each subject.
    alpha : float
        Size of the two-sided test.
    power : float
        Chance of finding it.

    Returns
    -------
    float or Undefined
        The standardised difference (Cohen 1988), solved on the noncentral t distribution.

    Examples
    --------
    >>> round(smallest_detectable_g(np.arange(10) > 4, np.zeros(10)), 3)
    2.024
    """
    checked_positive("alpha", alpha)
    design = design_matrix(second, batch)
    if reason := _too_few(second, design):
        return Undefined(reason)
    weights, _ = _contrast(design)
    length = float(np.sqrt(weights @ weights))
    return length * _needed_noncentrality(len(second) - design.shape[1], alpha, power)


def _needed_noncentrality(df: int, alpha: float, power: float) -> float:
    from scipy.special import nctdtrinc, stdtrit  # noqa: PLC0415 - only where statistics are asked for

    edge = float(stdtrit(df, 1 - alpha / 2))
    # The far tail is below 1e-4 wherever the power is above one half.
    return float(nctdtrinc(df, 1 - power, edge))
