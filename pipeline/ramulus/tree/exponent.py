"""The exponent of a single junction, when it exists, and its interval.

The exponent x of a junction solves sum (a_i / a_0)**x = 1 over its daughters. The sum falls with x
from the number of daughters towards that of the daughters that are not thinner than the parent:
there is one positive solution where every daughter is thinner than the parent, and none otherwise.
"""

import numpy as np
from numpy.typing import ArrayLike

__all__ = ["exponent_intervals", "junction_exponent", "junction_exponents", "log_ratio"]

_TURNS = 60  # halvings of a bracket: past the last digit
_BOUND_TURNS = 40  # the same for a bound of an interval: ten digits
_LARGE = 2000.0  # an exponent that stands for no bound


def junction_exponent(parent_um: float, daughters_um: ArrayLike) -> float:
    """Solve sum (a_i / a_0)**x = 1 for one junction; NaN where no positive solution exists.

    Parameters
    ----------
    parent_um : float
        Radius or diameter of the parent.
    daughters_um : (k,) array_like
        The same of the daughters.

    Returns
    -------
    float
        The exponent.

    Examples
    --------
    >>> round(junction_exponent(100.0, [80.0, 60.0]), 6)
    2.0
    """
    daughters = np.asarray(daughters_um, dtype=np.float64)
    return float(junction_exponents(np.array([parent_um], dtype=np.float64), daughters[None])[0])


def junction_exponents(parent_um: np.ndarray, daughters_um: np.ndarray) -> np.ndarray:
    """Solve many junctions at once.

    Parameters
    ----------
    parent_um : (n,) array
        Parents' radii.
    daughters_um : (n, k) array
        Daughters' radii, NaN beyond the last.

    Returns
    -------
    (n,) array
        Exponents; NaN where a daughter is not thinner than the parent, where there are fewer than
        two, or a radius is unknown or not positive.
    """
    log_x, real = _log_shares(parent_um, daughters_um)
    count = real.sum(axis=1)
    widest = np.where(real, log_x, -np.inf).max(axis=1, initial=-np.inf)
    thinnest = np.where(real, log_x, np.inf).min(axis=1, initial=np.inf)
    # widest is NaN where a radius is not positive, and then no comparison holds.
    solvable = (count >= 2) & (widest < 0) & np.isfinite(thinnest)
    many = np.log(np.maximum(count, 2))
    # All daughters as thin as the thinnest, or all as wide as the widest, bracket the solution.
    low = many / -np.where(solvable, thinnest, -1.0)
    high = many / -np.where(solvable, widest, -1.0)
    for _ in range(_TURNS):
        middle = 0.5 * (low + high)
        above = np.exp(np.where(real, middle[:, None] * log_x, -np.inf)).sum(axis=1) > 1
        low, high = np.where(above, middle, low), np.where(above, high, middle)
    return np.where(solvable, 0.5 * (low + high), np.nan)


def log_ratio(parent_um: np.ndarray, daughters_um: np.ndarray, exponent: float = 3.0) -> np.ndarray:
    """Return ln(sum a_i**g / a_0**g) of each junction; 0 where the law of exponent g holds.

    Parameters
    ----------
    parent_um : (n,) array
        Parents' radii.
    daughters_um : (n, k) array
        Daughters' radii, NaN beyond the last.
    exponent : float
        g, 3 for the cube law.

    Returns
    -------
    (n,) array
        NaN where the parent's radius is unknown.

    Examples
    --------
    >>> round(float(log_ratio(np.array([10.0]), np.array([[8.0, 6.0]]), 2.0)[0]), 12) + 0.0
    0.0
    """
    with np.errstate(divide="ignore", invalid="ignore"):
        log_power = exponent * np.log(daughters_um)
    real = np.isfinite(log_power)
    top = np.where(real, log_power, -np.inf).max(axis=1, initial=-np.inf, keepdims=True)
    top = np.where(np.isfinite(top), top, 0.0)
    total = np.where(real, np.exp(np.where(real, log_power - top, 0.0)), 0.0).sum(axis=1)
    with np.errstate(divide="ignore", invalid="ignore"):
        ratio: np.ndarray = np.log(total) + top[:, 0] - exponent * np.log(parent_um)
        return ratio


def exponent_intervals(
    parent_um: np.ndarray,
    daughters_um: np.ndarray,
    parent_se: np.ndarray,
    daughter_se: np.ndarray,
    *,
    level: float = 0.95,
) -> tuple[np.ndarray, np.ndarray]:
    """Return the exponents that each junction's radii do not reject.

    An exponent g is kept where |h(g)| is at most z times its standard error (Fieller 1954, J R
    Stat Soc B 16:175), h(g) being the log
    ratio. Unlike a spread of solved exponents this takes in the junctions and the draws that have
    none: the interval is then open towards large exponents, and its upper bound is NaN.

    Parameters
    ----------
    parent_um, daughters_um : (n,) and (n, k) arrays
        Radii, NaN beyond the last daughter.
    parent_se, daughter_se : (n,) and (n, k) arrays
        Standard errors of ln radius, independent; unknown or 0 throughout: no interval.
    level : float
        Level of the interval.

    Returns
    -------
    low, high : (n,) arrays
        Bounds, NaN where there is none.
    """
    from scipy.stats import norm  # noqa: PLC0415 - heavy to import

    z = float(norm.ppf(0.5 + level / 2))
    log_x, real = _log_shares(parent_um, daughters_um)
    s0, s = np.nan_to_num(parent_se), np.where(real, np.nan_to_num(daughter_se), 0.0)
    known = np.isfinite(parent_um) & (real.sum(axis=1) >= 2) & ((s0 > 0) | (s > 0).any(axis=1))
    known &= np.isfinite(np.where(real, log_x, 0.0)).all(axis=1)

    def deviate(g: np.ndarray) -> np.ndarray:
        """Return h(g) in standard errors; it falls with g."""
        power = np.where(real, g[:, None] * log_x, -np.inf)
        top = np.max(power, axis=1, initial=-1e300, keepdims=True)
        share = np.exp(power - top)
        total = share.sum(axis=1, keepdims=True)
        share = share / np.maximum(total, 1e-300)
        h = np.log(np.maximum(total[:, 0], 1e-300)) + top[:, 0]
        se = np.sqrt(s0**2 + np.sum(share**2 * s**2, axis=1))
        return np.asarray(h / (g * np.maximum(se, 1e-15)))

    at_most = deviate(np.full(len(parent_um), _LARGE))
    bounds = []
    for wanted in (z, -z):
        low = np.full(len(parent_um), np.log(1e-3))
        high = np.full(len(parent_um), np.log(_LARGE))
        for _ in range(_BOUND_TURNS):
            middle = 0.5 * (low + high)
            above = deviate(np.exp(middle)) > wanted
            low, high = np.where(above, middle, low), np.where(above, high, middle)
        bounds.append(np.where(known & (at_most < wanted), np.exp(0.5 * (low + high)), np.nan))
    return bounds[0], bounds[1]


def _log_shares(parent: np.ndarray, daughters: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Logarithm of each daughter's radius over the parent's, and which daughters there are."""
    real = ~np.isnan(daughters)
    with np.errstate(invalid="ignore", divide="ignore"):
        log_x = np.log(daughters) - np.log(parent)[:, None]
    return log_x, real
