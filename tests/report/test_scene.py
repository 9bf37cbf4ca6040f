import json
import zlib
from base64 import b64decode

import numpy as np
import pytest
from made_report import bare_graph, made_content, made_graph, one_tube
from small_graphs import random_tree

from ramulus.report.scene import QUANTITIES, plotly_script, scene, scene_text


def array(text, kind):
    return np.frombuffer(b64decode(text), dtype=kind)


def points_of(found):
    grid = array(found["position"]["data"], "<u2").reshape(-1, 3)
    return found["position"]["low"] + grid * found["position"]["step"]


@pytest.fixture(scope="module")
def content():
    return made_content()


@pytest.fixture(scope="module")
def found(content):
    return scene(content)


def test_a_small_graph_is_shown_whole(content, found):
    graph = content.graph
    assert array(found["segment"], "<i4").tolist() == list(range(graph.n_segments))
    assert array(found["count"], "<i4").tolist() == graph.points_per_segment.tolist()
    step = found["position"]["step"]
    np.testing.assert_allclose(points_of(found), graph.point_position_um[:, ::-1], atol=step)
    assert step < 1e-4 * max(graph.extent_um)
    np.testing.assert_allclose(array(found["radius"], "<f4"), graph.point_radius_um, rtol=1e-6)
    assert found["note"] == ""


def test_every_quantity_can_be_chosen_and_undefined_values_stay_so(content, found):
    assert [c["name"] for c in found["colours"]] == [name for name, *_ in QUANTITIES]
    flow = next(c for c in found["colours"] if c["name"] == "flow_um3_per_s")
    table = content.tables["segments"]
    np.testing.assert_allclose(array(flow["values"], "<f4"), table["flow_um3_per_s"], rtol=1e-3)
    assert np.flatnonzero(np.isnan(array(flow["values"], "<f4"))).tolist() == [2]
    assert flow["low"] == table["flow_um3_per_s"].min()


def test_pressure_is_the_mean_of_both_ends_and_doubt_half_the_interval(content, found):
    by_name = {c["name"]: array(c["values"], "<f4") for c in found["colours"]}
    nodes, segments = content.tables["nodes"], content.tables["segments"]
    ends = nodes["pressure_pa"].to_numpy()[segments[["node_a", "node_b"]]]
    np.testing.assert_allclose(by_name["pressure_pa"], ends.mean(axis=1), rtol=1e-3)
    np.testing.assert_allclose(by_name["doubt"], 0.1, rtol=1e-3)


def test_what_is_not_known_is_offered_without_values():
    found = scene(bare_graph(made_content(), one_tube()))
    values = {c["name"]: c["values"] is not None for c in found["colours"]}
    assert values["radius_um"]
    assert not values["flow_um3_per_s"]
    assert not values["order"]
    json.dumps(found, allow_nan=False)


def test_segments_to_review_bring_their_reason(found):
    assert found["review"] == {"5": "bridged"}


def test_projections_are_carried_small_enough():
    wide = {name: np.random.default_rng(0).random((30, 2000)) for name in "zyx"}
    found = scene(made_content(projections=wide))["images"]["z"]
    assert found["shape"] == [30, 285]
    assert found["every"] == [1, 7]
    grey = array(found["data"], "u1").reshape(found["shape"])
    assert (grey.min(), grey.max()) == (0, 255)


def test_a_large_graph_is_thinned_and_says_so():
    graph = random_tree(20_000, seed=1)
    found = scene(bare_graph(made_content(), graph))
    counts = array(found["count"], "<i4")
    assert len(counts) == 8_000
    assert counts.min() == 2
    assert counts.sum() <= 24_000
    assert found["note"].startswith("Shown are 8,000 of 20,000 segments, the widest")
    shown = array(found["segment"], "<i4")
    radius = graph.segment_radius_um()
    assert radius[shown].min() >= np.sort(radius)[12_000]
    first = np.cumsum(counts) - counts
    ends = points_of(found)[[first[7], first[7] + counts[7] - 1]]
    expected = graph.node_position_um[graph.segment_nodes[shown[7]], ::-1]
    np.testing.assert_allclose(ends, expected, atol=found["position"]["step"])


def test_a_graph_without_segments_is_said_to_be_empty():
    graph = made_graph()
    none = graph.select_segments(np.zeros(graph.n_segments, dtype=bool))
    assert scene(bare_graph(made_content(), none))["note"] == "The graph has no segment."


def test_the_packed_scene_is_json_and_the_script_is_plotlys(content, found):
    text = zlib.decompress(b64decode(scene_text(content))).decode()
    assert json.loads(text) == json.loads(json.dumps(found))
    assert "plotly.js v" in zlib.decompress(b64decode(plotly_script()))[:300].decode()
    assert len(plotly_script()) < 2.1e6
