"""A cohort from its manifest to its folder, and the page that it ends in."""

import csv
import hashlib
import json
import re
import shutil
import subprocess
from functools import partial
from html.parser import HTMLParser
from pathlib import Path

import cohort_fakes as fakes
import pandas as pd
import pytest

from ramulus import UnusableInputError
from ramulus._cohort_settings import CohortSettings
from ramulus._folder import is_finished
from ramulus.cohort.cohort import checked_cohort, run_cohort, sample_folder

SETTINGS = CohortSettings(primary_figures=("junction_exponent",))
FILES = ["cohort.csv", "cohort.html", "comparisons.csv", "failures.csv", "junctions_long.csv",
         "orders_long.csv"]  # fmt: skip
NASTY = "b<script>"


def measure(row, *, out):
    """Write a folder whose exponent follows the sample's name and group."""
    if row.sample.startswith("failing"):
        fakes.measure(row, out=out)
    step = 0.05 * int(row.sample[-1]) - 0.5 * (row.group == "treated")
    content = fakes.summary(row.sample, exponent=3 + step, length_um=1000 + 100 * step)
    return fakes.write_folder(sample_folder(Path(out), row), content)


@pytest.fixture
def manifest_path(tmp_path):
    rows = [
        {"sample": f"{group[0]}{k}-{stack}", "subject": f"{group[0]}{k}", "group": group,
         "batch": f"day {k % 2}", "note": NASTY}
        for group in ("control", "treated") for k in range(4) for stack in (1, 2)
    ]  # fmt: skip
    rows.append(dict(rows[0]) | {"sample": "failing-1", "stack": "failing.tif"})
    return fakes.write_manifest(tmp_path / "study.csv", rows)


def ran(path, out, **changes):
    manifest = checked_cohort(path, SETTINGS)
    return run_cohort(manifest, out, partial(measure, out=str(out)), settings=SETTINGS, **changes)


def test_the_folder_has_all_files_and_a_record_of_their_checksums(manifest_path, tmp_path):
    out = tmp_path / "out"
    ran(manifest_path, out)
    assert sorted(p.name for p in out.iterdir()) == [*FILES, "run.json", "samples"]
    record = json.loads((out / "run.json").read_text())
    assert sorted(record["files"]) == FILES
    for name, checksum in record["files"].items():
        assert hashlib.sha256((out / name).read_bytes()).hexdigest() == checksum
    assert is_finished(out)
    assert record["samples"]["failing-1"] == "failed"
    assert record["configuration"]["cohort"]["primary_figures"] == ["junction_exponent"]


def test_groups_without_spread_are_not_compared_and_the_reason_is_in_the_file(
    manifest_path, tmp_path
):
    ran(manifest_path, tmp_path / "out")
    row = (
        pd.read_csv(tmp_path / "out" / "comparisons.csv")
        .set_index("figure")
        .loc["junction_exponent"]
    )
    # Stacks 1 and 2 of every subject have 3.05 and 3.1, half less in the treated group.
    assert row["reason"] == "all subjects of a group have the same value"
    table = pd.read_csv(tmp_path / "out" / "cohort.csv")
    assert len(table) == 17
    assert table.loc[table["sample"] == "t3-2", "junction_exponent"].iloc[0] == pytest.approx(2.6)


def test_a_second_run_takes_up_what_is_finished_and_gives_the_same_bytes(manifest_path, tmp_path):
    out = tmp_path / "out"
    ran(manifest_path, out)
    before = {name: (out / name).read_bytes() for name in FILES}
    told = []

    def finished(row):
        folder = sample_folder(out, row)
        return folder if is_finished(folder) else None

    ran(manifest_path, out, finished=finished, on_progress=told.append)
    assert sum(p.outcome.resumed for p in told) == 16
    assert {name: (out / name).read_bytes() for name in FILES} == before


def test_a_folder_that_was_damaged_after_measuring_is_a_failure_with_its_reason(
    manifest_path, tmp_path
):
    out = tmp_path / "out"

    def spoiled(row):
        folder = measure(row, out=str(out))
        if row.sample == "c1-1":
            (folder / "summary.json").write_text("{")
        return folder

    run_cohort(checked_cohort(manifest_path, SETTINGS), out, spoiled, settings=SETTINGS)
    failures = pd.read_csv(out / "failures.csv").set_index("sample")
    assert failures.loc["failing-1", "reason"] == "the network has no inlet"
    assert "summary.json: cannot be read" in failures.loc["c1-1", "reason"]


def test_a_cohort_in_which_all_fails_still_ends_in_a_folder(tmp_path):
    path = fakes.write_manifest(
        tmp_path / "m.csv", [{"sample": "failing-1"}, {"sample": "failing-2"}]
    )
    results = run_cohort(
        checked_cohort(path, SETTINGS), tmp_path, partial(fakes.measure, out=str(tmp_path)),
        settings=SETTINGS,
    )  # fmt: skip
    assert (results.table["status"] == "failed").all()
    assert len(results.failures) == 2
    assert "None was named" not in (tmp_path / "cohort.html").read_text()


def test_an_unfinished_write_leaves_no_valid_record(manifest_path, tmp_path, monkeypatch):
    out = tmp_path / "out"
    ran(manifest_path, out)
    old = (out / "cohort.html").read_bytes()

    def full(*_, **__):
        raise OSError(28, "No space left on device")

    from ramulus.cohort import cohort as module

    plain = module.write_whole
    monkeypatch.setattr(
        module, "write_whole", lambda p, c: full() if p.name == "cohort.html" else plain(p, c)
    )
    with pytest.raises(OSError, match="No space left"):
        ran(manifest_path, out)
    assert not is_finished(out)
    assert (out / "cohort.html").read_bytes() == old
    assert not list(out.glob("*.part"))


