import csv
import io

import numpy as np
import pandas as pd
import pyarrow.parquet as pq
import pytest
from small_graphs import random_tree, ring_with_a_tail

from ramulus.errors import UnusableInputError
from ramulus.network.graph import NODE_KINDS
from ramulus.network.tables import csv_bytes, parquet_bytes, read_folder


def write(folder, graph, **changes):
    """Write a graph's tables into a folder, with some columns or tables changed."""
    frames = graph.to_frames()
    points = frames["points"]
    points["radius_um_high"] = points["radius_um"] + 1.959963984540054 * graph.point_radius_se_um
    points["radius_map_um"] = graph.point_radius_map_um
    points["in_zone"] = graph.point_in_zone
    for name, change in changes.items():
        frames[name] = change(frames[name])
    (folder / "nodes.csv").write_bytes(csv_bytes(frames["nodes"]))
    (folder / "segments.csv").write_bytes(csv_bytes(frames["segments"]))
    (folder / "points.parquet").write_bytes(parquet_bytes(frames["points"]))
    return folder


@pytest.mark.parametrize(
    "graph", [ring_with_a_tail(), random_tree(30, seed=4)], ids=["ring", "tree"]
)
def test_a_folder_reads_back_as_the_same_graph(tmp_path, graph):
    rng = np.random.default_rng(1)
    graph = graph.replace(
        point_radius_se_um=0.1 * graph.point_radius_um,
        point_in_zone=rng.random(graph.n_points) < 0.3,
        point_radius_map_um=rng.random(graph.n_points),
        segment_resolved=rng.random(graph.n_segments) < 0.5,
    )  # fmt: skip
    again = read_folder(write(tmp_path, graph))
    for name in graph.__slots__:
        expected, found = getattr(graph, name), getattr(again, name)
        if isinstance(expected, np.ndarray) and expected.dtype.kind == "f":
            np.testing.assert_allclose(found, expected, rtol=1e-8, err_msg=name)
        else:
            np.testing.assert_array_equal(found, expected, err_msg=name)


def test_inlets_stay_and_outlets_become_ends(tmp_path):
    graph = random_tree(8, seed=1)
    tips = np.flatnonzero(graph.node_degree() == 1)
    kind = graph.node_kind.copy()
    kind[tips] = NODE_KINDS.index("outlet")
    kind[tips[0]] = NODE_KINDS.index("inlet")
    names = read_folder(write(tmp_path, graph.replace(node_kind=kind))).node_kind_names()
    assert names[tips].tolist() == ["inlet", *["end"] * (len(tips) - 1)]


def test_outlets_beside_blind_ends_were_cut_by_the_border(tmp_path):
    graph = random_tree(8, seed=1)
    tips = np.flatnonzero(graph.node_degree() == 1)
    kind = graph.node_kind.copy()
    kind[tips[1:]] = NODE_KINDS.index("outlet")
    names = read_folder(write(tmp_path, graph.replace(node_kind=kind))).node_kind_names()
    assert names[tips].tolist() == ["end", *["border"] * (len(tips) - 1)]


def test_columns_beyond_the_needed_ones_may_be_absent(tmp_path):
    graph = random_tree(3)
    folder = write(
        tmp_path, graph, points=lambda t: t.drop(columns=["radius_map_um", "in_zone"]),
        segments=lambda t: t[["segment_id", "node_a", "node_b"]],
    )  # fmt: skip
    again = read_folder(folder)
    assert np.isnan(again.point_radius_map_um).all()
    assert not again.point_in_zone.any()
    assert again.segment_resolved.all()


def changed(column, row, value):
    def change(table):
        table = table.astype({column: object}) if isinstance(value, str) else table.copy()
        if isinstance(value, float):
            table = table.astype({column: float})
        table.loc[row, column] = value
        return table

    return change


