"""Estimates with intervals, and the only place where units are converted."""

from dataclasses import dataclass
from math import isfinite

from .errors import UnusableInputError

__all__ = [
    "Estimate",
    "Undefined",
    "hindrance_to_resistance_pa_s_per_m3",
    "length_to_um",
    "pa_to_mmhg",
]

_UM_PER_UNIT = {
    "nm": 1e-3, "nanometer": 1e-3, "nanometre": 1e-3,
    "um": 1.0, "µm": 1.0, "μm": 1.0, "micron": 1.0, "microns": 1.0,
    "micrometer": 1.0, "micrometre": 1.0, "\\u00b5m": 1.0,
    "mm": 1e3, "millimeter": 1e3, "millimetre": 1e3,
    "cm": 1e4, "centimeter": 1e4, "centimetre": 1e4,
    "dm": 1e5, "m": 1e6, "meter": 1e6, "metre": 1e6,
    "inch": 25400.0, "in": 25400.0,
    "angstrom": 1e-4, "å": 1e-4, "pm": 1e-6,
}  # fmt: skip
_PA_PER_MMHG = 133.322387415


@dataclass(frozen=True, slots=True)
class Estimate:
    """A value with its interval at a stated level."""

    value: float
    low: float
    high: float
    level: float = 0.95

    def __bool__(self) -> bool:
        return True

    def to_json(self) -> dict[str, float]:
        """Return the object that the data contract prescribes."""
        return {"value": self.value, "low": self.low, "high": self.high, "level": self.level}


@dataclass(frozen=True, slots=True)
class Undefined:
    """A quantity that cannot be estimated here, with the reason; it is false."""

    reason: str

    def __bool__(self) -> bool:
        return False

    def to_json(self) -> dict[str, str | None]:
        """Return the object that the data contract prescribes."""
        return {"value": None, "reason": self.reason}


def length_to_um(value: float, unit: str) -> float:
    """Convert a length to micrometres.

    Parameters
    ----------
    value : float
        The length, finite.
    unit : str
        A unit's name or symbol, as found in image headers.

    Returns
    -------
    float
        The length in micrometres.

    Raises
    ------
    UnusableInputError
        If the unit is no length that is known here, or the value is not finite.

    Examples
    --------
    >>> length_to_um(0.65, "mm")
    650.0
    """
    factor = _UM_PER_UNIT.get(unit.strip().lower())
    if factor is None:
        known = "nm, um, mm, cm, m, inch"
        msg = f"unit {unit!r} is not a known unit of length; expected one of {known}"
        raise UnusableInputError(msg)
    if not isfinite(value):
        msg = f"length {value!r} {unit} is not a finite number"
        raise UnusableInputError(msg)
    return value * factor


def pa_to_mmhg(pressure_pa: float) -> float:
    """Convert a pressure from pascal to conventional millimetres of mercury.

    Examples
    --------
    >>> round(pa_to_mmhg(13332.2387415), 6)
    100.0
    """
    return pressure_pa / _PA_PER_MMHG


def hindrance_to_resistance_pa_s_per_m3(hindrance_per_um3: float, viscosity_mpa_s: float) -> float:
    """Convert a hindrance to a resistance: R = viscosity * hindrance.

    Examples
    --------
    A tube 10 um wide and 1 mm long with 3 mPa s (hindrance 4.07437 per um3):

    >>> round(hindrance_to_resistance_pa_s_per_m3(4.07437, 3.0) / 1e16, 4)
    1.2223
    """
    return hindrance_per_um3 * 1e18 * viscosity_mpa_s * 1e-3
