"""Thinning of a mask to centreline voxels that keep its topology."""

from dataclasses import dataclass, replace

import numpy as np

from .._settings import Settings, setting
from ..errors import UnusableInputError
from ._bit_grid import BitGrid
from ._thin_kernels import (
    addresses_of_keys,
    erode,
    label_sets,
    levels_of_keys,
    order_keys,
    set_bits,
    strip,
)
from ._tip_kernels import accept_tips, blunt_ends, geodesic, run_out
from .distance import vessel_voxels
from .mask import Mask, Skeleton

__all__ = ["ThinSettings", "thin", "without_corners"]

_LEVELS_PER_VOXEL = 16
# A round vessel cut at 75 degrees to its axis leaves a cap four times its cross-section.
_LONGEST_CAP = 4.0
# How far from a tip its axis' end is looked for, in radii.
_END_REACH = 3.0


class ThinSettings(Settings):
    """How vessel ends are told from bumps of the wall."""

    tip_protrusion: float = setting(
        1.0,
        "a blind end is kept when it stands out from its parent's inscribed ball by this many of "
        "its own radii (or half the parent's, if that is more)",
        source="common practice, no source",
        ge=0,
    )


def thin(mask: Mask, *, settings: ThinSettings | None = None) -> Skeleton:
    """Thin a mask to one-voxel centrelines with the same components, loops and cavities.

    Distance-ordered homotopic thinning (Pudney 1998, Comput Vis Image Underst 72:404-413): simple
    voxels are removed in order of their distance to the background, so that what stays is centred
    whatever the voxels' anisotropy. The order is total (distance in sixteenths of the finest voxel
    edge, then a hash of the voxel's place on the whole grid that no two voxels share), so the
    outcome depends neither on the scanning direction nor on how a volume is cut into blocks.

    Ends are found on a first skeleton that keeps every line end: caps that the volume's faces cut,
    and tips that protrude (`settings.tip_protrusion`), judged from the longest geodesic path to the
    shortest. They alone are then held fast. A free end is run on along its axis to the lumen's end.

    Parameters
    ----------
    mask : Mask
        Vessel voxels; there must be background.
    settings : ThinSettings, optional
        See there.

    Returns
    -------
    Skeleton
        At least one voxel for every component, in raster order.

    Raises
    ------
    UnusableInputError
        If every voxel is inside.

    Examples
    --------
    >>> inside = np.zeros((7, 7, 30), dtype=bool)
    >>> inside[2:5, 2:5, :] = True
    >>> thin(Mask(inside, (1.0, 1.0, 1.0))).voxels.shape
    (30, 3)
    """
    settings = settings or ThinSettings()
    if mask.inside.all():
        msg = f"mask: all {mask.inside.size} voxels are inside, expected vessels in a background"
        raise UnusableInputError(msg)
    field = _Field.of(mask)
    words = field.grid.words(field.grid.address(field.linear))
    caps = _cut_caps(field, mask.inside)
    keys = field.keys(field.linear, field.distance_um)
    first = field.eroded(words, keys, field.keys_of(caps), keep_ends=True)
    whole, field = field, field.restricted(first)
    lines = field.lines(first)
    caps = _caps_across(lines, caps)
    core = field.stripped(words, lines, np.zeros(len(first), dtype=bool), keep_ends=False)
    set_bits(words, first)
    ends = _ends(lines, mask, caps, core, settings.tip_protrusion)
    left = field.stripped(words, lines, ends, keep_ends=False)
    address = _run_out(whole, mask.inside, words, first[left], caps)
    return Skeleton(
        field.grid.index(address), whole.radius_um(address), field.grid.shape, mask.spacing_um,
        mask.origin_um,
    )  # fmt: skip


def without_corners(skeleton: Skeleton) -> Skeleton:
    """Return a skeleton without the voxels that neither its topology nor a line's end needs.

    `thin` leaves none but at cut caps; skeletons from elsewhere have them where a path turns by
    way of a face neighbour.

    Parameters
    ----------
    skeleton : Skeleton
        Any set of lines.

    Returns
    -------
    Skeleton
        Its voxels in raster order.

    Examples
    --------
    >>> corner = np.array([[1, 1, 1], [1, 1, 2], [1, 1, 3], [1, 2, 3], [1, 3, 3]])
    >>> bent = Skeleton(corner, np.ones(5, np.float32), (3, 5, 5), (1.0, 1.0, 1.0))
    >>> without_corners(bent).voxels.tolist()
    [[1, 1, 1], [1, 1, 2], [1, 2, 3], [1, 3, 3]]
    """
    grid = BitGrid(skeleton.shape)
    linear = grid.linear(np.asarray(skeleton.voxels, dtype=np.int64))
    rising = np.argsort(linear)
    field = _Field(
        linear[rising], skeleton.distance_um[rising], grid, skeleton.spacing_um, skeleton.origin_um
    )
    address = grid.address(field.linear)
    nothing = np.zeros(len(address), dtype=bool)
    left = field.stripped(grid.words(address), field.lines(address), nothing, keep_ends=True)
    address = address[left]
    return Skeleton(
        grid.index(address), field.radius_um(address), grid.shape, skeleton.spacing_um,
        skeleton.origin_um,
    )  # fmt: skip


