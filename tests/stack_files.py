"""Small image files for the tests of the readers, and faults made on purpose."""

import gzip

import nibabel
import numpy as np
import tifffile

from ramulus.errors import UnusableInputError
from ramulus.stack.open import InputSettings, open_stack

VOLUME = np.random.default_rng(11).integers(0, 4000, (5, 7, 9)).astype(np.uint16)
SPACING_UM = (2.5, 0.75, 0.5)


def opened(path, **settings):
    return open_stack(path, settings=InputSettings(**settings))


def refusal(path, **settings):
    """Return the one line with which a file is refused."""
    try:
        opened(path, **settings).read()
    except UnusableInputError as refused:
        text = str(refused)
        assert "\n" not in text
        assert len(text) < 400
        return text
    msg = f"{path.name} was not refused"
    raise AssertionError(msg)


def ome(path, *, volume=VOLUME, unit="µm", spacing_um=SPACING_UM, axes="ZYX", **more):
    z, y, x = spacing_um
    metadata = {
        "axes": axes,
        "PhysicalSizeZ": z, "PhysicalSizeZUnit": unit, "PhysicalSizeY": y,
        "PhysicalSizeYUnit": unit, "PhysicalSizeX": x, "PhysicalSizeXUnit": unit,
    }  # fmt: skip
    metadata.update(more.pop("metadata", {}))
    tifffile.imwrite(path, volume, ome=True, metadata=metadata, **more)
    return path


def imagej(path, *, volume=VOLUME, spacing_um=SPACING_UM, unit="um", axes="ZYX", **metadata):
    z, y, x = spacing_um
    tifffile.imwrite(
        path, volume, imagej=True, resolution=(1 / x, 1 / y),
        metadata={"axes": axes, "spacing": z, "unit": unit, **metadata},
    )  # fmt: skip
    return path


def nifti(path, *, volume=VOLUME, spacing=SPACING_UM, unit="micron", affine=None, dtype=None):
    """Save x, y, z with the spacing in the unit given."""
    z, y, x = spacing
    matrix = np.diag([x, y, z, 1.0]) if affine is None else affine
    # nibabel has no 64-bit integers unless told.
    array = np.asarray(volume, dtype=dtype or volume.dtype).transpose(2, 1, 0)
    image = nibabel.Nifti1Image(array, matrix)
    image.header.set_xyzt_units(xyz=unit)
    nibabel.save(image, path)
    return path


def mutated(blob, seed):
    """Change one to four bytes or cut the file, always the same way for a seed."""
    random = np.random.default_rng(seed)
    data = bytearray(blob)
    if seed % 5 == 0:
        return bytes(data[: int(random.integers(1, len(data)))])
    # Headers lie at the beginning and at the end.
    reach = len(data) if seed % 2 else min(len(data), 400)
    for _ in range(int(random.integers(1, 5))):
        at = int(random.integers(0, reach))
        if seed % 3 == 0:
            at = len(data) - 1 - at
        data[at] = int(random.integers(0, 256))
    return bytes(data)


def zipped(blob):
    return gzip.compress(blob, compresslevel=1, mtime=0)
