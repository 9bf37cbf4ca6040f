"""Make the test volumes again, byte for byte: python test_volumes/make.py [FOLDER].

Everything in them is invented; the names stand for no animal and no experiment. The bytes repeat
under the same versions of numpy, tifffile and zlib; the grey values under any.
"""

import sys
from pathlib import Path

from ramulus.phantom.draw import DrawSettings
from ramulus.phantom.grow import TreeSettings
from ramulus.phantom.lattice import LatticeSettings
from ramulus.phantom.phantom import PhantomSettings, make_phantom
from ramulus.phantom.save import save_phantom

# A cleared block of a leaf-shaped fin: one artery with its branches, filled with a bright dye.
SAMPLE_A = PhantomSettings(
    kind="tree",
    name="sample A",
    shape=(96, 192, 192),
    spacing_um=(1.5, 1.0, 1.0),
    tree=TreeSettings(
        exponent=2.9, root_radius_um=7.5, min_radius_um=2.0, asymmetry=(0.45, 1.0),
        length_to_radius=8.0, clearance_um=4.0, min_segments=41,
    ),
    draw=DrawSettings(
        sigma_um=(1.5, 0.9, 0.9), contrast=40.0, background=6.0, background_gradient=0.4,
        uneven_filling=0.08, attenuation_length_um=600.0, debris=12, debris_radius_um=(1.2, 2.4),
        snr=9.0, noise="poisson", read_noise_share=0.02,
    ),
)  # fmt: skip

# The mesh at the fin's rim: no inlet of its own, cut on all sides.
SAMPLE_B = PhantomSettings(
    kind="loops",
    name="sample B",
    shape=(64, 128, 128),
    spacing_um=(1.6, 1.0, 1.0),
    lattice=LatticeSettings(spacing_um=19.0, radius_um=2.5, max_radius_um=4.0, clearance_um=3.5),
    draw=DrawSettings(
        sigma_um=(1.4, 0.9, 0.9), contrast=50.0, background=6.0, uneven_filling=0.08, snr=8.0,
        noise="poisson", read_noise_share=0.03,
    ),
)  # fmt: skip

VOLUMES = {"sample_a.ome.tif": (SAMPLE_A, 10), "sample_b.ome.tif": (SAMPLE_B, 1)}


def make(folder: Path) -> None:
    """Write every volume and its truth into a folder."""
    for name, (settings, seed) in VOLUMES.items():
        stack, truth = make_phantom(settings, seed)
        beside = save_phantom(folder / name, stack, truth, settings=settings, seed=seed)
        print(f"{folder / name}: {truth.n_segments} segments; {beside.name}")


if __name__ == "__main__":
    make(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