@pytest.mark.parametrize(
    ("settings", "words"),
    [
        ({"primary_figures": ("junction_exponnt",)}, "near it: junction_exponent"),
        ({"primary_figures": ("loops", "loops")}, "expected each figure once"),
        ({"reference_group": "contrl"}, "'contrl' is no group of study.csv; found control"),
    ],
)
def test_settings_are_checked_before_anything_is_measured(manifest_path, settings, words):
    with pytest.raises(UnusableInputError, match=re.escape(words)):
        checked_cohort(manifest_path, CohortSettings(**settings))


def test_long_tables_have_both_orderings_and_every_junction(manifest_path, tmp_path):
    ran(manifest_path, tmp_path)
    orders = pd.read_csv(tmp_path / "orders_long.csv")
    assert orders.groupby("ordering")["sample"].nunique().to_dict() == {"own": 16, "pooled": 16}
    assert list(orders)[:6] == ["sample", "subject", "group", "batch", "ordering", "order"]
    with (tmp_path / "junctions_long.csv").open(newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == 32
    assert {row["reason"] for row in rows} == {"", "'=too few"}


class Tags(HTMLParser):
    def __init__(self):
        super().__init__()
        self.found, self.open = [], []

    def handle_starttag(self, tag, attrs):
        self.found.append((tag, dict(attrs)))
        if tag not in ("meta", "link", "br", "img", "input", "hr"):
            self.open.append(tag)

    def handle_endtag(self, tag):
        assert self.open.pop() == tag


@pytest.fixture
def page(manifest_path, tmp_path):
    ran(manifest_path, tmp_path / "out")
    return (tmp_path / "out" / "cohort.html").read_text()


def test_the_page_is_whole_and_needs_no_network(page):
    tags = Tags()
    tags.feed(page)
    assert tags.open == []
    names = {tag for tag, _ in tags.found}
    assert not names & {"script", "link", "iframe", "img"}
    links = [attributes["href"] for tag, attributes in tags.found if tag == "a"]
    ids = {attributes["id"] for _, attributes in tags.found if "id" in attributes}
    assert {link[1:] for link in links} <= ids
    assert "http" not in page.replace("http-equiv", "")
    assert len(page) < 6e6


def test_the_page_shows_every_sample_failures_methods_and_the_caution(page):
    for words in (
        "not a medical device",
        "licensed professionals",
        "c0-1: 3.05",
        "failing-1",
        "the network has no inlet",
        "Junction exponent",
        "The subject is the unit of analysis (control: 4 subjects, 9 stacks; treated: 4",
        "cohort.primary_figures",
        "found once on the vessels of all samples",
        "ramulus",
    ):
        assert words in page
    assert "nan" not in re.sub(r"<[^>]*>", "", page).lower().split()


def test_words_of_the_manifest_cannot_become_markup(tmp_path):
    rows = [
        {"sample": f"{k}", "subject": f"s{k}", "group": f"<b onclick=x>{k % 2}", "batch": "<i>"}
        for k in range(6)
    ]
    path = fakes.write_manifest(tmp_path / "m<u>.csv", rows)

    def nasty(row):
        flag = {"code": "<s>", "severity": "check", "message": "<script>x</script>"}
        content = fakes.summary(row.sample, exponent=3 + 0.1 * int(row.sample), flags=[flag])
        return fakes.write_folder(sample_folder(tmp_path, row), content)

    run_cohort(checked_cohort(path, SETTINGS), tmp_path, nasty, settings=SETTINGS)
    tags = Tags()
    tags.feed((tmp_path / "cohort.html").read_text())
    assert not {tag for tag, _ in tags.found} & {"b", "i", "u", "s", "script"}


def test_groups_that_cannot_be_told_from_batches_are_named_at_the_top(tmp_path):
    rows = [
        {"sample": f"s{k}", "group": "ab"[k % 2], "batch": ["May", "June"][k % 2]} for k in range(8)
    ]
    path = fakes.write_manifest(tmp_path / "m.csv", rows)
    run_cohort(checked_cohort(path, SETTINGS), tmp_path, partial(measure, out=str(tmp_path)),
               settings=SETTINGS)  # fmt: skip
    text = (tmp_path / "cohort.html").read_text()
    assert "Group and batch cannot be told apart: a in May; b in June." in text


def test_without_groups_the_figures_are_shown_and_nothing_is_compared(tmp_path):
    path = fakes.write_manifest(tmp_path / "m.csv", [{"sample": f"s{k}"} for k in range(3)])
    results = run_cohort(
        checked_cohort(path, CohortSettings()), tmp_path, partial(measure, out=str(tmp_path)),
        settings=CohortSettings(),
    )  # fmt: skip
    text = (tmp_path / "cohort.html").read_text()
    assert results.comparisons.empty
    assert "names no groups" in text
    assert "s1: 3.05" in text


@pytest.mark.browser
@pytest.mark.skipif(shutil.which("chromium") is None, reason="Chromium is not installed")
def test_chromium_opens_the_page_and_prints_it(page, tmp_path):
    printed = tmp_path / "page.pdf"
    command = ["chromium", "--headless", "--no-sandbox", "--disable-gpu", "--no-pdf-header-footer",
               f"--user-data-dir={tmp_path / 'profile'}", f"--print-to-pdf={printed}",
               "--host-resolver-rules=MAP * ~NOTFOUND", "--enable-logging=stderr", "--v=0",
               (tmp_path / "out" / "cohort.html").as_uri()]  # fmt: skip
    done = subprocess.run(command, capture_output=True, text=True, timeout=120, check=True)
    assert page
    assert printed.read_bytes().startswith(b"%PDF")
    assert "CONSOLE" not in done.stderr
