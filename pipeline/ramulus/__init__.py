"""From a 3-D stack of blood vessels to a graph with radii, orders, cube law and resistance."""

from .errors import RamulusError, SpacingError, UnusableInputError, WorkFailedError
from .network.graph import CentrelineGraph
from .quantities import Estimate, Undefined
from .stack.stack import Stack

__all__ = [
    "CentrelineGraph",
    "Estimate",
    "RamulusError",
    "SpacingError",
    "Stack",
    "Undefined",
    "UnusableInputError",
    "WorkFailedError",
]
__version__ = "0.1.0"
