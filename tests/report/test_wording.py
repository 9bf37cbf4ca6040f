import pytest
from made_report import bare_graph, made_content, one_tube

from ramulus.report.wording import (
    DEFINITIONS,
    dominant_rows,
    edit_rows,
    figure_groups,
    flag_rows,
    headline,
    resistance_rows,
    rule_rows,
    subtitle,
    verdict,
)
from ramulus.trust.flags import FLAG_RULES, Flag, raise_flags


@pytest.fixture(scope="module")
def content():
    return made_content()


def by_name(content):
    return {row.name: row for rows in figure_groups(content).values() for row in rows}


def test_figures_show_value_interval_unit_and_definition(content):
    row = by_name(content)["resistance"]
    assert row.value == "8.69 \N{MULTIPLICATION SIGN} 10¹⁴"
    assert row.interval == "8.40 \N{MULTIPLICATION SIGN} 10¹⁴ to 9.00 \N{MULTIPLICATION SIGN} 10¹⁴"
    assert row.unit == "Pa s/m³"
    assert row.meaning == DEFINITIONS["resistance"]


def test_a_figure_that_is_not_defined_says_why(content):
    row = by_name(content)["length ratio"]
    assert (row.value, row.unit, row.reason) == ("not defined", "", "only two orders are complete")


def test_counts_are_whole_and_long_lengths_are_in_millimetres():
    summary = {"segments": 123456, "total_length_um": 7.5e6, "ends": 9, "border_ends": 2}
    rows = by_name(made_content(summary=summary))
    assert rows["segments"].value == "123,456"
    assert (rows["total length"].value, rows["total length"].unit) == ("7,500", "mm")
    assert rows["free ends"].value == "9 (2 at the border)"


def test_an_empty_summary_gives_rows_without_values():
    assert {row.value for row in by_name(made_content(summary={})).values()} == {"not defined"}
    assert len(headline(figure_groups(made_content(summary={})))) == 6


def test_the_subtitle_names_voxels_and_where_the_spacing_comes_from(content):
    times = " \N{MULTIPLICATION SIGN} "
    assert (
        f" voxels of 2{times}1{times}1 µm along z, y, x (spacing from the header and the user)."
        in (subtitle(content))
    )
    bare = bare_graph(content, one_tube())
    assert subtitle(bare) == "A vessel graph whose radii were given; there is no image."


@pytest.mark.parametrize(
    ("facts", "word"),
    [({}, "pass"), ({"blur_assumed": 1.0}, "pass"), ({"bridged": 1.0}, "check"),
     ({"bridged": 1.0, "anisotropy": 9.0}, "reject")],
)  # fmt: skip
def test_the_verdict_is_that_of_the_worst_flag(facts, word):
    assert verdict(raise_flags(facts))[0] == word


def test_flags_show_their_limit_in_its_unit_with_its_source():
    flags = raise_flags({"saturated_share": 0.02, "orders_not_converged": 1.0, "bridged": 2.0})
    rows = {row["code"]: row for row in flag_rows(flags)}
    assert rows["saturation"]["value"] == "2 %"
    assert rows["saturation"]["limit"] == "at most 1 %"
    assert rows["saturation"]["source"] == "judgement, no source"
    assert rows["orders_not_converged"]["limit"] == "no"
    assert rows["bridges"]["limit"] == "at most 0"
    assert rows["bridges"]["section"] == "edits"


def test_a_flag_of_another_version_is_shown_all_the_same():
    (row,) = flag_rows([Flag("from_elsewhere", "check", 2.0, 1.0, "something was found")])
    assert (row["message"], row["value"], row["limit"]) == ("something was found", "2", "1")


def test_every_rule_is_listed_with_its_outcome():
    rows = {row["code"]: row for row in rule_rows({"anisotropy": 4.0, "bridged": 0.0})}
    assert len(rows) == len(FLAG_RULES)
    assert rows["anisotropy"]["outcome"] == "check"
    assert rows["anisotropy"]["limits"] == "check above 3 times, reject above 5.5 times"
    assert rows["bridges"]["outcome"] == "passed"
    assert rows["noise"]["outcome"] == "not judged"


def test_deciding_vessels_come_with_share_place_and_doubt(content):
    rows = list(dominant_rows(content))
    assert [row["segment"] for row in rows] == ["5", "1", "30"]
    assert rows[0]["review"] == "bridged"
    assert len(rows[0]["place"].split(", ")) == 3
    none = made_content(summary={"dominant_segments": [999]})
    assert list(dominant_rows(none)) == []


def test_resistance_is_given_in_pascal_and_in_mmhg(content):
    rows = list(resistance_rows(content))
    # 1 mmHg = 133.322387415 Pa; 1 m3 = 1e9 uL: 1.33322e15 Pa s/m3 is 1e4 mmHg s/uL.
    assert rows[1]["mmhg"] == "10,000"
    assert rows[1]["viscosity"] == "Pries 1994"
    assert rows[0]["shared"] == (
        "8 \N{MULTIPLICATION SIGN} 10¹⁴ to 1.2 \N{MULTIPLICATION SIGN} 10¹⁵"
    )
    assert rows[1]["shared"] == "\N{EN DASH}"


def test_edits_are_counted_by_what_and_by_whom(content):
    assert edit_rows(content.edits) == [
        ("join: gap", "by hand", 1),
        ("remove: spur", "automatic", 2),
    ]