@dataclass(frozen=True, slots=True)
class _Field:
    """The vessel voxels in raster order, their distances, and their grid of bits."""

    linear: np.ndarray
    distance_um: np.ndarray
    grid: BitGrid
    spacing_um: tuple[float, float, float]
    origin_um: tuple[float, float, float]

    @classmethod
    def of(cls, mask: Mask) -> "_Field":
        voxels = vessel_voxels(mask.inside, spacing_um=mask.spacing_um)
        nz, ny, nx = mask.inside.shape
        grid = BitGrid((nz, ny, nx))
        return cls(voxels.linear, voxels.distance_um, grid, mask.spacing_um, mask.origin_um)

    def restricted(self, address: np.ndarray) -> "_Field":
        """Return the field of some of the voxels, given by rising address."""
        linear = self.grid.linear(self.grid.index(address))
        return replace(self, linear=linear, distance_um=self.radius_um(address))

    def radius_um(self, address: np.ndarray) -> np.ndarray:
        """Return the distance to the background of voxels given by address."""
        linear = self.grid.linear(self.grid.index(address))
        return self.distance_um[np.searchsorted(self.linear, linear)]

    def keys(self, linear: np.ndarray, distance_um: np.ndarray) -> np.ndarray:
        """Return a number for each voxel, no two alike: distance first, then the hash."""
        _, ny, nx = self.grid.shape
        level_um = min(self.spacing_um) / _LEVELS_PER_VOXEL
        keys: np.ndarray = order_keys(linear, distance_um, level_um, ny, nx)
        return keys

    def keys_of(self, address: np.ndarray) -> np.ndarray:
        """Return the keys of voxels given by address."""
        return self.keys(self.grid.linear(self.grid.index(address)), self.radius_um(address))

    def eroded(
        self, words: np.ndarray, keys: np.ndarray, held_keys: np.ndarray, *, keep_ends: bool
    ) -> np.ndarray:
        """Remove simple voxels by rising key; return the addresses that stay, rising."""
        keys.sort()
        held = np.zeros(len(keys), dtype=bool)
        held[np.searchsorted(keys, held_keys)] = True
        _, ny, nx = self.grid.shape
        row_words, plane_words = self.grid.row_words, self.grid.plane_words
        address = addresses_of_keys(keys, ny, nx, row_words * 32)
        kept = erode(words, address, levels_of_keys(keys), held, keep_ends, row_words, plane_words)
        return np.sort(address[:kept])

    def stripped(
        self, words: np.ndarray, lines: "_Lines", held: np.ndarray, *, keep_ends: bool
    ) -> np.ndarray:
        """Remove simple voxels of a set of lines, all of them set, but those held."""
        left: np.ndarray = strip(
            words, lines.address, np.argsort(self.keys_of(lines.address)), lines.start,
            lines.neighbour, held, keep_ends, self.grid.row_words, self.grid.plane_words,
        )  # fmt: skip
        return left

    def lines(self, address: np.ndarray) -> "_Lines":
        """Return the voxels of these rising addresses as lines."""
        start, neighbour = self.grid.neighbours(address)
        position_um = self.grid.index(address) * np.array(self.spacing_um)
        return _Lines(address, start, neighbour, position_um, self.radius_um(address))


@dataclass(frozen=True, slots=True)
class _Lines:
    """Voxels of a thinned set by rising address, with what is known of each."""

    address: np.ndarray
    start: np.ndarray
    neighbour: np.ndarray
    position_um: np.ndarray
    radius_um: np.ndarray

    @property
    def degree(self) -> np.ndarray:
        """Number of neighbours of each voxel."""
        return np.diff(self.start)

    def where(self, address: np.ndarray) -> np.ndarray:
        """Mark the voxels that have one of these addresses."""
        return np.isin(self.address, address)


def _cut_caps(field: _Field, inside: np.ndarray) -> np.ndarray:
    """Return the addresses of voxels at which the volume's faces cut a vessel across.

    One voxel for each connected patch of vessel on the faces: of its voxels that are nearly as far
    from the background as any, the one nearest to their centroid. A patch too long for its width
    is a vessel cut along, which does not end there.
    """
    index = _on_faces(inside)
    address = field.grid.address(field.grid.linear(index))
    start, neighbour = field.grid.neighbours(address)
    patch, count = label_sets(start, neighbour, np.ones(len(address), dtype=bool))
    size = np.array(inside.shape)
    radius_um = field.radius_um(address).astype(np.float64)
    spacing = np.array(field.spacing_um)
    faces = ((index == 0) | (index == size - 1)) & (size > 2)
    area_um2 = np.bincount(patch, (faces * (spacing.prod() / spacing)).sum(axis=1), count)
    widest_um = np.zeros(count)
    np.maximum.at(widest_um, patch, radius_um)
    across = area_um2 <= _LONGEST_CAP * np.pi * widest_um**2
    inner = radius_um >= 0.9 * widest_um[patch]
    position_um = index * spacing
    weight = np.bincount(patch, inner, count)
    centre_um = np.stack([np.bincount(patch, inner * p, count) / weight for p in position_um.T], 1)
    off_um2 = np.where(inner, ((position_um - centre_um[patch]) ** 2).sum(axis=1), np.inf)
    order = np.lexsort((np.arange(len(patch)), off_um2, patch))
    _, first = np.unique(patch[order], return_index=True)
    return address[order[first]][across]


