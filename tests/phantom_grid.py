"""The phantoms on which accuracy is judged: named conditions, and seeds that were set apart.

The edge of a voxel along y and x is 1 um, along z `ratio` um; radii and clearances are in um, so
that a radius of 2 is two voxels of the finest axis. At 5:1 the thinnest vessels have 3.4 um: two
edges of a cube as large as the voxel (their diameter is 1.4 slices).

`TUNING` is for choosing methods and constants. `HELD_OUT` is for judging alone: no phantom of it
may be looked at to choose anything. The two share no seed.
"""

from dataclasses import dataclass

from ramulus.network.graph import CentrelineGraph
from ramulus.phantom.draw import DrawSettings
from ramulus.phantom.grow import TreeSettings
from ramulus.phantom.lattice import LatticeSettings
from ramulus.phantom.phantom import PhantomSettings, make_phantom
from ramulus.stack.stack import Stack

_SHAPE = {1: (120, 136, 136), 3: (64, 152, 152), 5: (44, 160, 160)}
_CLEARANCE_UM = {1: 3.0, 3: 6.0, 5: 9.0}


@dataclass(frozen=True, slots=True)
class Condition:
    """One kind of phantom."""

    name: str
    kind: str  # tree or loops
    ratio: int  # edge of a voxel along z over that along y and x
    min_radius_um: float
    sigma_voxels: tuple[float, float, float]  # blur along z, y, x, in voxels of each axis
    snr: float
    hard: bool  # gradient, uneven filling, debris, flicker, dim thin vessels, shot noise
    exponent: float = 3.0

    @property
    def settings(self) -> PhantomSettings:
        """What `make_phantom` takes."""
        return PhantomSettings(
            kind=self.kind, shape=_SHAPE[self.ratio], spacing_um=(self.ratio, 1.0, 1.0),
            name=self.name, tree=self._tree, lattice=self._lattice, draw=self._draw,
        )  # fmt: skip

    @property
    def _tree(self) -> TreeSettings:
        return TreeSettings(
            exponent=self.exponent,
            root_radius_um=(2.5 if self.ratio == 5 else 3.2) * self.min_radius_um,
            min_radius_um=self.min_radius_um, clearance_um=_CLEARANCE_UM[self.ratio],
            length_to_radius=6.0 if self.min_radius_um >= 2 else 9.0, asymmetry=(0.5, 1.0),
            min_segments=9 if self.ratio == 5 else 17,
        )  # fmt: skip

    @property
    def _lattice(self) -> LatticeSettings:
        clearance_um = _CLEARANCE_UM[self.ratio]
        return LatticeSettings(
            spacing_um=9.0 + 2.2 * self.min_radius_um + 1.2 * clearance_um,
            radius_um=1.2 * self.min_radius_um, min_radius_um=self.min_radius_um,
            max_radius_um=1.9 * self.min_radius_um, clearance_um=clearance_um,
        )  # fmt: skip

    @property
    def _draw(self) -> DrawSettings:
        z, y, x = self.sigma_voxels
        common = {"sigma_um": (z * self.ratio, y, x), "snr": self.snr}
        if not self.hard:
            return DrawSettings(**common)
        return DrawSettings(
            background_gradient=0.8, uneven_filling=0.15, debris=15, debris_radius_um=(1.0, 2.5),
            flicker=0.05, dim_thin_power=0.25, attenuation_length_um=500.0, noise="poisson",
            **common,
        )  # fmt: skip


CONDITIONS = {
    c.name: c
    for c in (
        Condition("tree-clean", "tree", 1, 2.0, (1.0, 1.0, 1.0), 8, hard=False),
        Condition("tree-clean-noisy", "tree", 1, 2.0, (1.0, 1.0, 1.0), 4, hard=False, exponent=2.7),
        Condition(
            "tree-clean-sharp", "tree", 1, 2.0, (0.5, 0.5, 0.5), 12, hard=False, exponent=2.3
        ),
        Condition("tree-clean-blurred", "tree", 1, 2.0, (1.5, 1.5, 1.5), 10, hard=False),
        Condition("tree-clean-thin", "tree", 1, 1.2, (1.0, 1.0, 1.0), 12, hard=False, exponent=2.7),
        Condition("tree-clean-3to1", "tree", 3, 2.0, (0.6, 1.0, 1.0), 8, hard=False, exponent=2.7),
        Condition("tree-clean-3to1-noisy", "tree", 3, 2.0, (0.6, 1.0, 1.0), 5, hard=False),
        Condition("tree-clean-5to1", "tree", 5, 3.4, (0.5, 1.0, 1.0), 8, hard=False),
        Condition("loops-clean", "loops", 1, 2.0, (1.0, 1.0, 1.0), 8, hard=False),
        Condition("loops-clean-noisy", "loops", 1, 2.0, (0.8, 0.8, 0.8), 4, hard=False),
        Condition("loops-clean-3to1", "loops", 3, 2.0, (0.6, 1.0, 1.0), 8, hard=False),
        Condition("tree-hard", "tree", 1, 2.0, (1.2, 0.9, 0.9), 6, hard=True, exponent=2.7),
        Condition("tree-hard-thin", "tree", 1, 1.2, (1.2, 0.9, 0.9), 10, hard=True, exponent=2.3),
        Condition("tree-hard-3to1", "tree", 3, 2.0, (0.7, 0.9, 0.9), 7, hard=True),
        Condition("tree-hard-5to1", "tree", 5, 3.4, (0.5, 1.0, 1.0), 7, hard=True, exponent=2.7),
        Condition("loops-hard", "loops", 1, 2.0, (1.2, 0.9, 0.9), 6, hard=True),
        Condition("loops-hard-3to1", "loops", 3, 2.0, (0.7, 0.9, 0.9), 7, hard=True),
    )
}

TUNING = tuple((name, seed) for name in CONDITIONS for seed in (1, 2))
HELD_OUT = tuple((name, seed) for name in CONDITIONS for seed in (101, 102, 103, 104))


def phantom_of(name: str, seed: int) -> tuple[Stack, CentrelineGraph]:
    """Return one phantom of the grid: its stack and its true graph."""
    # conditions of one shape do not share their networks
    return make_phantom(CONDITIONS[name].settings, 1000 * list(CONDITIONS).index(name) + seed)
