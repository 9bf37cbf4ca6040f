"""Viscosity of blood in a vessel: constant, or by published laws of diameter and hematocrit."""

from collections.abc import Callable
from typing import Any, Literal

import numpy as np
from numpy.typing import ArrayLike

from .._settings import Settings, setting
from ..errors import UnusableInputError

__all__ = ["LAWS", "ViscositySettings", "pries_1992", "pries_1994", "viscosity_mpa_s"]


class ViscositySettings(Settings):
    """Settings of the viscosity."""

    law: Literal["constant", "pries_1992", "pries_1994"] = setting(
        "constant",
        "constant; in vitro (pries_1992) or in vivo (pries_1994) by diameter and hematocrit",
        source="Pries, Neuhaus, Gaehtgens 1992, Am J Physiol 263:H1770; Pries et al. 1994, Circ Res"
        " 75:904",
    )  # fmt: skip
    constant_mpa_s: float = setting(
        3.5, "viscosity of blood where the law is constant", unit="mPa s", gt=0,
        source="common practice, no source",
    )  # fmt: skip
    plasma_mpa_s: float = setting(
        1.257, "viscosity of plasma, which the laws are relative to", unit="mPa s", gt=0,
        source="OpenStax College Physics 12.4, blood plasma at 37 C",
    )  # fmt: skip
    hematocrit: float = setting(0.45, "discharge hematocrit", ge=0, lt=0.95)


def viscosity_mpa_s(
    diameter_um: ArrayLike, *, settings: ViscositySettings, hematocrit: ArrayLike | None = None
) -> np.ndarray:
    """Return the viscosity in each vessel.

    Parameters
    ----------
    diameter_um : array_like
        Vessel diameters.
    hematocrit : array_like, optional
        Discharge hematocrit of each vessel, in place of the settings' one.
    """
    diameter = np.asarray(diameter_um, dtype=np.float64)
    if settings.law == "constant":
        return np.full(diameter.shape, settings.constant_mpa_s)
    share = settings.hematocrit if hematocrit is None else hematocrit
    return settings.plasma_mpa_s * LAWS[settings.law](diameter, share)


def pries_1992(diameter_um: ArrayLike, hematocrit: ArrayLike) -> Any:
    """Relative viscosity in glass tubes (Pries, Neuhaus, Gaehtgens 1992, Am J Physiol 263:H1770).

    Data behind it: 3.3 to 1978 um, hematocrit to 0.9, shear rates of 50 per s and more.

    Examples
    --------
    >>> round(float(pries_1992(4, 0.3)), 4)
    1.871
    """
    d = _checked_diameter(diameter_um, above=0.0)
    at_045 = 220 * np.exp(-1.3 * d) + 3.2 - 2.44 * np.exp(-0.06 * d**0.645)
    return 1 + (at_045 - 1) * _hematocrit_factor(d, hematocrit)


def pries_1994(diameter_um: ArrayLike, hematocrit: ArrayLike) -> Any:
    """Relative apparent viscosity in living microvessels (Pries et al. 1994, Circ Res 75:904).

    For diameters above 1.1 um.

    Examples
    --------
    >>> round(float(pries_1994(10, 0.45)), 3)
    5.872
    """
    d = _checked_diameter(diameter_um, above=1.1)
    at_045 = 6 * np.exp(-0.085 * d) + 3.2 - 2.44 * np.exp(-0.06 * d**0.645)
    wall = (d / (d - 1.1)) ** 2
    return (1 + (at_045 - 1) * _hematocrit_factor(d, hematocrit) * wall) * wall


LAWS: dict[str, Callable[[ArrayLike, ArrayLike], Any]] = {
    "pries_1992": pries_1992, "pries_1994": pries_1994,
}  # fmt: skip


def _checked_diameter(diameter_um: ArrayLike, *, above: float) -> np.ndarray:
    d = np.asarray(diameter_um, dtype=np.float64)
    if not (d > above).all():
        msg = f"diameter_um: found {np.nanmin(d):.4g} um, the law holds above {above} um"
        raise UnusableInputError(msg)
    return d


def _hematocrit_factor(d: np.ndarray, hematocrit: ArrayLike) -> np.ndarray:
    """((1 - H)**C - 1) / (0.55**C - 1), with its limit where C nears 0 (at 8.05 um)."""
    h = np.asarray(hematocrit, dtype=np.float64)
    k = 1 / (1 + 1e-11 * d**12)
    c = (0.8 + np.exp(-0.075 * d)) * (k - 1) + k
    small = np.abs(c) < 1e-7
    c = np.where(small, 1.0, c)
    factor = np.expm1(c * np.log1p(-h)) / np.expm1(c * np.log(0.55))
    return np.where(small, np.log1p(-h) / np.log(0.55), factor)
