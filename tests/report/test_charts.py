import numpy as np
import pandas as pd
import pytest
from made_report import NAMES, bare_graph, changed, made_content, made_graph, one_tube

from ramulus.report import charts
from ramulus.report.figures import _MAKERS as MAKERS
from ramulus.report.figures import figures


@pytest.fixture(scope="module")
def content():
    return made_content()


def only_axes(figure):
    assert len(figure.axes) == 1
    return figure.axes[0]


def test_the_histogram_holds_all_length_outside_the_zones(content):
    axes = only_axes(charts.radii(content))
    steps = [patch.get_data() for patch in axes.patches]
    drawn_mm = sum((top - baseline).sum() for top, _, baseline in steps)
    assert drawn_mm == pytest.approx(content.graph.segment_length_um().sum() / 1000)


def test_the_resolvable_limit_stands_in_the_histogram(content):
    axes = only_axes(charts.radii(content))
    assert [line.get_xdata()[0] for line in axes.lines if len(line.get_xdata())] == [1.1]
    names = [text.get_text()[2:] for text in axes.texts]
    assert names == ["resolved", "too thin to size", " smallest resolved radius 1.1 µm"]


def test_the_orders_line_has_the_summarys_ratio(content):
    figure = charts.order_chart(content, "n_elements", title="", y="", ratio="branching_ratio")
    axes = only_axes(figure)
    line = next(line for line in axes.lines if line.get_color() == charts.ORANGE)
    steps = line.get_ydata()[:-1] / line.get_ydata()[1:]
    assert steps == pytest.approx([4.9, 4.9])
    figure = charts.order_chart(
        content, "diameter_um_mean", title="", y="", ratio="diameter_ratio", spread="diameter_um_sd"
    )
    line = next(line for line in only_axes(figure).lines if line.get_color() == charts.ORANGE)
    assert line.get_ydata()[1:] / line.get_ydata()[:-1] == pytest.approx([1.73, 1.73])


def test_a_ratio_without_a_value_draws_no_line(content):
    figure = charts.order_chart(
        content, "element_length_um_mean", title="", y="", ratio="length_ratio"
    )
    assert charts.ORANGE not in [line.get_color() for line in only_axes(figure).lines]


def test_the_cube_law_shows_used_and_unused_junctions_and_both_lines(content):
    axes = only_axes(charts.cube_law(content))
    lines = {line.get_label(): line.get_xydata() for line in axes.lines}
    used = content.tables["junctions"]["used"]
    assert len(lines["used"]) == used.sum()
    assert len(lines["not used"]) == (~used).sum()
    assert lines["exponent 3"][:, 0] == pytest.approx(lines["exponent 3"][:, 1])
    pooled = lines["pooled 2.9 (equal daughters)"]
    # With exponent g two equal daughters have radius 2**(-1/g) of the parent's.
    assert pooled[:, 1] / pooled[:, 0] == pytest.approx(2 * (2 ** (-1 / 2.9)) ** 3)


def test_residuals_stand_at_their_parents_order(content):
    axes = only_axes(charts.cube_residuals(content))
    dots = next(line for line in axes.lines if line.get_marker() == "o").get_xydata()
    junctions = content.tables["junctions"]
    used = junctions[junctions["used"]]
    order = content.tables["segments"]["order"].to_numpy()[used["parent_segment"]]
    assert np.abs(dots[:, 0] - order.astype(float)).max() < 0.3
    assert dots[:, 1] == pytest.approx(used["cube_residual_log"].to_numpy())


def test_the_shares_of_the_resistance_add_up_to_one(content):
    axes = only_axes(charts.dominance(content))
    drawn = axes.lines[0].get_ydata()
    assert drawn[-1] == pytest.approx(1.0)
    assert (np.diff(np.diff(drawn)) <= 1e-12).all()


def test_pressure_is_shown_in_pascal_and_mmhg(content):
    axes = only_axes(charts.pressures(content))
    write = axes.yaxis.get_major_formatter()
    # 1 mmHg = 133.322 Pa (conventional millimetre of mercury).
    assert write(133.322 * 30, None) == "4,000 (30)"
    assert [len(line.get_xdata()) for line in axes.lines] == [3, 3]
    left, right = axes.get_xlim()
    assert left > right  # the inlet's order on the left


def test_attenuation_is_relative_to_the_brightest_plane(content):
    lines = only_axes(charts.planes(content)).lines
    assert lines[0].get_ydata().max() == 1.0
    assert lines[0].get_ydata()[-1] == pytest.approx(12 / 30)
    assert lines[0].get_xdata()[1] == content.graph.spacing_um[0]


def test_thickness_of_equal_vessels_is_flat():
    graph = made_graph(80)
    graph = graph.replace(point_radius_um=np.full(graph.n_points, 4.0))
    axes = only_axes(charts.thickness(made_content(graph=graph)))
    assert axes.lines[0].get_ydata() == pytest.approx(4.0)


def test_the_twins_classes_are_named(content):
    axes = only_axes(charts.twin_errors(content))
    assert [t.get_text() for t in axes.get_xticklabels()] == ["1.2 to 2", "8 and more"]
    dots = next(line for line in axes.lines if line.get_marker() == "o")
    assert dots.get_ydata() == pytest.approx([5.0, 0.1])


def test_a_lone_vessel_gives_reasons_not_failures():
    drawn, left_out = figures(bare_graph(made_content(), one_tube()))
    assert set(drawn) == {"image_graph.png", "radii.png"}
    assert left_out["order_numbers.png"] == "fewer than two orders have a value"
    assert left_out["cube_law.png"] == "no junction has a parent and measured daughters"
    assert left_out["resistance.png"] == "no path joins the inlet to an outlet"
    assert left_out["pressure.png"] == "no order carries flow"
    assert left_out["twin.png"] == "no radius of a twin could be compared"
    assert left_out["planes.png"].startswith("there is no image")


@pytest.mark.parametrize("name", NAMES)
def test_each_table_may_be_empty_or_all_undefined(content, name):
    table = content.tables[name]
    undefined = table.astype(object).where(table.isna(), None)
    for stand_in in (pd.DataFrame(), table.iloc[:0], undefined):
        with_it = changed(content, tables={**content.tables, name: stand_in})
        for make in MAKERS.values():
            made = make(with_it)
            assert (made and "\n" not in made) if isinstance(made, str) else made.axes


def test_all_tables_may_be_all_undefined_and_the_rest_is_drawn(content):
    tables = {n: t.astype(object).where(t.isna(), None) for n, t in content.tables.items()}
    drawn, left_out = figures(changed(content, tables=tables))
    assert len(drawn) + len(left_out) == len(MAKERS)
    assert "radii.png" in drawn
    assert "cube_law.png" in left_out
