"""Manifests: what is taken, and that every problem is told at once in one line."""

import hashlib

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from ramulus import UnusableInputError
from ramulus.cohort.manifest import read_manifest


@pytest.fixture
def folder(tmp_path):
    for name in ("a.tif", "b.tif", "own.toml", "edits.jsonl"):
        (tmp_path / name).write_bytes(b"x")
    (tmp_path / "series").mkdir()
    return tmp_path


def written(folder, text, *, name="study.csv"):
    path = folder / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def problems(folder, text):
    with pytest.raises(UnusableInputError) as refusal:
        read_manifest(written(folder, text))
    line = str(refusal.value)
    assert "\n" not in line
    assert refusal.value.exit_status == 2
    assert line.startswith("study.csv: ")
    return line


def test_all_known_columns_and_others_are_read(folder):
    text = (
        "sample,stack,subject,group,batch,config,edits,age_weeks,site\r\n"
        'm1,a.tif,mouse 1,control,May,own.toml,edits.jsonl,-3.5,"cortex, left"\r\n'
        "m2,series,mouse 1,control,May,,,12,\r\n"
        "m3,b.tif,,treated,June,,,12,\r\n"
    )
    manifest = read_manifest(written(folder, text))
    first, second, third = manifest.rows
    assert first.stack == folder / "a.tif"
    assert first.config == folder / "own.toml"
    assert first.edits == folder / "edits.jsonl"
    assert first.cells["site"] == "cortex, left"
    assert first.cells["age_weeks"] == "-3.5"  # a number, not a formula
    assert (second.subject, second.stack, second.config) == ("mouse 1", folder / "series", None)
    assert third.subject == "m3"
    assert manifest.groups == ("control", "treated")
    assert manifest.columns[-2:] == ("age_weeks", "site")
    assert manifest.sha256 == hashlib.sha256(text.encode()).hexdigest()


def test_two_columns_are_enough(folder):
    row = read_manifest(written(folder, "sample,stack\nm1,a.tif\n")).rows[0]
    assert (row.sample, row.subject, row.group, row.batch) == ("m1", "m1", "", "")


def test_byte_order_mark_blank_lines_and_spaces_do_not_matter(folder):
    text = b"\xef\xbb\xbfsample, stack ,group\n\n  m1 ,a.tif , control\n,,\n"
    row = read_manifest(written(folder, text)).rows[0]
    assert (row.sample, row.group) == ("m1", "control")


def test_stacks_may_lie_anywhere_but_paths_are_relative_to_the_manifest(folder):
    (folder / "lists").mkdir()
    path = written(folder / "lists", f"sample,stack\nm1,../a.tif\nm2,{folder}/b.tif\n")
    assert [row.stack for row in read_manifest(path).rows] == [folder / "a.tif", folder / "b.tif"]


def test_every_problem_of_every_row_is_told_in_one_line(folder):
    line = problems(
        folder,
        "sample,stack,subject,group,batch,config,edits\n"
        "m1,a.tif,s1,control,May,,\n"
        "m1,b.tif,s2,control,May,,\n"
        "m3,absent.tif,s3,=1+1,May,other.toml,\n"
        "../m4,a.tif,s4,control,,,\n"
        "m5,a.tif,s1,treated,May,,gone.jsonl\n"
        "m6,,s6,control,May,,\n"
        "m7,a.tif\n",
    )
    for part in (
        "sample 'm1' stands 2 times (lines 2, 3)",
        "line 4: stack 'absent.tif' is not there",
        "line 4: group '=1+1' begins like a formula",
        "line 4: config 'other.toml' is not there",
        "line 5: sample '../m4' cannot be a folder's name",
        "subject 's1' is in the groups 'control', 'treated'",
        "line 6: edits 'gone.jsonl' is not there",
        "line 7: stack is empty",
        "line 8: 2 cells, expected 7",
        "batch is empty in lines 5; expected all or none",
    ):
        assert part in line


@pytest.mark.parametrize(
    ("name", "separator"), [("semicolons", ";"), ("tabs", "\t"), ("bars", "|")]
)
def test_foreign_separators_are_named(folder, name, separator):
    text = "sample,stack,group\nm1,a.tif,c\n".replace(",", separator)
    assert f"its columns are separated by {name}, expected commas" in problems(folder, text)


