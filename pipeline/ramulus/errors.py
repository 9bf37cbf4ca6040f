"""The errors that ramulus raises on purpose; the exit status follows from the class."""

__all__ = ["RamulusError", "SpacingError", "UnusableInputError", "WorkFailedError"]


class RamulusError(Exception):
    """Base of every error that carries one clear line for the user."""

    exit_status = 1


class UnusableInputError(RamulusError, ValueError):
    """The request or the input cannot be used: names the parameter or file, the value, a way out."""

    exit_status = 2


class SpacingError(UnusableInputError):
    """The voxel spacing is absent, contradictory or impossible."""


class WorkFailedError(RamulusError, RuntimeError):
    """The input was usable, the work on it failed."""

    exit_status = 1
