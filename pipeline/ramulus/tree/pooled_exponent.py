"""One exponent from all junctions, corrected for radius errors, and the plain estimates beside it.

A radius error spares no vessel and drives some daughters above their parent, so the exponents that
can be solved are a biased sample, and so is their median. The pooled exponent g solves, over all
junctions,

    sum_j psi(z_j) = 0,   z_j = (h_j(g) - mu_j(g)) / sqrt(v_j(g) + tau^2),
    h_j(g) = ln(sum_i a_i**g) - g ln a_0,
    mu_j = g^2 / 2 sum_i w_i (1 - w_i) s_i^2,   v_j = g^2 (s_0^2 + sum_i w_i^2 s_i^2),
    w_i = a_i**g / sum a**g,

with s the standard errors of ln radius: mu is the bias of h to second order and v its variance;
tau^2 is the scatter between junctions beyond the radius errors (Paule and Mandel 1982, J Res NBS
87:377, on clipped z); psi clips at 2 (Huber 1964, Ann Math Stat 35:73). The interval holds the
exponents at which the mean of psi, in its standard errors, is within Student's t; the test of
the cube law is the same statistic at 3. Neighbouring junctions share a vessel, whose error enters
once with either sign: taking them for independent makes the interval a little too wide.
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from ..quantities import Estimate, Undefined
from .exponent import junction_exponents, log_ratio

__all__ = [
    "PlainExponents", "PooledExponent", "bias_and_variance", "expected_unsolvable",
    "plain_exponents", "pooled_exponent",
]  # fmt: skip

_LOW, _HIGH = 0.05, 30.0
_CLIP = 2.0
_CLIPPED_SQUARE = 0.9205  # E min(z^2, 4) of a standard normal z
_FEWEST = 3
_FLOOR = 1e-12  # of the variance: a millionth of a radius, below any error and above rounding


@dataclass(frozen=True, slots=True)
class PooledExponent:
    """The corrected exponent of a sample.

    Parameters
    ----------
    exponent : Estimate or Undefined
        With its interval from random radius errors and the scatter between junctions.
    scatter : float
        SD of the log ratio between junctions beyond the radius errors (tau).
    p_cube_law : float
        Two-sided p of exponent 3.
    """

    exponent: Estimate | Undefined
    scatter: float
    p_cube_law: float


@dataclass(frozen=True, slots=True)
class PlainExponents:
    """Estimates that take the radii for exact, for comparison: radius errors bias each in its way.

    Parameters
    ----------
    solvable_median : float
        Median of the exponents that exist: too low.
    all_median : float
        Median with the junctions that have none taken as infinite; inf if they are the most.
    mean_residual_root : float
        The exponent at which the mean of (sum a**g - a_0**g) / a_0**g is 0; NaN if nowhere.
    log_cube_slope : float
        Least squares slope of ln sum a^3 on ln a_0^3: 1 under the cube law without errors.
    """

    solvable_median: float
    all_median: float
    mean_residual_root: float
    log_cube_slope: float


def pooled_exponent(
    parent_um: np.ndarray,
    daughters_um: np.ndarray,
    parent_se: np.ndarray,
    daughter_se: np.ndarray,
    *,
    level: float = 0.95,
) -> PooledExponent:
    """Estimate one exponent from all junctions, corrected for radius errors.

    Parameters
    ----------
    parent_um : (n,) array
        Parents' radii.
    daughters_um : (n, k) array
        Daughters' radii, NaN beyond the last.
    parent_se, daughter_se : arrays like them
        Standard errors of ln radius, random and independent between vessels; NaN counts as 0.
    level : float
        Level of the interval.

    Returns
    -------
    PooledExponent
        Undefined with fewer than three junctions, or where most daughters are as wide as their
        parents.

    Examples
    --------
    >>> parent, daughters = np.array([100.0] * 9), np.array([[80.0, 60.0]] * 9)
    >>> found = pooled_exponent(parent, daughters, np.zeros(9), np.zeros((9, 2)))
    >>> round(found.exponent.value, 6)
    2.0
    """
    n, nan = len(parent_um), float("nan")
    if n < _FEWEST:
        reason = f"{n} junctions can be used, {_FEWEST} are needed"
        return PooledExponent(Undefined(reason), nan, nan)
    data = (parent_um, daughters_um, np.nan_to_num(parent_se), np.nan_to_num(daughter_se))
    value, tau2 = 3.0, _scatter(3.0, data)
    for _ in range(30):
        found = _crossing(data, tau2, 0.0)
        if not np.isfinite(found):
            reason = "no exponent up to 30 fits: most daughters are as wide as their parents"
            return PooledExponent(Undefined(reason), nan, nan)
        new_tau2 = _scatter(found, data)
        settled = abs(found - value) < 1e-7 and abs(new_tau2 - tau2) <= 1e-7 * (1 + tau2)
        value, tau2 = found, new_tau2
        if settled:
            break
    from scipy.stats import t  # noqa: PLC0415 - heavy to import

    limit = float(t.ppf(0.5 + level / 2, n - 1))
    low, high = _crossing(data, tau2, limit), _crossing(data, tau2, -limit)
    # Without scatter and errors every junction says the same, and the interval is the value.
    exponent = Estimate(value, min(low, value), max(high, value), level)
    p = float(2 * t.sf(abs(_statistic(3.0, data, tau2)), n - 1))
    return PooledExponent(exponent, float(np.sqrt(tau2)), p)


def bias_and_variance(
    exponent: float,
    parent_um: np.ndarray,
    daughters_um: np.ndarray,
    parent_se: np.ndarray,
    daughter_se: np.ndarray,
) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the log ratio of each junction, its bias and its variance from the radius errors.

    Parameters
    ----------
    exponent : float
        g.
    parent_um, daughters_um, parent_se, daughter_se : arrays
        As in `pooled_exponent`.

    Returns
    -------
    h, mu, variance : (n,) arrays
        To second and first order in the errors.
    """
    h = log_ratio(parent_um, daughters_um, exponent)
    with np.errstate(divide="ignore", invalid="ignore"):
        log_share = exponent * (np.log(daughters_um) - np.log(parent_um)[:, None]) - h[:, None]
    weight = np.where(
        np.isnan(log_share), 0.0, np.exp(np.where(np.isnan(log_share), 0.0, log_share))
    )
    square = np.nan_to_num(daughter_se) ** 2
    mu = 0.5 * exponent**2 * np.sum(weight * (1 - weight) * square, axis=1)
    variance = exponent**2 * (np.nan_to_num(parent_se) ** 2 + np.sum(weight**2 * square, axis=1))
    return h, mu, variance


