"""The invented study: what is drawn, and that its known difference comes back."""

import csv
import sys
from pathlib import Path

import pytest

from ramulus.cohort.cohort import checked_cohort
from ramulus.config import load_configuration

sys.path.insert(0, str(Path(__file__).parents[1] / "test_volumes"))
import study


def test_two_groups_of_five_animals_two_of_them_imaged_twice():
    rows = study.stacks()
    assert rows == study.stacks()
    animals = {row["subject"]: row["group"] for row in rows}
    assert len(rows) == 12
    assert sorted(animals.values()) == ["running water"] * 5 + ["still water"] * 5
    assert {row["batch"] for row in rows} == {"week 1", "week 2"}
    exponents = {row["subject"]: row["exponent"] for row in rows}
    for group, mean in study.EXPONENT.items():
        own = [value for animal, value in exponents.items() if animals[animal] == group]
        assert sum(own) / 5 == pytest.approx(mean, abs=3 * study.SPREAD / 5**0.5)


def test_the_manifest_and_the_configuration_are_such_as_the_command_takes(tmp_path, monkeypatch):
    monkeypatch.setattr(study, "ANIMALS", 1)
    study.draw(tmp_path)
    configuration = load_configuration(tmp_path / "study.toml")
    manifest = checked_cohort(tmp_path / "study.csv", configuration.cohort)
    assert [row.sample for row in manifest.rows] == ["s1-left", "s1-right", "r1-left", "r1-right"]
    assert manifest.groups == ("still water", "running water")
    assert (tmp_path / "stacks" / "s1-left.truth.json").exists()


@pytest.mark.slow
def test_the_known_difference_is_found(tmp_path, monkeypatch, capfd):
    monkeypatch.setattr(sys, "argv", ["study.py", str(tmp_path), "2"])
    assert study.main() == 0
    true = float(capfd.readouterr().out.rsplit("drawn: ", 1)[1])
    with (tmp_path / "results" / "comparisons.csv").open(newline="") as file:
        row = next(csv.DictReader(file))
    assert row["figure"] == "junction_exponent"
    assert float(row["estimate_low"]) < true < float(row["estimate_high"])
    assert float(row["p_adjusted"]) < 0.001
