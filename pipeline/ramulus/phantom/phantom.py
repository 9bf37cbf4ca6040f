"""Make a phantom: an invented vessel network drawn as a stack, with its exact truth."""

from typing import Literal

from .._checks import checked_spacing_um
from .._settings import Settings, setting
from ..network.graph import CentrelineGraph
from ..stack.stack import Stack
from .draw import DrawSettings, draw
from .grow import TreeSettings, grow
from .lattice import LatticeSettings, weave

__all__ = ["PhantomSettings", "make_phantom"]


class PhantomSettings(Settings):
    """What is grown, on which grid, and how it looks."""

    kind: Literal["tree", "loops"] = setting("tree", "a tree with one inlet, or a loop network")
    shape: tuple[int, int, int] = setting((96, 128, 128), "voxels along z, y, x")
    spacing_um: tuple[float, float, float] = setting(
        (1.0, 1.0, 1.0), "edge of a voxel along z, y, x", unit="um"
    )
    name: str = setting("phantom", "the stack's name")
    tree: TreeSettings = setting(TreeSettings(), "shape of a tree")
    lattice: LatticeSettings = setting(LatticeSettings(), "shape of a loop network")
    draw: DrawSettings = setting(DrawSettings(), "blur, contrast, background, faults and noise")


def make_phantom(settings: PhantomSettings, seed: int) -> tuple[Stack, CentrelineGraph]:
    """Return a synthetic stack and the graph that it was drawn from.

    Parameters
    ----------
    settings : PhantomSettings
        What to make.
    seed : int
        Seed of everything random, >= 0; the same settings and seed give the same bytes.

    Returns
    -------
    stack : Stack
        The image.
    truth : CentrelineGraph
        The network with its exact centrelines and radii.

    Raises
    ------
    UnusableInputError
        If the network does not fit into the volume.

    Examples
    --------
    >>> one_vessel = TreeSettings(root_radius_um=2, max_segments=1)
    >>> stack, truth = make_phantom(PhantomSettings(shape=(24, 32, 32), tree=one_vessel), seed=3)
    >>> stack.shape, truth.n_segments
    ((24, 32, 32), 1)
    """
    spacing = checked_spacing_um("spacing_um", settings.spacing_um)
    if settings.kind == "tree":
        truth = grow(settings.tree, shape=settings.shape, spacing_um=spacing, seed=seed)
    else:
        truth = weave(settings.lattice, shape=settings.shape, spacing_um=spacing, seed=seed)
    return draw(truth, settings=settings.draw, seed=seed, name=settings.name), truth
