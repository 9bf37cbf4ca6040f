"""What every reader returns: a lazy array with named axes and the spacings its header states."""

from dataclasses import dataclass, field
from typing import Any

from .spacing import Found

__all__ = ["RawImage"]


@dataclass(frozen=True, slots=True)
class RawImage:
    """An image as a header describes it.

    `read(channel, time_point)` returns the (z, y, x) array, lazy where the format allows. Shapes
    are z, y, x.
    """

    shape: tuple[int, int, int]
    dtype: str
    found: Found
    read: Any
    format: str
    channels: tuple[str, ...] = ("0",)
    time_points: int = 1
    header: dict[str, str] = field(default_factory=dict)
    problems: tuple[str, ...] = ()
