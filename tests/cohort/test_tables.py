"""The cohort's tables from the samples' folders."""

import csv
import io
import json

import cohort_fakes as fakes
import pandas as pd
import pytest

from ramulus import WorkFailedError
from ramulus.cohort.figures import FIGURES
from ramulus.cohort.manifest import read_manifest
from ramulus.cohort.run import Outcome
from ramulus.cohort.tables import cohort_table, failures_table, long_table, read_results
from ramulus.network.tables import csv_bytes

REJECT = {"code": "snr_low", "severity": "reject", "value": 1.0, "limit": 3.0, "message": "dark"}
NOTE = {"code": "anisotropic", "severity": "note", "value": 3.5, "limit": 3.0, "message": "thick"}


@pytest.fixture
def study(tmp_path):
    """Three samples: one done, one rejected, one failed."""
    manifest = read_manifest(
        fakes.write_manifest(
            tmp_path / "study.csv",
            [
                {"sample": "a", "group": "control", "site": "left"},
                {"sample": "b", "group": "treated", "site": ""},
                {"sample": "c", "group": "treated", "site": "right"},
            ],
        )
    )
    fakes.write_folder(tmp_path / "a", fakes.summary("a", exponent=2.9, flags=[NOTE]))
    fakes.write_folder(tmp_path / "b", fakes.summary("b", flags=[NOTE, REJECT]))
    outcomes = [
        Outcome("a", tmp_path / "a"),
        Outcome("b", tmp_path / "b"),
        Outcome("c", None, "input", "c.tif: no spacing"),
    ]
    results = {name: read_results(tmp_path / name) for name in "ab"}
    return manifest, outcomes, results


def test_a_row_a_sample_with_figures_intervals_status_and_flags(study):
    table = cohort_table(*study).set_index("sample", drop=False)
    assert list(table)[:6] == ["sample", "stack", "subject", "group", "batch", "site"]
    first, rejected, failed = table.loc["a"], table.loc["b"], table.loc["c"]
    assert (first.subject, first.site, first.status) == ("a", "left", "done")
    assert first.junction_exponent == 2.9
    assert (first.junction_exponent_low, first.junction_exponent_high) == (2.8, 3.0)
    assert (first.segments, first.segments_low) == (7, None)
    assert (first.spacing_z_um, first.spacing_origin_x, first.shape_y) == (2.0, "user", 20)
    assert first.outlet_rule == "free ends"
    assert first.image_contrast_to_noise == 9.5
    assert "image_odd key" not in table
    assert first.dominant_segments == "4 2 1"
    assert pd.isna(first.trunk_taper_b)
    assert (first["flags"], first.rejected_by) == ("anisotropic", "")
    assert (rejected["flags"], rejected.rejected_by) == ("anisotropic snr_low", "snr_low")
    assert (failed.status, failed.reason) == ("failed", "c.tif: no spacing")
    assert pd.isna(failed.junction_exponent)


def test_every_known_figure_has_its_three_columns_even_where_nobody_has_it(study):
    table = cohort_table(*study)
    for name in FIGURES:
        assert {name, f"{name}_low", f"{name}_high"} <= set(table)


def test_counts_stay_whole_numbers_in_the_file(study):
    rows = list(csv.DictReader(io.StringIO(csv_bytes(cohort_table(*study)).decode())))
    assert [row["segments"] for row in rows] == ["7", "7", ""]
    assert rows[2]["status"] == "failed"


def test_a_column_of_the_manifest_is_never_overwritten(tmp_path):
    path = fakes.write_manifest(tmp_path / "m.csv", [{"sample": "a", "outlet_rule": "mine"}])
    fakes.write_folder(tmp_path / "a", fakes.summary("a"))
    results = {"a": read_results(tmp_path / "a")}
    table = cohort_table(read_manifest(path), [Outcome("a", tmp_path / "a")], results)
    assert table["outlet_rule"].tolist() == ["mine"]
    assert table.columns.is_unique


def test_failures_have_their_kind_and_reason(study):
    manifest, outcomes, _ = study
    assert failures_table(manifest, outcomes).to_numpy().tolist() == [
        ["c", "c.tif", "input", "c.tif: no spacing"]
    ]


def test_long_tables_keep_the_cells_as_they_were_written(study):
    manifest, _, results = study
    table = long_table(manifest, {name: found.junctions for name, found in results.items()})
    assert list(table) == ["sample", "subject", "group", "batch", "node_id", "exponent", "reason"]
    assert table["sample"].tolist() == ["a", "a", "b", "b"]
    assert table["exponent"].tolist() == ["10.0", "", "10.0", ""]
    assert "'=too few" in csv_bytes(table).decode()


def test_no_sample_gives_an_empty_long_table(study):
    assert list(long_table(study[0], {})) == ["sample", "subject", "group", "batch"]


@pytest.mark.parametrize("name", ["summary.json", "orders.csv", "junctions.csv", "segments.csv"])
def test_a_missing_file_is_named(tmp_path, name):
    folder = fakes.write_folder(tmp_path / "a", fakes.summary("a"))
    (folder / name).unlink()
    with pytest.raises(WorkFailedError, match=rf"{name}: cannot be read"):
        read_results(folder)


@pytest.mark.parametrize("text", ["[]", "{", ""])
def test_a_damaged_summary_is_named(tmp_path, text):
    folder = fakes.write_folder(tmp_path / "a", fakes.summary("a"))
    (folder / "summary.json").write_text(text)
    with pytest.raises(WorkFailedError, match=r"summary\.json"):
        read_results(folder)


def test_values_that_are_not_finite_are_empty_cells(tmp_path):
    content = fakes.summary("a") | {"loops": float("nan"), "ends": float("inf")}
    folder = fakes.write_folder(tmp_path / "a", content)
    path = fakes.write_manifest(tmp_path / "m.csv", [{"sample": "a"}])
    outcome = Outcome("a", folder)
    row = cohort_table(read_manifest(path), [outcome], {"a": read_results(folder)}).iloc[0]
    assert row[["loops", "ends"]].isna().all()


def test_the_same_table_gives_the_same_bytes(study):
    assert csv_bytes(cohort_table(*study)) == csv_bytes(cohort_table(*study))
    json.dumps(study[2]["a"].summary, allow_nan=False)
