"""What measuring a stack will take: working grid, time by stage, memory; from its header alone."""

from collections.abc import Sequence
from dataclasses import dataclass, replace
from math import prod

__all__ = ["Plan", "plan_of"]

_COARSE = 1.8  # as in image.grid: an axis this many times coarser is interpolated
_LIMIT = 6

# Seconds once, and seconds for a million voxels of the working grid: measured on two cores over
# phantoms of 0.5 to 17 million voxels (tests/benchmarks/bench_plan.py prints the table).
_STAGES = {
    "read": (0.0, 0.01), "grid": (0.0, 0.03), "enhance": (0.2, 0.4), "segment": (0.3, 0.6),
    "thin": (0.1, 0.05), "trace": (0.1, 0.01), "clean": (0.1, 0.01), "smooth": (0.1, 0.01),
    "gauge": (0.5, 1.0), "network": (1.0, 0.3), "twin": (6.0, 0.5), "report": (5.0, 0.5),
}  # fmt: skip
_MIB_ONCE, _BYTES_PER_VOXEL = 330.0, 40.0


@dataclass(frozen=True, slots=True)
class Plan:
    """The expected work.

    `grid` is the working grid's shape; `seconds` has a figure for each stage, in their order.
    """

    grid: tuple[int, int, int]
    seconds: dict[str, float]
    memory_gib: float

    @property
    def total_seconds(self) -> float:
        """Seconds over all stages."""
        return sum(self.seconds.values())

    def only(self, stages: Sequence[str]) -> "Plan":
        """Return the plan of these stages alone."""
        return replace(self, seconds={k: v for k, v in self.seconds.items() if k in stages})

    def share_before(self, stage: str) -> float:
        """Return the share of the expected time that lies before a stage; 0 for one not planned."""
        names = list(self.seconds)
        before = names[: names.index(stage)] if stage in names else []
        return sum(self.seconds[name] for name in before) / max(self.total_seconds, 1e-9)


def plan_of(
    shape: Sequence[int], spacing_um: Sequence[float], itemsize: int, *, without: Sequence[str] = ()
) -> Plan:
    """Return what a stack of this shape is expected to take.

    Parameters
    ----------
    shape : (3,) sequence of int
        Voxels along z, y, x.
    spacing_um : (3,) sequence of float
        Voxel edges along z, y, x.
    itemsize : int
        Bytes of a voxel.
    without : sequence of str
        Stages that are left out (twin, report).

    Examples
    --------
    >>> plan = plan_of((100, 256, 256), (3.0, 1.0, 1.0), 1, without=["twin"])
    >>> plan.grid, plan.share_before("read")
    ((298, 256, 256), 0.0)
    """
    factors = [_factor(size / min(spacing_um)) for size in spacing_um]
    z, y, x = ((n - 1) * f + 1 for n, f in zip(shape, factors, strict=True))
    millions = z * y * x / 1e6
    seconds = {
        name: once + each * millions
        for name, (once, each) in _STAGES.items()
        if name not in without
    }
    bytes_all = z * y * x * _BYTES_PER_VOXEL + prod(shape) * itemsize
    return Plan((z, y, x), seconds, _MIB_ONCE / 1024 + bytes_all / 2**30)


def _factor(ratio: float) -> int:
    return min(round(ratio), _LIMIT) if ratio >= _COARSE else 1
