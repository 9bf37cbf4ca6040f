"""Write a phantom: OME-TIFF with its spacing, and its truth beside it."""

import hashlib
from pathlib import Path
from uuid import NAMESPACE_URL, uuid5

import numpy as np
import tifffile

from ..errors import UnusableInputError
from ..network.graph import CentrelineGraph
from ..stack.stack import Stack
from .phantom import PhantomSettings
from .truth import truth_of, write_truth

__all__ = ["save_phantom", "truth_path"]


def save_phantom(
    path: str | Path, stack: Stack, truth: CentrelineGraph, *, settings: PhantomSettings, seed: int
) -> Path:
    """Write OUT.tif (OME-TIFF, zlib) and OUT.truth.json.

    The same phantom gives the same bytes under the same versions of the libraries: the OME
    identifier is derived from the voxels.

    Parameters
    ----------
    path : str or Path
        Where the stack goes; ends in .tif or .tiff.
    stack, truth
        What `make_phantom` gave.
    settings, seed
        What it was given; both are recorded in the truth.

    Returns
    -------
    Path
        The truth's file.

    Raises
    ------
    UnusableInputError
        If the file's name does not end in .tif or .tiff, or its folder does not exist.
    """
    path = Path(path)
    beside = truth_path(path)
    if not path.parent.is_dir():
        msg = f"{path}: found no folder {path.parent}, expected one that exists; make it first"
        raise UnusableInputError(msg)
    voxels = np.ascontiguousarray(stack.read())
    identity = hashlib.sha256(voxels.tobytes()).hexdigest()
    z, y, x = stack.spacing_um
    tifffile.imwrite(
        path, voxels, ome=True, photometric="minisblack", compression="zlib",
        compressionargs={"level": 9}, predictor=False,
        metadata={
            "axes": "ZYX", "Name": stack.name, "Creator": "ramulus",
            "UUID": f"urn:uuid:{uuid5(NAMESPACE_URL, identity)}",
            "PhysicalSizeZ": z, "PhysicalSizeZUnit": "µm",
            "PhysicalSizeY": y, "PhysicalSizeYUnit": "µm",
            "PhysicalSizeX": x, "PhysicalSizeXUnit": "µm",
        },
    )  # fmt: skip
    made_with = {"seed": seed, "settings": settings.model_dump(mode="json")}
    write_truth(beside, truth_of(truth, made_with=made_with))
    return beside


def truth_path(path: str | Path) -> Path:
    """Return where the truth of a phantom file stands: OUT.truth.json beside OUT.tif.

    Parameters
    ----------
    path : str or Path
        The stack's file.

    Returns
    -------
    Path
        The truth's file.

    Raises
    ------
    UnusableInputError
        If the name does not end in .tif or .tiff.

    Examples
    --------
    >>> truth_path("out/tree.ome.tif").name
    'tree.truth.json'
    """
    path = Path(path)
    for ending in (".ome.tif", ".ome.tiff", ".tif", ".tiff"):
        if path.name.lower().endswith(ending):
            return path.with_name(path.name[: -len(ending)] + ".truth.json")
    msg = f"{path}: found {path.suffix!r}, expected a name that ends in .tif"
    raise UnusableInputError(msg)
