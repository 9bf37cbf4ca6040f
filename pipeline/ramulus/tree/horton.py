"""Horton's laws: number, diameter and length against order, with their ratios."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike

from ..quantities import Estimate, Undefined

__all__ = ["HortonFit", "PowerFit", "horton_fit", "power_fit"]


@dataclass(frozen=True, slots=True)
class HortonFit:
    """A line log10 y = intercept + slope * order.

    Parameters
    ----------
    intercept, slope, r_squared : float
        NaN where there are fewer than two orders.
    ratio : Estimate or Undefined
        10**|slope|, with its interval from three orders up.
    """

    intercept: float
    slope: float
    r_squared: float
    ratio: Estimate | Undefined


@dataclass(frozen=True, slots=True)
class PowerFit:
    """A power law y = factor * x**exponent.

    Parameters
    ----------
    factor : float
        Value at x = 1; NaN where there are fewer than two points.
    exponent : Estimate or Undefined
        With its interval from three points up.
    r_squared : float
        Of the line through the logarithms.
    """

    factor: float
    exponent: Estimate | Undefined
    r_squared: float


def horton_fit(order: ArrayLike, value: ArrayLike, *, level: float = 0.95) -> HortonFit:
    """Fit Horton's law through the orders given (Horton 1945, Bull Geol Soc Am 56:275).

    An unweighted line through log10 of the value, all orders included: this reproduces the
    published constants of Kassab 1993, table 4. The interval is that of the slope (Student's t).

    Parameters
    ----------
    order : (k,) array_like
        Orders.
    value : (k,) array_like
        Number, mean diameter, mean length or cross-section of each; those that are not > 0 are left
        out.
    level : float
        Level of the interval.

    Returns
    -------
    HortonFit
        Line and ratio.

    Examples
    --------
    >>> fit = horton_fit([1, 2, 3, 4], [64.0, 16.0, 4.0, 1.0])
    >>> round(fit.ratio.value, 6)
    4.0
    """
    order, value = np.asarray(order, dtype=np.float64), np.asarray(value, dtype=np.float64)
    use = np.isfinite(value) & (value > 0)
    n = int(use.sum())
    if n < 2:
        nan = float("nan")
        return HortonFit(nan, nan, nan, Undefined(f"{n} orders with a value, two are needed"))
    intercept, slope, half, r_squared = _line(order[use], np.log10(value[use]), level)
    low, high = 10 ** (abs(slope) - half), 10 ** (abs(slope) + half)
    return HortonFit(intercept, slope, r_squared, Estimate(10 ** abs(slope), low, high, level))


def power_fit(x: ArrayLike, y: ArrayLike, *, level: float = 0.95) -> PowerFit:
    """Fit a power law, such as length against radius, by an unweighted line through the logarithms.

    Parameters
    ----------
    x, y : (k,) array_like
        Pairs; those that are not both > 0 are left out.
    level : float
        Level of the interval.

    Returns
    -------
    PowerFit
        Factor and exponent.

    Examples
    --------
    >>> round(power_fit([1, 2, 4], [3, 12, 48]).exponent.value, 6)
    2.0
    """
    x, y = np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64)
    use = np.isfinite(x) & np.isfinite(y) & (x > 0) & (y > 0)
    if len(np.unique(x[use])) < 2:
        nan = float("nan")
        reason = f"{len(np.unique(x[use]))} different x above zero, two are needed"
        return PowerFit(nan, Undefined(reason), nan)
    intercept, slope, half, r_squared = _line(np.log10(x[use]), np.log10(y[use]), level)
    return PowerFit(10**intercept, Estimate(slope, slope - half, slope + half, level), r_squared)


def _line(x: np.ndarray, y: np.ndarray, level: float) -> tuple[float, float, float, float]:
    """Intercept, slope, half its interval (NaN for two points) and R^2 of an unweighted line."""
    n, spread = len(x), float(np.sum((x - x.mean()) ** 2))
    slope = float(np.sum((x - x.mean()) * (y - y.mean()))) / spread
    intercept = float(y.mean()) - slope * float(x.mean())
    left = float(np.sum((y - intercept - slope * x) ** 2))
    total = float(np.sum((y - y.mean()) ** 2))
    r_squared = 1.0 - left / total if total > 0 else 1.0
    if n < 3:
        return intercept, slope, float("nan"), r_squared
    from scipy.stats import t  # noqa: PLC0415 - heavy to import

    half = float(t.ppf(0.5 + level / 2, n - 2)) * np.sqrt(left / (n - 2) / spread)
    return intercept, slope, float(half), r_squared
