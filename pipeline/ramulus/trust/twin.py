"""The twin: a synthetic stack drawn from the sample's own graph and measured by the same line.

A parametric bootstrap that starts at the voxels: what the line gets wrong on the twin, whose truth is
known, it gets wrong on the sample. By default a crop of bounded size around the most vessel length is
drawn; its blur, contrast, background and noise are those measured in the sample.
"""

from dataclasses import dataclass
from typing import Any, Literal

import numpy as np
from scipy.spatial import cKDTree

from .._settings import Settings, setting
from ..errors import RamulusError
from ..line import LineSettings, analyse
from ..network.graph import NODE_KINDS, CentrelineGraph
from ..phantom.draw import DrawSettings, draw

__all__ = ["Twin", "TwinSettings", "run_twin"]

_CLASSES = (0.0, 1.2, 2.0, 3.0, 5.0, 8.0, np.inf)


class TwinSettings(Settings):
    """Settings of the twin."""

    mode: Literal["off", "crop", "full"] = setting(
        "crop", "no twin, a crop of bounded size, or the whole sample", source="design"
    )
    draws: int = setting(2, "draws with different noise", ge=1, le=50)
    crop_voxels: int = setting(600_000, "largest crop", unit="voxels", ge=50_000)
    seed: int = setting(7, "seed of the first draw", ge=0)


@dataclass(frozen=True, slots=True)
class Twin:
    """What the line made of the twin.

    `classes` holds a row for each class of true radius (in finest voxels): n, median relative error,
    90 % of absolute errors. Figures are means over draws; `reason` says why there is no twin.
    """

    classes: list[dict[str, float]]
    radius_bias: float | None
    radius_spread: float | None
    junction_recall: float | None
    junction_precision: float | None
    length_ratio: float | None
    smallest_resolved_radius_um: float | None
    draws: int
    shape: tuple[int, int, int]
    reason: str = ""

    def to_json(self) -> dict[str, Any]:
        """Return the record for summary.json and the report."""
        return {
            "radius_classes": self.classes, "radius_bias": self.radius_bias, "radius_spread": self.radius_spread,
            "junction_recall": self.junction_recall, "junction_precision": self.junction_precision,
            "length_ratio": self.length_ratio, "draws": self.draws, "shape": list(self.shape),
            "smallest_resolved_radius_um": self.smallest_resolved_radius_um, "reason": self.reason,
        }  # fmt: skip


def run_twin(
    graph: CentrelineGraph, *, shape: tuple[int, int, int], facts: dict[str, Any], line: LineSettings,
    settings: TwinSettings,
) -> Twin:  # fmt: skip
    """Draw the twin, measure it, and compare.

    Parameters
    ----------
    graph : CentrelineGraph
        The measured graph with radii, its spacing and extent.
    shape : tuple of int
        Voxels of the sample's stack along z, y, x.
    facts : dict
        `blur_xy_um`, `blur_z_um`, `contrast`, `noise_sd` of the sample.
    """
    if settings.mode == "off":
        return _none("switched off (twin.mode)")
    known = np.isfinite(graph.segment_radius_um())
    truth = graph.select_segments(known)
    if not truth.n_segments:
        return _none("no segment has a radius")
    box = _whole(shape) if settings.mode == "full" else _crop(truth, shape, settings.crop_voxels)
    truth, extent = _inside_box(truth, box)
    if not truth.n_segments:
        return _none("no vessel lies in the crop")
    look = _look(truth, facts)
    rows, ratios = [], []
    for k in range(settings.draws):
        stack = draw(truth, settings=look, seed=settings.seed + k, shape=extent, name="twin")
        try:
            measured = analyse(stack, line).graph
        except RamulusError as failed:
            return _none(f"the twin could not be measured: {failed}")
        rows.append(_radius_errors(measured, truth))
        ratios.append(_found(measured, truth))
    errors = np.concatenate(rows)
    return _summed(errors, np.array(ratios), truth, extent, settings)


def _none(reason: str) -> Twin:
    return Twin([], None, None, None, None, None, None, 0, (0, 0, 0), reason)


