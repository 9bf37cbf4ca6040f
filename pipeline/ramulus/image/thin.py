"""Distance-ordered homotopic thinning: the mask's centreline voxels with its topology.

Simple voxels are deleted in the order of (distance to the wall in 1/16 voxels, hash of the place on
the grid, place), so the result depends on the mask alone: not on blocks, threads or the order of a
scan (Pudney 1998 CVIU 72:404; Fouard 2006 IEEE TMI 25:1319). Anchors hold the ends: the widest
voxel of every cap that a face of the volume cuts, and the voxels farthest from the component's widest
place along the lumen. Every anchor that is only a bump of the wall leaves a spur no longer than the
radius, which the graph's cleaning removes.
"""

import numpy as np

from .._settings import Settings, setting
from . import _thin_kernels as kernels
from .distance import distance_um
from .mask import Mask, Skeleton

__all__ = ["ThinSettings", "thin"]


class ThinSettings(Settings):
    """Settings of the thinning."""

    tip_reach: float = setting(
        1.0, "of two tips closer than this many radii, the farther one along the lumen is kept",
        unit="radii", ge=0, source="own phantom study",
    )  # fmt: skip


def thin(mask: Mask, *, settings: ThinSettings) -> Skeleton:
    """Return the centreline voxels of a mask.

    The topology is the mask's: 26-connected components, tunnels and cavities keep their numbers.

    Parameters
    ----------
    mask : Mask
        The lumen, on voxels that are nearly cubes.

    Returns
    -------
    Skeleton
        Voxels in raster order with their distance to the background.
    """
    distance = distance_um(mask.inside, spacing_um=mask.spacing_um)
    voxels = np.argwhere(mask.inside)
    depth = distance[mask.inside]
    if not np.isfinite(depth).all():
        depth = np.where(np.isfinite(depth), depth, np.float32(min(mask.spacing_um)))
    linear = np.ravel_multi_index(voxels.T, mask.inside.shape)
    ties = _hashed(linear)
    padded = np.pad(mask.inside, 1)
    inner = voxels + 1
    anchored = _anchors(mask, padded, inner, depth, ties, settings)
    layer = np.floor(depth * (16.0 / min(mask.spacing_um))).astype(np.int64)
    order = np.lexsort((linear, ties, layer))
    kernels.delete_in_order(padded, inner[order], anchored[order])
    left = padded[inner[:, 0], inner[:, 1], inner[:, 2]]
    return Skeleton(
        voxels[left], depth[left].astype(np.float32), mask.inside.shape, mask.spacing_um, mask.origin_um
    )


def _hashed(linear: np.ndarray) -> np.ndarray:
    """Mix the bits of the place on the whole grid (the finaliser of SplitMix64)."""
    x = linear.astype(np.uint64)
    x = (x ^ (x >> np.uint64(30))) * np.uint64(0xBF58476D1CE4E5B9)
    x = (x ^ (x >> np.uint64(27))) * np.uint64(0x94D049BB133111EB)
    return (x ^ (x >> np.uint64(31))) >> np.uint64(1)


def _anchors(mask, padded, inner, depth, ties, settings):  # noqa: ANN001, ANN202
    import cc3d  # noqa: PLC0415 - heavy to import

    index = np.zeros(padded.shape, np.int32)
    index[inner[:, 0], inner[:, 1], inner[:, 2]] = np.arange(1, len(inner) + 1)
    labels = cc3d.connected_components(mask.inside.view(np.uint8).copy(), connectivity=26)[mask.inside]
    by_depth = np.lexsort((ties, -depth, labels))
    first = np.r_[True, np.diff(labels[by_depth]) != 0]
    centres = by_depth[first]
    steps = np.rint(16 * np.linalg.norm(_offsets() * mask.spacing_um, axis=1) / min(mask.spacing_um))
    geodesic = np.empty(len(inner), np.int64)
    kernels.geodesic_into(padded, index, inner, centres, steps.astype(np.int64), geodesic)
    candidate = np.zeros(len(inner), bool)
    kernels.farthest_tips(index, inner, geodesic, ties, candidate)
    tip = np.zeros(len(inner), bool)
    on_face = _caps(mask, index, depth, ties, tip)
    candidate &= ~on_face
    order = np.flatnonzero(candidate)
    order = order[np.lexsort((ties[order], -geodesic[order]))]
    reach = [
        np.ceil(settings.tip_reach * depth / s).astype(np.int64) + 1 for s in mask.spacing_um
    ]
    kernels.sparse_tips(index, inner, order, candidate, reach[0], reach[1], reach[2], tip)
    return tip


def _offsets() -> np.ndarray:
    return np.array([(z, y, x) for z in (-1, 0, 1) for y in (-1, 0, 1) for x in (-1, 0, 1)])


def _caps(mask, index, depth, ties, tip):  # noqa: ANN001, ANN202
    """Mark the widest voxel of each cap on a face as a tip; return which voxels lie on faces."""
    import cc3d  # noqa: PLC0415 - heavy to import

    on_face = np.zeros(len(depth), bool)
    number = index[1:-1, 1:-1, 1:-1]
    for axis in range(3):
        for side in {0, mask.inside.shape[axis] - 1}:
            face = np.take(mask.inside, side, axis=axis)
            if not face.any():
                continue
            labels = cc3d.connected_components(np.ascontiguousarray(face[None]).astype(np.uint8), connectivity=26)[0][face]
            members = np.take(number, side, axis=axis)[face].astype(np.int64) - 1
            on_face[members] = True
            order = np.lexsort((ties[members], -depth[members], labels))
            first = np.r_[True, np.diff(labels[order]) != 0]
            tip[members[order[first]]] = True
    return on_face