def plain_exponents(parent_um: np.ndarray, daughters_um: np.ndarray) -> PlainExponents:
    """Return the estimates that take the radii for exact.

    Parameters
    ----------
    parent_um, daughters_um : (n,) and (n, k) arrays
        Radii, NaN beyond the last daughter; n >= 1.

    Returns
    -------
    PlainExponents
        Four figures.

    Examples
    --------
    >>> round(plain_exponents(np.array([10.0]), np.array([[8.0, 6.0]])).solvable_median, 6)
    2.0
    """
    solved = junction_exponents(parent_um, daughters_um)
    exists = np.isfinite(solved)
    median = float(np.median(solved[exists])) if exists.any() else float("nan")
    x = np.log(parent_um)
    y = log_ratio(parent_um, daughters_um, 3.0) / 3 + x
    spread = float(np.sum((x - x.mean()) ** 2))
    slope = float(np.sum((x - x.mean()) * (y - y.mean()))) / spread if spread > 0 else float("nan")

    def mean_residual(g: float) -> float:
        return float(np.mean(np.exp(np.minimum(log_ratio(parent_um, daughters_um, g), 500.0)))) - 1

    return PlainExponents(
        median, float(np.median(np.where(exists, solved, np.inf))),
        _mean_residual_root(mean_residual), slope,
    )  # fmt: skip