def _whole(shape: tuple[int, int, int]) -> tuple[np.ndarray, np.ndarray]:
    return np.zeros(3, dtype=int), np.asarray(shape)


def _crop(
    graph: CentrelineGraph, shape: tuple[int, int, int], limit: int
) -> tuple[np.ndarray, np.ndarray]:
    """Box of at most `limit` voxels, shaped like a cube in um, around the most vessel length."""
    full, spacing = np.asarray(shape), np.asarray(graph.spacing_um)
    if int(np.prod(full)) <= limit:
        return np.zeros(3, dtype=int), full
    side_um = (limit * float(np.prod(spacing))) ** (1 / 3)
    for _ in range(20):  # axes that are short leave their share to the others
        size = np.minimum(np.maximum(np.rint(side_um / spacing), 8), full).astype(int)
        if np.prod(size) > 0.9 * limit or (size == full).all():
            break
        side_um *= 1.08
    place = np.rint(graph.point_position_um / spacing).astype(int)
    weight = graph.point_weight_um()
    best, start = -1.0, np.zeros(3, dtype=int)
    steps = [
        np.unique(np.linspace(0, f - s, 5).astype(int)) for f, s in zip(full, size, strict=True)
    ]
    for z in steps[0]:
        for y in steps[1]:
            for x in steps[2]:
                low = np.array([z, y, x])
                inside = ((place >= low) & (place < low + size)).all(axis=1)
                total = float(weight[inside].sum())
                if total > best:
                    best, start = total, low
    return start, start + size


def _inside_box(
    graph: CentrelineGraph, box: tuple[np.ndarray, np.ndarray]
) -> tuple[CentrelineGraph, tuple[int, int, int]]:
    """Cut the segments at the box and move the origin to its first voxel."""
    spacing = np.asarray(graph.spacing_um)
    low, high = (box[0] - 0.5) * spacing, (box[1] - 0.5) * spacing
    size = tuple(int(n) for n in box[1] - box[0])
    lines, radii, ends, nodes = [], [], [], []
    number: dict[int, int] = {}

    def node_for(key: int | None, position: np.ndarray) -> int:
        if key is not None and key in number:
            return number[key]
        nodes.append(position)
        if key is not None:
            number[key] = len(nodes) - 1
        return len(nodes) - 1

    for segment in range(graph.n_segments):
        points = graph.points_of(segment)
        line, radius = graph.point_position_um[points], graph.point_radius_um[points]
        inside = ((line > low) & (line < high)).all(axis=1)
        edge = np.flatnonzero(np.diff(np.r_[False, inside, False].astype(int)))
        for first, last in zip(edge[::2].tolist(), edge[1::2].tolist(), strict=True):
            if last - first < 3:
                continue
            a = node_for(int(graph.segment_nodes[segment, 0]) if first == 0 else None, line[first])
            b = node_for(
                int(graph.segment_nodes[segment, 1]) if last == len(line) else None, line[last - 1]
            )
            lines.append(line[first:last] - low - 0.5 * spacing)
            radii.append(radius[first:last])
            ends.append((a, b))
    if not lines:
        return graph.select_segments(np.zeros(graph.n_segments, dtype=bool)), (
            size[0],
            size[1],
            size[2],
        )
    position = np.array(nodes) - low - 0.5 * spacing
    cut = CentrelineGraph.from_polylines(
        position, ends, lines, radii, spacing_um=graph.spacing_um,
        extent_um=tuple(float(n * s) for n, s in zip(size, spacing, strict=True)),
    )  # fmt: skip
    # Ends near the box's faces were cut by it.
    gap = np.minimum(position + 0.5 * spacing, np.asarray(cut.extent_um) - 0.5 * spacing - position)
    border = (gap <= 2 * spacing).any(axis=1) & (cut.node_degree() == 1)
    kind = np.where(border, NODE_KINDS.index("border"), cut.node_kind)
    return cut.replace(node_kind=kind.astype(np.int8)), (size[0], size[1], size[2])