def _caps_across(lines: _Lines, caps: np.ndarray) -> np.ndarray:
    """Return the caps that end a line at nearly its full radius.

    A lumen's rounded side or tip that only touches the face narrows towards it instead.
    """
    place = np.searchsorted(lines.address, caps)
    end, _ = blunt_ends(
        place, lines.start, lines.neighbour, lines.position_um, lines.radius_um, _END_REACH
    )
    across: np.ndarray = caps[end == place]
    return across


def _on_faces(inside: np.ndarray) -> np.ndarray:
    """Return the (n, 3) indices of vessel voxels on the faces of axes longer than two voxels."""
    faces = [
        np.insert(np.argwhere(inside.take(end, axis)), axis, end, axis=1)
        for axis, size in enumerate(inside.shape)
        if size > 2
        for end in (0, size - 1)
    ]
    return np.unique(np.concatenate([np.zeros((0, 3), dtype=np.int64), *faces]), axis=0)


def _ends(
    lines: _Lines, mask: Mask, caps: np.ndarray, in_core: np.ndarray, protrusion: float
) -> np.ndarray:
    """Return which voxels of the first lines are to be held: vessel ends, and places of blobs.

    Every line end hangs by a tree on the core: the loops, or one voxel in a component without
    loops. Such a component is measured from the end that lies farthest from that voxel instead, and
    if no end stands out its widest voxel is kept.
    """
    is_cap = lines.where(caps)
    label, count = label_sets(lines.start, lines.neighbour, in_core)
    alone = in_core & (np.bincount(label[in_core], minlength=count)[label] == 1)
    from_core_um, _, core_of = _geodesic(lines, in_core)
    hanging = alone[core_of]
    far = _greatest(from_core_um, core_of, hanging)
    is_far = _marks(len(in_core), far)
    marked = (in_core & ~alone) | is_far
    distance_um, before, source = _geodesic(lines, marked)
    tips = np.flatnonzero(((lines.degree == 1) | is_cap) & ~marked)
    tips = tips[np.lexsort((tips, -distance_um[tips], ~is_cap[tips]))]
    accepted = accept_tips(
        tips, is_cap[tips], is_far, distance_um, before, lines.start, lines.neighbour,
        lines.position_um, lines.radius_um, marked, mask.inside, np.array(mask.spacing_um),
        protrusion,
    )  # fmt: skip
    measured_from = np.intersect1d(far, source[tips[accepted]])
    blobs = hanging & ~np.isin(source, measured_from)
    widest = _greatest(lines.radius_um, core_of, blobs)
    return _marks(len(in_core), tips[accepted], measured_from, widest)


def _geodesic(lines: _Lines, sources: np.ndarray) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    """Return the distance along the lines from marked voxels, the voxel before, and the source."""
    distance_um, before, source = geodesic(
        lines.start, lines.neighbour, lines.position_um, np.flatnonzero(sources)
    )
    return distance_um, before, source


def _greatest(values: np.ndarray, group: np.ndarray, member: np.ndarray) -> np.ndarray:
    """Return, for each group, the member with the greatest value (of equals the last)."""
    members = np.flatnonzero(member)
    order = members[np.lexsort((members, values[members], group[members]))]
    is_last = np.append(np.diff(group[order]) != 0, True)[: len(order)]
    last: np.ndarray = order[is_last]
    return last


def _marks(size: int, *places: np.ndarray) -> np.ndarray:
    marks = np.zeros(size, dtype=bool)
    marks[np.concatenate(places)] = True
    return marks


def _run_out(
    field: _Field, inside: np.ndarray, words: np.ndarray, address: np.ndarray, caps: np.ndarray
) -> np.ndarray:
    """Lead each free end straight along its vessel's axis to the last voxel inside the lumen."""
    lines = field.lines(address)
    is_cap = lines.where(caps)
    tips = np.flatnonzero((lines.degree == 1) & ~is_cap)
    position_um, radius_um = lines.position_um, lines.radius_um
    end, inner = blunt_ends(tips, lines.start, lines.neighbour, position_um, radius_um, _END_REACH)
    end, inner = end[inner >= 0], inner[inner >= 0]
    held = is_cap | _marks(len(address), end)
    left = field.stripped(words, lines, held, keep_ends=False)
    grid = field.grid
    added = run_out(
        inside, words, position_um[end], position_um[end] - position_um[inner], radius_um[end],
        np.array(field.spacing_um), grid.row_words, grid.plane_words,
    )  # fmt: skip
    lines = field.lines(np.sort(np.concatenate((address[left], added))))
    left = field.stripped(words, lines, lines.where(caps), keep_ends=True)
    ended: np.ndarray = lines.address[left]
    return ended