@pytest.mark.parametrize(
    ("text", "part"),
    [
        ("", "it is empty"),
        ("\n\n", "it is empty"),
        ("sample,stack\n", "it has a header and no sample"),
        ("sample,group\nm1,c\n", "column 'stack' is missing; found sample, group"),
        ("Sample,stack\nm1,a.tif\n", "column 'Sample': write 'sample'"),
        ("sample,stack,stack\nm1,a.tif,a.tif\n", "column 'stack' stands 2 times"),
        ("sample,stack,\nm1,a.tif,x\n", "a column has no name"),
        ("sample,stack,status\nm1,a.tif,x\n", "column 'status' is a column of the result"),
        ("sample,stack,loops\nm1,a.tif,x\n", "column 'loops' is a column of the result"),
        ("sample,stack,=x\nm1,a.tif,x\n", "column '=x' begins like a formula"),
        ('sample,stack\n"m1,a.tif\n', "line 2: unexpected end of data"),
        ("sample,stack\nm\x001,a.tif\n", "NUL"),
        (b"sample,stack\nm\xff,a.tif\n", "byte 14 is not UTF-8"),
        ("sample,stack\n\xe9".encode("utf-16"), "byte 0 is not UTF-8"),
    ],
)
def test_a_broken_file_is_refused_with_what_was_found(folder, text, part):
    assert part in problems(folder, text)


@pytest.mark.parametrize(
    "name",
    ["..", ".", "a/b", "a\\b", "/etc", ".hidden", "nul", "COM1.txt", "x" * 101, "trailing.",
     "a:b", "a*b", "a<b", "é" * 101, ""],
)  # fmt: skip
def test_names_that_cannot_be_a_folder_everywhere_are_refused(folder, name):
    assert "cannot be a folder's name" in problems(folder, f'sample,stack\n"{name}",a.tif\n')


@pytest.mark.parametrize("name", ["m1", "mouse 12-a", "Maus_ä", "2024.05.01", "a+b (left), c"])
def test_plain_names_are_taken(folder, name):
    assert read_manifest(written(folder, f'sample,stack\n"{name}",a.tif\n')).rows[0].sample == name


def test_names_that_differ_in_case_alone_share_a_folder_on_some_systems(folder):
    assert "stands 2 times" in problems(folder, "sample,stack\nM1,a.tif\nm1,b.tif\n")


@pytest.mark.parametrize("cell", ["=cmd()", "+x", "-x", "@sum", "-"])
def test_cells_that_a_spreadsheet_would_run_are_refused(folder, cell):
    assert "begins like a formula" in problems(folder, f"sample,stack,note\nm1,a.tif,{cell}\n")


def test_control_characters_are_refused(folder):
    assert "control character" in problems(folder, 'sample,stack,note\nm1,a.tif,"x\ny"\n')


def test_names_that_differ_in_unicode_form_alone_share_a_folder_on_some_systems(folder):
    text = "sample,stack\nm\u00e9,a.tif\nme\u0301,b.tif\n"
    assert "stands 2 times" in problems(folder, text)


def test_a_long_list_of_problems_is_cut_and_says_so(folder):
    rows = "".join(f"m{k},absent{k}.tif\n" for k in range(50))
    line = problems(folder, "sample,stack\n" + rows)
    assert line.startswith("study.csv: 50 problems: ")
    assert line.endswith("; and 30 more")


def test_no_file_a_folder_and_a_huge_file_are_refused(folder):
    with pytest.raises(UnusableInputError, match=r"none\.csv: cannot be read: No such file"):
        read_manifest(folder / "none.csv")
    with pytest.raises(UnusableInputError, match="series: it is not a file"):
        read_manifest(folder / "series")
    huge = folder / "huge.csv"
    with huge.open("wb") as file:
        file.truncate(20 * 1024**2)
    with pytest.raises(UnusableInputError, match="expected at most"):
        read_manifest(huge)


GOOD = b"sample,stack,subject,group,batch\nm1,a.tif,s1,c,May\nm2,b.tif,s2,t,May\n"


@given(
    position=st.integers(0, len(GOOD) - 1),
    inserted=st.binary(max_size=6),
    removed=st.integers(0, 12),
)
@settings(max_examples=300, deadline=None, derandomize=True)
def test_a_damaged_manifest_is_read_or_refused_in_one_line(
    tmp_path_factory, position, inserted, removed
):
    folder = tmp_path_factory.getbasetemp() / "damaged"
    folder.mkdir(exist_ok=True)
    for name in ("a.tif", "b.tif"):
        (folder / name).touch()
    path = written(folder, GOOD[:position] + inserted + GOOD[position + removed :])
    try:
        rows, line = read_manifest(path).rows, ""
    except UnusableInputError as refusal:
        rows, line = (), str(refusal)
    assert "\n" not in line
    assert all((folder / row.sample).resolve().parent == folder for row in rows)
