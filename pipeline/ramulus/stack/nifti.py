"""NIfTI volumes: stored x, y, z, handed on as z, y, x, with spacing from the affine."""

from pathlib import Path
from typing import Any

import numpy as np

from ..errors import UnusableInputError
from .raw import RawImage
from .spacing import AxisSpacing, Found

__all__ = ["read_nifti"]


def read_nifti(path: Path) -> RawImage:
    """Return what a NIfTI file holds.

    The spacing is the length of the affine's columns (sform, else qform); pixdim is a second source
    that must agree. A file without a unit has no spacing until the user gives one.

    Raises
    ------
    UnusableInputError
        If the file is no complete NIfTI image of three (or four) dimensions.
    """
    import nibabel  # noqa: PLC0415 - heavy to import

    try:
        image: Any = nibabel.load(path)
        header: Any = image.header
        shape = tuple(int(n) for n in image.shape)
        affine = np.asarray(image.affine, dtype=float)
        zooms = tuple(float(v) for v in header.get_zooms())
        space_unit = header.get_xyzt_units()[0]
        dtype = np.dtype(header.get_data_dtype())
    except Exception as broken:
        text = " ".join(str(broken).split())[:120]
        msg = f"{path.name}: not a readable NIfTI file ({type(broken).__name__}: {text})"
        raise UnusableInputError(msg) from broken
    shape = shape[:3] + tuple(n for n in shape[3:] if n > 1)
    if len(shape) not in (3, 4) or min(shape) < 1 or dtype.kind not in "uif":
        msg = (
            f"{path.name}: found shape {shape} of {dtype}, expected x, y, z of numbers (and"
            " perhaps channels)"
        )
        raise UnusableInputError(msg)
    _check_length(path, shape, dtype, int(header["vox_offset"]))
    unit = {"meter": "m", "mm": "mm", "micron": "um"}.get(space_unit, "")
    columns = np.linalg.norm(affine[:3, :3], axis=0)
    found: Found = {}
    for k, axis in enumerate("xyz"):
        found[axis] = [
            AxisSpacing(float(columns[k]), unit, "the affine"),
            AxisSpacing(zooms[k], unit, "pixdim"),
        ]  # fmt: skip
    # nibabel takes the scaling out of the header when it loads a file; its array keeps it.
    scaled = (float(image.dataobj.slope), float(image.dataobj.inter)) != (1.0, 0.0)

    def read(channel: int, time_point: int) -> np.ndarray:  # noqa: ARG001
        try:
            where = (slice(None),) * 3 + ((channel,) if len(shape) == 4 else ())
            proxy = image.dataobj
            data = np.asarray(proxy[where] if scaled else proxy.get_unscaled()[where])
        except Exception as broken:
            text = " ".join(str(broken).split())[:120]
            msg = (
                f"{path.name}: the voxels cannot be read ({type(broken).__name__}: {text}); is the"
                " file complete?"
            )
            raise UnusableInputError(msg) from broken
        data = data.reshape(shape[:3]).transpose(2, 1, 0)
        data = data.astype(np.float32) if data.dtype == np.float64 else data
        return np.ascontiguousarray(data.astype(data.dtype.newbyteorder("=")))

    oblique = not np.allclose(
        np.sort(np.abs(affine[:3, :3] / np.maximum(columns, 1e-12)), axis=0)[:2], 0, atol=1e-3
    )
    return RawImage(
        (shape[2], shape[1], shape[0]), "float32" if scaled else str(dtype), found, read, "NIfTI",
        tuple(str(k) for k in range(shape[3])) if len(shape) == 4 else ("0",),
        header={"orientation": "".join(nibabel.aff2axcodes(affine)), "oblique": str(oblique)},
    )  # fmt: skip


def _check_length(path: Path, shape: tuple[int, ...], dtype: np.dtype, offset: int) -> None:
    needed = offset + int(np.prod(shape, dtype=np.int64)) * dtype.itemsize
    size = path.stat().st_size
    if path.suffix == ".gz":
        if needed > 1100 * size:
            msg = (
                f"{path.name}: the header promises {needed} bytes from a file of {size}; refused"
                " as impossible"
            )
            raise UnusableInputError(msg)
        return
    if needed > size:
        msg = (
            f"{path.name}: the header promises {needed} bytes, the file holds {size}; it is cut"
            " short"
        )
        raise UnusableInputError(msg)