@pytest.mark.parametrize(
    ("changes", "words"),
    [
        ({"nodes": changed("node_id", 1, 5)}, "nodes.csv: node_id is 0, 5, 2 ..., expected 0, 1"),
        ({"nodes": changed("kind", 1, "valve")}, "nodes.csv: kind is 'valve', expected one of"),
        ({"nodes": changed("x_um", 1, "left")}, "nodes.csv: x_um holds 'left', expected numbers"),
        ({"nodes": changed("x_um", 1, np.nan)}, "nodes.csv: x_um is nan in row 1, expected a"),
        ({"nodes": changed("x_um", 1, 900.0)}, "from its node 1 of nodes.csv"),
        ({"nodes": lambda t: t.drop(columns="kind")}, "nodes.csv: found no column 'kind'"),
        ({"segments": changed("node_b", 2, 99)}, "segment 2 joins the nodes"),
        ({"segments": changed("node_b", 2, -1)}, "expected node numbers from 0 to 6"),
        ({"segments": changed("node_b", 2, 1.5)}, "segment 2 joins the nodes"),
        ({"segments": lambda t: t.iloc[:-1]}, "segment_id does not run through the 5 segments"),
        ({"segments": lambda t: t.iloc[:0]}, "segments.csv: found no segment"),
        ({"points": lambda t: t.iloc[::-1]}, "segments.csv in order"),
        ({"points": lambda t: t.iloc[1:]}, "segment 0 starts"),
        ({"points": changed("radius_um", 1, -2.0)}, "radius_um is -2 in row 1, expected um > 0"),
        ({"points": changed("radius_um", 1, np.inf)}, "radius_um is inf in row 1"),
        ({"points": changed("z_um", 1, np.nan)}, "points.parquet: z_um is nan in row 1"),
        ({"points": lambda t: t.drop(columns="radius_um")}, "found no column 'radius_um'"),
        ({"points": lambda t: t.assign(segment_id="a")}, "segment_id holds 'a', expected numbers"),
    ],
)  # fmt: skip
def test_tables_that_cannot_be_are_refused_in_one_line(tmp_path, changes, words):
    with pytest.raises(UnusableInputError) as refused:
        read_folder(write(tmp_path, random_tree(6), **changes))
    assert words in str(refused.value)
    assert "\n" not in str(refused.value)


@pytest.mark.parametrize("name", ["nodes.csv", "segments.csv", "points.parquet"])
def test_missing_and_broken_files_are_named(tmp_path, name):
    folder = write(tmp_path, random_tree(3))
    (folder / name).write_bytes(b"\xff\xfe\x00 not a table")
    with pytest.raises(UnusableInputError, match=name):
        read_folder(folder)
    (folder / name).unlink()
    with pytest.raises(UnusableInputError, match=f"found no {name}, expected a graph folder"):
        read_folder(folder)


@pytest.mark.parametrize("text", ["=1+1", "+A1", "-A1", "@SUM(A1)", "\t=1", "\r=1", "\n=1", "-2+3"])
def test_no_text_cell_can_become_a_formula(text):
    table = pd.DataFrame({text: [text, "plain"], "mixed": [text, 4]})
    rows = list(csv.reader(io.StringIO(csv_bytes(table).decode(), newline="")))
    assert rows == [[f"'{text}", "mixed"], [f"'{text}", f"'{text}"], ["plain", "4"]]


def test_numbers_stay_numbers():
    table = pd.DataFrame({
        "negative": [-1.5, -2e-300], "text": ["-3", "+2.5e-7"],
        "order": pd.Series([None, -4], dtype="Int64"),
        "used": [True, False], "third": [1 / 3, np.nan], "words": [None, "a b"],
    })  # fmt: skip
    lines = csv_bytes(table).decode().split("\r\n")
    assert lines == [
        "negative,text,order,used,third,words", "-1.5,-3,,true,0.333333333,",
        "-2e-300,+2.5e-7,-4,false,,a b", "",
    ]  # fmt: skip


def test_quotes_commas_and_line_ends_survive():
    words = ['say "a", b', "two\r\nlines", "\u00b5m"]
    content = csv_bytes(pd.DataFrame({"words": words}))
    assert pd.read_csv(io.BytesIO(content))["words"].tolist() == words


def test_an_empty_table_has_its_header():
    assert csv_bytes(pd.DataFrame(columns=["a", "b"])) == b"a,b\r\n"


def test_pyarrow_reads_the_points_and_bytes_repeat():
    points = random_tree(5).to_frames()["points"]
    content = parquet_bytes(points)
    read = pq.read_table(io.BytesIO(content))
    assert read.column_names == list(points.columns)
    assert read["radius_um"].to_pylist() == points["radius_um"].tolist()
    assert parquet_bytes(points.copy()) == content