def _look(graph: CentrelineGraph, facts: dict[str, Any]) -> DrawSettings:
    contrast = max(float(facts.get("contrast") or 0.0), 1e-6)
    noise = float(facts.get("noise_sd") or 0.0)
    spacing = np.asarray(graph.spacing_um)
    # The measured blur holds the voxel's averaging and the interpolation; the drawing adds the first.
    blur = np.array([facts["blur_z_um"], facts["blur_xy_um"], facts["blur_xy_um"]])
    sigma = np.sqrt(np.maximum(blur**2 - spacing**2 * (1 / 12 + 1 / 6), (0.1 * spacing) ** 2))
    return DrawSettings(
        sigma_um=tuple(float(s) for s in sigma), contrast=100.0, background=40.0,
        snr=min(contrast / noise, 1000.0) if noise > 0 else 0.0, dtype="float32",
    )  # fmt: skip


def _radius_errors(measured: CentrelineGraph, truth: CentrelineGraph) -> np.ndarray:
    """(k, 2) true radius in finest voxels and relative error, at measured points outside zones."""
    tree = cKDTree(truth.point_position_um)
    use = ~measured.point_in_zone & np.isfinite(measured.point_radius_um)
    distance, nearest = tree.query(measured.point_position_um[use])
    true = truth.point_radius_um[nearest]
    near = distance <= np.maximum(max(truth.spacing_um), 0.5 * true)
    voxel = min(truth.spacing_um)
    return np.stack(
        [true[near] / voxel, measured.point_radius_um[use][near] / true[near] - 1], axis=1
    )


def _found(measured: CentrelineGraph, truth: CentrelineGraph) -> tuple[float, float, float]:
    """Junction recall, junction precision and length ratio, away from the box's faces."""
    reach = 2 * max(truth.spacing_um)
    spots = [
        g.node_position_um[(g.node_degree() >= 3) & _off_faces(g.node_position_um, truth)]
        for g in (truth, measured)
    ]
    radius = np.nanmedian(truth.point_radius_um)
    limit = max(reach, 1.5 * float(radius))
    shares = []
    for mine, other in ((spots[0], spots[1]), (spots[1], spots[0])):
        if not len(mine):
            shares.append(np.nan)
        elif not len(other):
            shares.append(0.0)
        else:
            shares.append(float((cKDTree(other).query(mine)[0] <= limit).mean()))
    return (
        shares[0],
        shares[1],
        float(measured.segment_length_um().sum() / truth.segment_length_um().sum()),
    )


def _off_faces(position: np.ndarray, truth: CentrelineGraph) -> np.ndarray:
    spacing, extent = np.asarray(truth.spacing_um), np.asarray(truth.extent_um)
    margin = 2 * spacing + float(np.nanmedian(truth.point_radius_um))
    return ((position > margin) & (position < extent - spacing - margin)).all(axis=1)


def _summed(errors, ratios, truth, extent, settings):  # noqa: ANN001, ANN202
    classes = []
    smallest: float | None = None
    voxel = min(truth.spacing_um)
    for low, high in zip(_CLASSES[:-1], _CLASSES[1:], strict=True):
        mine = errors[(errors[:, 0] >= low) & (errors[:, 0] < high), 1]
        if len(mine) < 10:
            continue
        median, p90 = float(np.median(mine)), float(np.percentile(np.abs(mine), 90))
        classes.append({
            "low_voxels": low, "high_voxels": high if np.isfinite(high) else 1e9, "n": float(len(mine)),
            "median": median, "p90_absolute": p90,
        })  # fmt: skip
        if smallest is None and abs(median) <= 0.1 and p90 <= 0.25:
            smallest = float(max(low, errors[:, 0].min()) * voxel)
    with np.errstate(invalid="ignore"):
        mean = [float(v) if np.isfinite(v) else None for v in _nanmean(ratios)]
    return Twin(
        classes, float(np.median(errors[:, 1])) if len(errors) else None,
        float(np.percentile(np.abs(errors[:, 1]), 90)) if len(errors) else None, mean[0], mean[1], mean[2],
        smallest, settings.draws, extent,
    )  # fmt: skip


def _nanmean(values: np.ndarray) -> np.ndarray:
    known = np.isfinite(values)
    return np.where(
        known.any(axis=0),
        np.where(known, values, 0).sum(axis=0) / np.maximum(known.sum(axis=0), 1),
        np.nan,
    )
