"""Import an optional dependency, or name the extra that brings it."""

from importlib import import_module
from types import ModuleType

from .errors import UnusableInputError

__all__ = ["require"]


def require(module: str, *, extra: str, purpose: str) -> ModuleType:
    """Return the module, or say in one line how to install it."""
    try:
        return import_module(module)
    except ImportError as absent:
        msg = f"{purpose} needs the package {module!r}: pip install 'ramulus[{extra}]'"
        raise UnusableInputError(msg) from absent