def expected_unsolvable(
    parent_um: np.ndarray,
    daughters_um: np.ndarray,
    parent_se: np.ndarray,
    daughter_se: np.ndarray,
    *,
    seed: int,
) -> tuple[float, float]:
    """Tell which share of junctions would have no exponent by radius errors alone.

    A parametric simulation: the cube law is taken to hold exactly (each parent's cube is the sum of
    its daughters'), and the radius errors are drawn anew.

    Parameters
    ----------
    parent_um, daughters_um, parent_se, daughter_se : arrays
        As in `pooled_exponent`.
    seed : int
        Of the draws.

    Returns
    -------
    share : float
        The mean over the draws; NaN where no radius error is known.
    p : float
        Two-sided: how often a draw lies as far from that mean as the observed share does.

    Examples
    --------
    >>> radii, errors = np.array([[8.0, 8.0]]), np.array([[0.01, 0.01]])
    >>> expected_unsolvable(np.array([10.0]), radii, errors[:, 0], errors, seed=1)[0]
    0.0
    """
    s0, s = np.nan_to_num(parent_se), np.nan_to_num(daughter_se)
    if not len(parent_um) or not (s0.any() or s.any()):
        return float("nan"), float("nan")
    rng = np.random.default_rng(seed)
    log_exact = np.log(parent_um) + log_ratio(parent_um, daughters_um, 3.0) / 3
    log_daughters = np.log(daughters_um)
    draws = int(np.clip(4e7 / daughters_um.size, 50, 1000))
    shares = np.empty(draws)
    for k in range(draws):
        parent = log_exact + s0 * rng.standard_normal(len(s0))
        widest = np.fmax.reduce(log_daughters + s * rng.standard_normal(s.shape), axis=1)
        shares[k] = np.mean(widest >= parent)
    expected = float(shares.mean())
    observed = float(np.mean(np.fmax.reduce(log_daughters, axis=1) >= np.log(parent_um)))
    as_far = np.sum(np.abs(shares - expected) >= abs(observed - expected) - 1e-12)
    return expected, float((as_far + 1) / (draws + 1))


_Data = tuple[np.ndarray, np.ndarray, np.ndarray, np.ndarray]


def _clipped(g: float, data: _Data, tau2: float) -> np.ndarray:
    h, mu, variance = bias_and_variance(g, *data)
    return np.asarray(np.clip((h - mu) / np.sqrt(variance + tau2 + _FLOOR), -_CLIP, _CLIP))


def _statistic(g: float, data: _Data, tau2: float) -> float:
    """Mean of the clipped deviates in its own standard errors; it falls with g."""
    psi = _clipped(g, data, tau2)
    # Never less than the errors say: few junctions may agree by luck, exact radii up to rounding.
    spread = max(float(np.std(psi, ddof=1)), _CLIPPED_SQUARE**0.5)
    return float(np.mean(psi) / spread * np.sqrt(len(psi)))


def _crossing(data: _Data, tau2: float, wanted: float) -> float:
    """Return the exponent at which the statistic falls through a value; NaN if nowhere."""
    if not _statistic(_LOW, data, tau2) > wanted > _statistic(_HIGH, data, tau2):
        return float("nan")
    from scipy.optimize import brentq  # noqa: PLC0415 - heavy to import

    def above(log_g: float) -> float:
        return _statistic(float(np.exp(log_g)), data, tau2) - wanted

    return float(np.exp(brentq(above, np.log(_LOW), np.log(_HIGH), xtol=1e-10)))


def _scatter(g: float, data: _Data) -> float:
    """Return the variance between junctions that makes the clipped squares what a normal's are."""
    h, mu, variance = bias_and_variance(g, *data)
    left = (h - mu) ** 2

    def excess(tau2: float) -> float:
        z2 = np.minimum(left / (variance + tau2 + _FLOOR), _CLIP**2)
        return float(np.sum(z2)) - _CLIPPED_SQUARE * (len(h) - 1)

    if excess(0.0) <= 0:
        return 0.0
    low, high = 0.0, float(left.max())
    while excess(high) > 0:
        high *= 4
    for _ in range(60):
        middle = 0.5 * (low + high)
        low, high = (middle, high) if excess(middle) > 0 else (low, middle)
    return 0.5 * (low + high)


def _mean_residual_root(function: Callable[[float], float]) -> float:
    """Return where the mean first falls through 0: it rises again where no exponent takes over."""
    grid = [float(g) for g in np.geomspace(_LOW, _HIGH, 60)]
    below = next((k for k, g in enumerate(grid) if function(g) < 0), 0)
    if below == 0:
        return float("nan")
    from scipy.optimize import brentq  # noqa: PLC0415 - heavy to import

    return float(brentq(function, grid[below - 1], grid[below], xtol=1e-10))
