"""A tiny stack, and a line that measures it in no time: its figures are those of a fixed tree."""

from functools import cache

import numpy as np
import tifffile

from ramulus.image.mask import Mask
from ramulus.line import LineSettings, Results, analyse_graph
from ramulus.network.graph import CentrelineGraph

SHAPE = (6, 20, 24)
SPACING_UM = (2.0, 1.0, 1.0)


def write_stack(path, *, seed=1, spacing_um=SPACING_UM, voxels=None):
    """Write an OME-TIFF of noise, with its spacing."""
    if voxels is None:
        voxels = np.random.default_rng(seed).integers(0, 200, SHAPE, dtype=np.uint8)
    sizes = {f"PhysicalSize{a}": um for a, um in zip("ZYX", spacing_um, strict=True)}
    units = {f"PhysicalSize{a}Unit": "µm" for a in "ZYX"}
    tifffile.imwrite(path, voxels, ome=True, metadata={"axes": "ZYX", **sizes, **units})
    return path


def fork():
    """A trunk that divides twice: five segments, two junctions."""
    nodes = [(4, 10, 0), (4, 10, 60), (4, 40, 90), (4, -20, 90), (4, 60, 130), (4, 25, 130)]
    ends = [(0, 1), (1, 2), (1, 3), (2, 4), (2, 5)]
    lines = [np.linspace(nodes[a], nodes[b], 9) for a, b in ends]
    radii = [np.full(9, r) for r in (6.0, 5.0, 4.5, 4.0, 3.9)]
    return CentrelineGraph.from_polylines(nodes, ends, lines, radii, spacing_um=SPACING_UM)


@cache
def results_of_fork():
    """All tables of the fork, made once: its resistance table takes a second."""
    return analyse_graph(fork(), LineSettings(), name="fork")


def analyse(stack, settings, *, region=None, dark=False, step):
    """Take the stages of the line's names; each leaves its mark on the last one's value."""
    del region
    volume = step("read", _read, stack, dark)
    tubes = step("enhance", _stage, volume, settings=settings.enhance)
    found = step("segment", _stage, tubes, settings=settings.segment)
    gauged = step("gauge", _stage, found, settings=settings.gauge)
    figure = step("network", _figure, gauged, settings)
    return _results(stack, figure, volume)


def analyse_mask(stack, settings, *, step):
    volume = step("read", _read, stack)
    return _results(stack, step("network", _figure, volume.astype(float), settings), volume)


CALLS = []


def _read(stack, dark=False):
    volume = stack.read()
    return volume.max() - volume if dark else volume


def _stage(values, *, settings):
    CALLS.append(type(settings).__name__)
    share = sum(v for v in settings.model_dump().values() if isinstance(v, float))
    return values * 0.5 + share


def _figure(values, settings):
    CALLS.append("network")
    return float(values.mean()) + settings.boundary.inlet_pressure_pa


def _results(stack, figure, volume):
    known = results_of_fork()
    summary = known.summary | {
        "sample": stack.name, "shape": list(stack.shape), "spacing_um": list(stack.spacing_um),
        "spacing_origin": list(stack.spacing_origin), "figure": figure,
        "total_length_um": known.summary["total_length_um"] + figure,
    }  # fmt: skip
    facts = {"saturated_share": 0.5, "blur_xy_um": 1.0, "blur_z_um": 1.0}
    return Results(
        known.graph, Mask(np.asarray(volume) > 100, stack.spacing_um), {}, known.tables, summary,
        facts, [{"op": "remove", "author": "auto"}], known.flow_settings, {},
    )  # fmt: skip
