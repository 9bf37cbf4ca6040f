"""Voxel spacing with its unit and origin: read from headers, given by the user, or refused."""

from dataclasses import dataclass
from math import isfinite

from ..errors import SpacingError, UnusableInputError
from ..quantities import length_to_um
from .stack import SpacingOrigin

__all__ = ["AxisSpacing", "combined_spacing"]

_AGREE = 0.01


@dataclass(frozen=True, slots=True)
class AxisSpacing:
    """One axis's spacing as a header states it; `unit` is empty where the header names none."""

    value: float
    unit: str
    source: str

    def um(self) -> float | None:
        """Return the spacing in um, or None where the unit is no known length."""
        try:
            return length_to_um(self.value, self.unit) if self.unit else None
        except UnusableInputError:
            return None


Found = dict[str, list[AxisSpacing]]


def combined_spacing(
    found: Found, *, user_um: tuple[float, float, float] | None, name: str, override: str = ""
) -> tuple[tuple[float, float, float], tuple[SpacingOrigin, SpacingOrigin, SpacingOrigin]]:
    """Return the spacing z, y, x in um and where each axis has it from.

    Parameters
    ----------
    found : dict
        For each of "z", "y", "x" what the headers state, in order of trust.
    user_um : tuple, optional
        The user's spacing.
    override : str
        Why the user's spacing holds against a header that says otherwise; empty refuses.

    Raises
    ------
    SpacingError
        If an axis has none, it is impossible, or two sources differ by more than 1 %.
    """
    values: list[float] = []
    origins: list[SpacingOrigin] = []
    for axis, given in zip("zyx", user_um or (None, None, None), strict=True):
        stated = [(s, s.um()) for s in found.get(axis, [])]
        known = [(s, um) for s, um in stated if um is not None and isfinite(um) and um > 0]
        for s, um in stated:
            if um is not None and not (isfinite(um) and um > 0):
                known = []
                if given is None:
                    msg = (
                        f"{name}: the {axis} spacing is {s.value!r} {s.unit} in {s.source},"
                        " expected a length > 0; give --spacing-um Z Y X"
                    )
                    raise SpacingError(msg)
        for s, um in known[1:]:
            if given is None and abs(um - known[0][1]) > _AGREE * known[0][1]:
                msg = (
                    f"{name}: the {axis} spacing is {known[0][1]:.6g} um in {known[0][0].source}"
                    f" but {um:.6g} um"
                    f" in {s.source}; give --spacing-um Z Y X"
                )
                raise SpacingError(msg)
        if given is not None:
            if not isfinite(given) or given <= 0:
                msg = f"--spacing-um: the {axis} spacing is {given!r}, expected um > 0"
                raise SpacingError(msg)
            if known and abs(given - known[0][1]) > _AGREE * known[0][1] and not override:
                msg = (
                    f"{name}: the user's {axis} spacing is {given:.6g} um but {known[0][0].source}"
                    " says"
                    f" {known[0][1]:.6g} um; if the header is wrong, say why in"
                    " input.spacing_override_reason"
                )
                raise SpacingError(msg)
            values.append(float(given))
            origins.append("user")
        elif known:
            values.append(known[0][1])
            origins.append("header")
        else:
            why = "no spacing"
            if stated:
                s = stated[0][0]
                why = f"{s.value:.6g} without a known unit (unit {s.unit!r}) in {s.source}"
            msg = f"{name}: the {axis} spacing is not known ({why}); give --spacing-um Z Y X"
            raise SpacingError(msg)
    return (values[0], values[1], values[2]), (origins[0], origins[1], origins[2])
