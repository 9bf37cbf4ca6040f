"""Draw an invented study and measure it: python test_volumes/study.py FOLDER [WORKERS].

Leaf-shaped fins of an animal that does not exist were kept in still or in running water, five
animals each, in two batches. Every fin's artery is a grown tree whose junction exponent is known:
3.0 in still water, 2.5 in running water, with a spread of 0.1 between animals. One animal of each
group was imaged twice. The stacks are drawn here and now (a few seconds each), then
`ramulus cohort` measures them and compares the groups; the primary figure, named in advance, is the
junction exponent.
"""

import csv
import subprocess
import sys
from pathlib import Path

import numpy as np

from ramulus.phantom.draw import DrawSettings
from ramulus.phantom.grow import TreeSettings
from ramulus.phantom.phantom import PhantomSettings, make_phantom
from ramulus.phantom.save import save_phantom

EXPONENT = {"still water": 3.0, "running water": 2.5}
SPREAD = 0.1
ANIMALS = 5
SEED = 20

CONFIGURATION = """\
[cohort]
primary_figures = ["junction_exponent"]
reference_group = "still water"

[twin]
draws = 1
"""


def stacks() -> list[dict[str, str | float | int]]:
    """Return a row a stack: the manifest's columns, the animal's true exponent and the seed."""
    random = np.random.default_rng(SEED)
    rows: list[dict[str, str | float | int]] = []
    for g, (group, mean) in enumerate(EXPONENT.items()):
        for k in range(ANIMALS):
            animal = f"{group[0]}{k + 1}"
            exponent = float(np.round(random.normal(mean, SPREAD), 3))
            for fin in ("left", "right")[: 2 if k == 0 else 1]:
                sample = f"{animal}-{fin}"
                rows.append(
                    {
                        "sample": sample, "stack": f"stacks/{sample}.ome.tif", "subject": animal,
                        "group": group, "batch": f"week {1 + k % 2}", "fin": fin,
                        "exponent": exponent, "seed": SEED + 100 * g + 10 * k + (fin == "right"),
                    }
                )  # fmt: skip
    return rows


def settings_of(row: dict[str, str | float | int]) -> PhantomSettings:
    """Return how a stack is drawn; the second week's images are dimmer."""
    return PhantomSettings(
        name=str(row["sample"]),
        shape=(64, 128, 128),
        spacing_um=(1.5, 1.0, 1.0),
        tree=TreeSettings(
            exponent=float(row["exponent"]), root_radius_um=7.0, min_radius_um=2.0,
            asymmetry=(0.6, 1.0), length_to_radius=6.0, min_segments=15,
        ),
        draw=DrawSettings(
            sigma_um=(1.3, 0.9, 0.9), contrast=100.0 if row["batch"] == "week 1" else 80.0,
            uneven_filling=0.05, snr=10.0,
        ),
    )  # fmt: skip


def draw(folder: Path) -> None:
    """Write the stacks with their truth, the manifest and the configuration."""
    (folder / "stacks").mkdir(parents=True, exist_ok=True)
    columns = ["sample", "stack", "subject", "group", "batch", "fin"]
    with (folder / "study.csv").open("w", newline="", encoding="utf-8") as file:
        writer = csv.DictWriter(file, columns, extrasaction="ignore")
        writer.writeheader()
        for row in stacks():
            settings, seed = settings_of(row), int(row["seed"])
            stack, truth = make_phantom(settings, seed)
            save_phantom(folder / str(row["stack"]), stack, truth, settings=settings, seed=seed)
            writer.writerow(row)
            print(f"{row['sample']}: exponent {row['exponent']}, {truth.n_segments} segments")
    (folder / "study.toml").write_text(CONFIGURATION, encoding="utf-8")


def main() -> int:
    """Draw the study, then run the command that a reader would."""
    folder = Path(sys.argv[1] if len(sys.argv) > 1 else "study")
    draw(folder)
    command = [
        "ramulus", "cohort", str(folder / "study.csv"), "--config", str(folder / "study.toml"),
        "--out", str(folder / "results"), "--workers", sys.argv[2] if len(sys.argv) > 2 else "1",
    ]  # fmt: skip
    print("$ " + " ".join(command), flush=True)
    run = [sys.executable, "-c", "from ramulus.cli import main; main()", *command[1:]]
    status = subprocess.run(run, check=False).returncode
    means = [
        np.mean([float(r["exponent"]) for r in stacks() if r["group"] == g and r["fin"] == "left"])
        for g in EXPONENT
    ]
    print(f"true difference of the exponents drawn: {means[1] - means[0]:.3f}")
    return status


if __name__ == "__main__":
    sys.exit(main())
