"""Horton's laws: number, diameter and length against order, with their ratios."""

from dataclasses import dataclass

import numpy as np

from ..quantities import Estimate, Undefined

__all__ = ["HortonFit", "horton_fit"]


@dataclass(frozen=True, slots=True)
class HortonFit:
    """log10 y = intercept + slope * order, unweighted; ratio = 10**|slope| with its interval."""

    intercept: float
    slope: float
    r_squared: float
    ratio: Estimate | Undefined


def horton_fit(order: np.ndarray, value: np.ndarray, *, level: float = 0.95) -> HortonFit:
    """Fit Horton's law through the orders given (Horton 1945, Bull Geol Soc Am 56:275).

    An unweighted line through log10 of the value, all orders included: this reproduces the published
    constants of Kassab 1993, table 4.

    Examples
    --------
    >>> fit = horton_fit(np.array([1, 2, 3, 4]), np.array([64.0, 16.0, 4.0, 1.0]))
    >>> round(fit.ratio.value, 6)
    4.0
    """
    order, value = np.asarray(order, dtype=float), np.asarray(value, dtype=float)
    use = np.isfinite(value) & (value > 0)
    n = int(use.sum())
    if n < 2:
        reason = f"{n} orders with a value, two are needed"
        return HortonFit(float("nan"), float("nan"), float("nan"), Undefined(reason))
    x, y = order[use], np.log10(value[use])
    slope, intercept = np.polyfit(x, y, 1)
    left = y - intercept - slope * x
    total = float(np.sum((y - y.mean()) ** 2))
    r_squared = 1.0 - float(np.sum(left**2)) / total if total > 0 else 1.0
    ratio = 10 ** abs(slope)
    if n < 3:
        interval: Estimate | Undefined = Estimate(ratio, float("nan"), float("nan"), level)
    else:
        from scipy.stats import t  # noqa: PLC0415 - heavy to import

        se = np.sqrt(float(np.sum(left**2)) / (n - 2) / float(np.sum((x - x.mean()) ** 2)))
        half = float(t.ppf(0.5 + level / 2, n - 2)) * se
        interval = Estimate(ratio, float(10 ** (abs(slope) - half)), float(10 ** (abs(slope) + half)), level)
    return HortonFit(float(intercept), float(slope), r_squared, interval)
