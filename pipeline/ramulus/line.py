"""The stages in a row: the method's table of contents, read from top to bottom.

Everything here is pure; `step` is how the caller times, reports and stores the stages.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd

from ._settings import Settings, setting
from .analysis import Analysis, analyse_network
from .errors import UnusableInputError
from .flow.boundary import BoundarySettings
from .flow.cost import CostSettings
from .flow.viscosity import ViscositySettings
from .image.background import BackgroundSettings, noise_sd
from .image.enhance import EnhanceSettings, TubeMap, enhance
from .image.grid import working_grid
from .image.mask import Mask, Skeleton
from .image.segment import Segmented, SegmentSettings, segment
from .image.thin import ThinSettings, thin
from .network.centreline import CentrelineSettings, smooth
from .network.clean import CleanSettings, clean
from .network.gauge import Gauged, GaugeSettings, gauge
from .network.graph import CentrelineGraph
from .network.trace import trace
from .stack.open import checked_grey_values
from .stack.stack import Stack
from .tree.diameter_orders import OrderSettings
from .tree.junction_law import JunctionSettings
from .tree.root import RootSettings

__all__ = ["LineSettings", "Results", "analyse", "analyse_graph", "analyse_mask", "call"]

StepRunner = Callable[..., Any]


class LineSettings(Settings):
    """The settings of all stages."""

    background: BackgroundSettings = setting(BackgroundSettings(), "background map")
    enhance: EnhanceSettings = setting(EnhanceSettings(), "tube enhancement")
    segment: SegmentSettings = setting(SegmentSettings(), "segmentation")
    thin: ThinSettings = setting(ThinSettings(), "thinning")
    clean: CleanSettings = setting(CleanSettings(), "cleaning of the graph")
    centreline: CentrelineSettings = setting(CentrelineSettings(), "smoothing of the centrelines")
    gauge: GaugeSettings = setting(GaugeSettings(), "radii")
    root: RootSettings = setting(RootSettings(), "inlet")
    orders: OrderSettings = setting(OrderSettings(), "branching orders")
    junctions: JunctionSettings = setting(JunctionSettings(), "law of branching")
    boundary: BoundarySettings = setting(BoundarySettings(), "boundary conditions")
    viscosity: ViscositySettings = setting(ViscositySettings(), "viscosity")
    cost: CostSettings = setting(CostSettings(), "Murray's cost")


@dataclass(frozen=True, slots=True)
class Results:
    """All that the line finds for one sample."""

    graph: CentrelineGraph
    mask: Mask | None
    projections: dict[str, np.ndarray]
    tables: dict[str, pd.DataFrame]
    summary: dict[str, Any]
    facts: dict[str, Any]
    edits: list[dict[str, Any]]
    flow_settings: dict[str, Any]
    profiles: dict[str, Any]


def call(name: str, function: Callable[..., Any], *args: Any, **kwargs: Any) -> Any:
    """Run a stage; the plainest step runner."""
    del name
    return function(*args, **kwargs)


def analyse(
    stack: Stack, settings: LineSettings, *, region: np.ndarray | None = None, dark: bool = False,
    step: StepRunner = call,
) -> Results:  # fmt: skip
    """Measure a stack of grey values.

    Parameters
    ----------
    stack : Stack
        The image.
    region : (z, y, x) bool array, optional
        Where vessels are looked for.
    dark : bool
        Vessels are darker than the tissue.

    Raises
    ------
    UnusableInputError
        If the image cannot be used, or no vessel is found.
    """
    volume = step("read", read_bright, stack, dark)
    fine, grid_um, factors = step("grid", working_grid, volume, spacing_um=stack.spacing_um)
    tubes = step("enhance", enhance, fine, spacing_um=grid_um, settings=settings.enhance)
    area = None if region is None else finer_region(region, factors)
    found = step(
        "segment",
        segment,
        tubes,
        settings=settings.segment,
        background=settings.background,
        region=area,
    )
    graph, edits = centrelines(
        found.mask,
        stack,
        settings,
        step,
        Greys(fine, grid_um, found.background, found.background_level),
    )
    gauged = step(
        "gauge", gauge, graph, volume, spacing_um=stack.spacing_um, settings=settings.gauge
    )
    analysis = step(
        "network", analyse_network, gauged.graph, settings, blur_um=gauged.blur.sigma_xy_um
    )
    facts = image_facts(stack, volume, found, tubes, gauged, factors)
    mask = Mask(
        np.ascontiguousarray(found.mask.inside[:: factors[0], :: factors[1], :: factors[2]]),
        stack.spacing_um,
    )
    return _results(
        stack, analysis, mask, edits, facts, projections_of(volume), _profiles(found, volume)
    )


def analyse_mask(stack: Stack, settings: LineSettings, *, step: StepRunner = call) -> Results:
    """Measure a mask: voxels above zero are lumen; radii are area-equivalent.

    Raises
    ------
    UnusableInputError
        If the mask is empty or full.
    """
    inside = step("read", read_mask, stack)
    fine, grid_um, _ = step(
        "grid", working_grid, inside.astype(np.float32), spacing_um=stack.spacing_um
    )
    graph, edits = centrelines(Mask(fine >= 0.5, grid_um), stack, settings, step)
    gauged = step("gauge", gauge, graph, inside.astype(np.float32), spacing_um=stack.spacing_um,
                  settings=settings.gauge, known_levels=True)  # fmt: skip
    analysis = step(
        "network", analyse_network, gauged.graph, settings, blur_um=gauged.blur.sigma_xy_um
    )
    facts = {
        "anisotropy": max(stack.spacing_um) / min(stack.spacing_um),
        "mask_fraction": float(inside.mean()),
    }
    facts |= _gauge_facts(gauged)
    return _results(
        stack, analysis, Mask(inside, stack.spacing_um), edits, facts, projections_of(inside), {}
    )


def analyse_graph(
    graph: CentrelineGraph, settings: LineSettings, *, name: str, step: StepRunner = call
) -> Results:
    """Analyse a graph whose radii are given: orders, cube law and flow; no image is needed."""
    del name
    if not np.isfinite(graph.point_radius_um).any():
        msg = "graph: found no radius at any point, expected lumen radii in um"
        raise UnusableInputError(msg)
    analysis = step("network", analyse_network, graph, settings, blur_um=0.0)
    return _results(None, analysis, None, [], {}, {}, {})


@dataclass(frozen=True, slots=True)
class Greys:
    """Grey values on the working grid and the background on one of its levels."""

    volume: np.ndarray
    grid_um: tuple[float, float, float]
    background: np.ndarray
    level: int

    def contrast_at(self, position_um: np.ndarray) -> np.ndarray:
        """(k,) height of the grey values over the background at (k, 3) positions."""
        from scipy.ndimage import map_coordinates  # noqa: PLC0415 - heavy to import

        index = np.asarray(position_um) / np.asarray(self.grid_um)
        coarse = (index + 0.5) * 0.5**self.level - 0.5
        grey = map_coordinates(self.volume, index.T, output=np.float64, order=1, mode="nearest")
        return grey - map_coordinates(
            self.background, coarse.T, output=np.float64, order=1, mode="nearest"
        )


def clean_with_greys(
    graph: CentrelineGraph, greys: Greys | None, settings: CleanSettings
) -> tuple[CentrelineGraph, list[dict[str, Any]]]:
    """Clean a graph; the grey values, where given, decide on gaps and contacts too."""
    return clean(graph, settings=settings, contrast_at=greys.contrast_at if greys else None)


def centrelines(
    mask: Mask, stack: Stack, settings: LineSettings, step: StepRunner, greys: Greys | None = None
) -> tuple[CentrelineGraph, list[dict[str, Any]]]:
    """Thin, trace, clean and smooth."""
    skeleton: Skeleton = step("thin", thin, mask, settings=settings.thin)
    raw: CentrelineGraph = step("trace", trace, skeleton)
    raw = raw.replace(spacing_um=stack.spacing_um, extent_um=stack.size_um)
    graph, edits = step("clean", clean_with_greys, raw, greys, settings.clean)
    return step(
        "smooth", smooth, graph, grid_um=mask.spacing_um, settings=settings.centreline
    ), edits


def read_bright(stack: Stack, dark: bool) -> np.ndarray:  # noqa: FBT001 - a fact of the image
    """Read the voxels, check them, and turn dark vessels bright."""
    volume = checked_grey_values(stack.read(), name=stack.name)
    if min(volume.shape) < 4:
        msg = f"{stack.name}: found {volume.shape} voxels, expected at least 4 along each axis"
        raise UnusableInputError(msg)
    if volume.dtype not in (np.uint8, np.uint16, np.int16, np.float32):
        volume = volume.astype(np.float32)
    if not dark:
        return volume
    return (volume.max() - volume.astype(np.float32)).astype(np.float32)


def read_mask(stack: Stack) -> np.ndarray:
    """Read a mask as bool; an empty or a full one is refused."""
    inside = stack.read() > 0
    share = float(inside.mean())
    if share in (0.0, 1.0):
        msg = f"{stack.name}: the mask is {'empty' if share == 0 else 'vessel everywhere'}, expected lumen and background"
        raise UnusableInputError(msg)
    return inside


def finer_region(region: np.ndarray, factors: tuple[int, int, int]) -> np.ndarray:
    """Carry a region to the working grid: a finer voxel takes the value of the nearest plane."""
    for axis, factor in enumerate(factors):
        if factor > 1:
            count = (region.shape[axis] - 1) * factor + 1
            region = np.take(region, np.rint(np.arange(count) / factor).astype(int), axis=axis)
    return region


def image_facts(
    stack: Stack,
    volume: np.ndarray,
    found: Segmented,
    tubes: TubeMap,
    gauged: Gauged,
    factors: tuple[int, int, int],
) -> dict[str, Any]:
    """What the QC flags judge about the image and its segmentation."""
    del tubes
    noise = noise_sd(volume)
    top = volume.max()
    contrast = (
        float(np.median(gauged.stations["contrast"][gauged.stations["good"]]))
        if gauged.stations["good"].any()
        else 0.0
    )
    del factors
    return {
        "anisotropy": max(stack.spacing_um) / min(stack.spacing_um),
        "saturated_share": float(np.count_nonzero(volume == top)) / volume.size,
        "noise_sd": noise, "contrast": contrast,
        "contrast_to_noise": contrast / noise if noise > 0 else None,
        "attenuation_ratio": attenuation_ratio(gauged.stations),
        **found.facts, **_gauge_facts(gauged),
    }  # fmt: skip


def attenuation_ratio(stations: dict[str, np.ndarray]) -> float | None:
    """Contrast of the dimmest fifth of the depth over that of the brightest, by fitted contrasts.

    Fifths with fewer than ten fitted places are left out; None where fewer than two are left.
    """
    good = stations["good"]
    z, contrast = stations["position_um"][good, 0], stations["contrast"][good]
    if len(z) < 20 or np.ptp(z) == 0:
        return None
    fifth = np.minimum(((z - z.min()) / np.ptp(z) * 5).astype(int), 4)
    medians = [float(np.median(contrast[fifth == k])) for k in range(5) if (fifth == k).sum() >= 10]
    return min(medians) / max(medians) if len(medians) >= 2 and max(medians) > 0 else None


def _gauge_facts(gauged: Gauged) -> dict[str, Any]:
    facts: dict[str, Any] = dict(gauged.facts)
    facts["unfitted_share"] = 1.0 - facts["stations_fitted"]
    facts["blur_assumed"] = float(gauged.blur.origin == "assumed")
    facts["blur_origin"] = gauged.blur.origin
    return facts


def projections_of(volume: np.ndarray) -> dict[str, np.ndarray]:
    """Maximum projections along z, y, x."""
    return {name: volume.max(axis=axis).astype(np.float32) for axis, name in enumerate("zyx")}


def _profiles(found: Segmented, volume: np.ndarray) -> dict[str, Any]:
    step = max(1, len(found.reference_contrast) // volume.shape[0])
    return {
        "contrast_by_plane": found.reference_contrast[::step].tolist(),
        "mean_by_plane": volume.reshape(volume.shape[0], -1).mean(axis=1).tolist(),
    }


def _results(stack, analysis: Analysis, mask, edits, facts, projections, profiles):  # noqa: ANN001, ANN202
    summary: dict[str, Any] = {}
    if stack is not None:
        summary |= {
            "sample": stack.name, "spacing_um": list(stack.spacing_um),
            "spacing_origin": list(stack.spacing_origin), "shape": list(stack.shape),
        }  # fmt: skip
    if mask is not None:
        summary["vessel_volume_fraction"] = float(mask.inside.mean())
        volume_mm2_per_um3 = float(np.prod(stack.size_um))
        analysis.summary["length_density_per_mm2"] = (
            analysis.summary["total_length_um"] / volume_mm2_per_um3 * 1e6
        )
    bridged = sum(e["op"] == "join" for e in edits)
    spurs = sum(e.get("step") == "spur" for e in edits)
    facts = {**facts, **analysis.facts, "bridged": float(bridged)}
    facts["spur_share"] = spurs / max(analysis.graph.n_segments, 1)
    return Results(
        analysis.graph, mask, projections, analysis.tables, summary | analysis.summary, facts, edits,
        analysis.flow_settings, profiles,
    )  # fmt: skip
