"""From a 3-D stack of blood vessels to a graph with radii, orders, cube law and resistance."""

from importlib import import_module
from typing import TYPE_CHECKING, Any

from .errors import RamulusError, SpacingError, UnusableInputError, WorkFailedError

if TYPE_CHECKING:
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

# Found when first asked for: numpy, pandas and networkx cost a second that `ramulus --help` has no
# use for.
_LATER = {
    "CentrelineGraph": ".network.graph",
    "Estimate": ".quantities",
    "Stack": ".stack.stack",
    "Undefined": ".quantities",
}


def __getattr__(name: str) -> Any:
    if name not in _LATER:
        msg = f"module {__name__!r} has no attribute {name!r}"
        raise AttributeError(msg)
    return getattr(import_module(_LATER[name], __name__), name)


def __dir__() -> list[str]:
    return sorted({*globals(), *_LATER})
