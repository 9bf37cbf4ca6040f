import numba
import numpy as np
import pytest

from ramulus.errors import UnusableInputError
from ramulus.image.mask import Mask, Skeleton
from ramulus.image.thin import thin, without_corners
from ramulus.network._centreline_kernels import evenly_spaced, smooth_to_slack
from ramulus.network.centreline import CentrelineSettings, meeting_points, smooth
from ramulus.network.graph import CentrelineGraph
from ramulus.network.trace import trace

SMALL = numba.config.DISABLE_JIT
ISOTROPIC, COARSE = (1.0, 1.0, 1.0), (3.0, 1.0, 1.0)


def chain_of(curve_um, spacing_um, rng):
    """The graph of a curve's voxels: what tracing would see of an ideal skeleton."""
    spacing = np.array(spacing_um)
    curve_um = curve_um - curve_um.min(axis=0) + 4 * spacing + rng.uniform(0, 1, 3) * spacing
    voxels = np.unique(np.rint(curve_um / spacing).astype(np.int64), axis=0)
    shape = tuple((voxels.max(axis=0) + 5).tolist())
    radii = np.ones(len(voxels), dtype=np.float32)
    return trace(without_corners(Skeleton(voxels, radii, shape, spacing_um)))


def turned(curve_um, rng):
    rotation, _ = np.linalg.qr(rng.normal(size=(3, 3)))
    return curve_um @ rotation


# The bounds are those of the project's brief on methods: 1 % for random lines of 20 voxels or more,
# 2 % for helices of radius 5 voxels or more; chains of voxels are 9 % too long.
@pytest.mark.parametrize("spacing_um", [ISOTROPIC, COARSE])
@pytest.mark.parametrize("length", [20, 50])
def test_random_lines_have_their_length(length, spacing_um):
    rng = np.random.default_rng(length)
    measured, raw = [], []
    for _ in range(8 if SMALL else 60):
        axis = rng.normal(size=3)
        graph = chain_of(
            np.linspace(0, length, 20 * length)[:, None] * axis / np.linalg.norm(axis),
            spacing_um,
            rng,
        )
        true = np.linalg.norm(np.subtract(*graph.node_position_um))
        raw.append(graph.segment_length_um().sum() / true)
        measured.append(smooth(graph, grid_um=spacing_um).segment_length_um().sum() / true)
    assert abs(np.mean(measured) - 1) < 0.01 + 0.01 * SMALL
    assert np.std(measured) < 0.02
    assert np.mean(raw) > 1.05


@pytest.mark.parametrize(
    ("radius", "spacing_um"), [(5, ISOTROPIC), (10, ISOTROPIC), (20, ISOTROPIC), (15, COARSE)]
)
def test_helices_have_their_length(radius, spacing_um):
    rng = np.random.default_rng(radius)
    error = []
    for _ in range(2 if SMALL else 16):
        turn = np.linspace(0, 6 * np.pi, 6000)
        pitch = rng.uniform(2, 4) * radius
        helix = np.stack(
            [pitch * turn / (2 * np.pi), radius * np.cos(turn), radius * np.sin(turn)], 1
        )
        true = np.linalg.norm(np.diff(helix, axis=0), axis=1).sum()
        graph = chain_of(turned(helix, rng), spacing_um, rng)
        error.append(smooth(graph, grid_um=spacing_um).segment_length_um().sum() / true - 1)
    assert abs(np.mean(error)) < 0.02 + 0.03 * SMALL


def test_ends_are_held_and_steps_are_even():
    rng = np.random.default_rng(1)
    graph = chain_of(turned(np.stack([np.linspace(0, 40, 900)] * 3, 1), rng), ISOTROPIC, rng)
    line = smooth(graph, grid_um=ISOTROPIC)
    np.testing.assert_array_equal(line.node_position_um, graph.node_position_um)
    np.testing.assert_array_equal(
        line.point_position_um[[0, -1]], graph.node_position_um[graph.segment_nodes[0]]
    )
    steps = np.linalg.norm(np.diff(line.point_position_um, axis=0), axis=1)
    assert steps.max() < 0.52
    assert steps.min() > 0.4


def test_the_step_is_set_in_finest_voxel_edges():
    graph = chain_of(
        np.linspace(0, 30, 600)[:, None] * [0, 1.0, 0], (4.0, 2.0, 2.0), np.random.default_rng(0)
    )
    line = smooth(graph, grid_um=(4, 2, 2), settings=CentrelineSettings(step_voxels=2.0))
    assert line.step_um()[1:].mean() == pytest.approx(4.0, rel=0.15)


def test_short_segments_keep_their_chord():
    graph = CentrelineGraph.from_polylines(
        [[0, 0, 0], [0, 0, 2]], [[0, 1]], [[[0, 0, 0], [0, 0, 1], [0, 0, 2]]],
        spacing_um=ISOTROPIC, point_radius_map_um=np.ones(3),
    )  # fmt: skip
    assert smooth(graph, grid_um=ISOTROPIC).segment_length_um().tolist() == [2.0]


def test_loops_and_wiring_stay():
    angle = np.linspace(0, 2 * np.pi, 400)
    ring = np.stack([4 + 0 * angle, 15 + 10 * np.cos(angle), 15 + 10 * np.sin(angle)], axis=1)
    graph = chain_of(ring, ISOTROPIC, np.random.default_rng(2))
    line = smooth(graph, grid_um=ISOTROPIC)
    np.testing.assert_array_equal(line.segment_nodes, graph.segment_nodes)
    assert line.segment_length_um()[0] == pytest.approx(20 * np.pi, rel=0.02)


def test_a_graph_without_segments_stays_as_it_is():
    empty = CentrelineGraph.from_polylines(np.zeros((0, 3)), np.zeros((0, 2)), [])
    assert smooth(empty, grid_um=ISOTROPIC).n_segments == 0


def test_a_bad_grid_is_refused():
    graph = chain_of(
        np.linspace(0, 9, 200)[:, None] * [1.0, 0, 0], ISOTROPIC, np.random.default_rng(0)
    )
    with pytest.raises(UnusableInputError, match="grid_um"):
        smooth(graph, grid_um=(1.0, 0.0, 1.0))


def plain_smoothing(points, strength):
    """The minimum of squared residuals and squared second differences, by dense linear algebra."""
    n = len(points)
    second = np.diff(np.eye(n), n=2, axis=0)
    held = np.zeros((n, n))
    held[[0, -1], [0, -1]] = 1e9
    system = np.eye(n) + strength * second.T @ second + held
    return np.linalg.solve(system, points + held @ points)


def test_kernel_equals_plain_smoothing_at_full_strength():
    rng = np.random.default_rng(3)
    points = np.cumsum(rng.normal(size=(15, 3)), axis=0)
    out = np.empty_like(points)
    smooth_to_slack(points, np.ones(15), np.ones(3), np.ones(3), 1e9, 2.5, out)
    expected = plain_smoothing(points, 2.5)
    for _ in range(2):
        expected = expected + plain_smoothing(points - expected, 2.5)
    np.testing.assert_allclose(out, expected, atol=1e-6)


def test_even_spacing_of_a_bent_line():
    points = np.array([[0.0, 0, 0], [0, 0, 3], [0, 4, 3]])
    even, values = evenly_spaced(points, np.array([0.0, 3.0, 7.0]), 1.0, 2)
    np.testing.assert_allclose(values, np.arange(8.0), atol=1e-12)
    np.testing.assert_allclose(even[5], [0, 2, 3], atol=1e-12)


def fork(half_angle_deg, radii, arm=24.0, size=(15, 64, 64)):
    """Mask of a parent along x that forks in the middle, and where the axes meet."""
    node = np.array([7.0, 32.0, 30.0])
    lean = np.radians(half_angle_deg)
    ends = [
        node - [0, 0, arm],
        node + arm * np.array([0, np.sin(lean), np.cos(lean)]),
        node + arm * np.array([0, -np.sin(lean), np.cos(lean)]),
    ]
    grid = np.stack(np.meshgrid(*map(np.arange, size), indexing="ij"), axis=-1)
    inside = np.zeros(size, dtype=bool)
    for end, radius in zip(ends, radii, strict=True):
        t = np.clip(((grid - node) @ (end - node)) / arm**2, 0, 1)
        inside |= np.linalg.norm(grid - node - t[..., None] * (end - node), axis=-1) <= radius
    return inside, node


# Exact forks: the medial axis forks where the daughters' lumens part, further down than the axes
# meet; the more so the smaller the angle.
@pytest.mark.parametrize("half_angle_deg", [25, 37.5, 50])
@pytest.mark.parametrize("radii", [(4.0, 3.2, 3.2), (4.0, 3.8, 2.2)])
def test_a_junction_is_put_where_the_axes_meet(half_angle_deg, radii):
    inside, true_um = fork(half_angle_deg, radii)
    raw = trace(thin(Mask(inside, ISOTROPIC)))
    line = smooth(raw, grid_um=ISOTROPIC)
    off = [
        np.linalg.norm(g.node_position_um[g.node_degree() == 3][0] - true_um) for g in (raw, line)
    ]
    assert off[1] < 1.5
    assert off[1] < off[0] + 0.2


def test_meeting_points_of_straight_axes_are_exact():
    node = np.array([3.0, 5.0, 7.0])
    rng = np.random.default_rng(4)
    ends = [node + 30 * d / np.linalg.norm(d) for d in rng.normal(size=(3, 3))]
    off = node + np.array([0.9, -0.6, 0.5])
    lines = []
    for end in ends:
        line = np.linspace(node, end, 60)
        line[0] = off
        lines.append(line)
    graph = CentrelineGraph.from_polylines(
        [off, *ends], [[0, 1], [0, 2], [0, 3]], lines, [np.full(60, 2.0)] * 3, spacing_um=ISOTROPIC
    )
    found = meeting_points(graph, radius_um=graph.point_radius_um)
    assert np.linalg.norm(found[0] - node) < 0.1
    np.testing.assert_array_equal(found[1:], graph.node_position_um[1:])


def test_a_junction_moves_no_further_than_the_widest_radius():
    lines = [
        np.linspace([0.0, 0, 0], end, 40) for end in ([0.0, 0, 30], [0.0, 1, -30], [30.0, 9, 0])
    ]
    lines[0][1:, 1] += 10  # an axis that passes far off
    graph = CentrelineGraph.from_polylines(
        [[0, 0, 0], *(line[-1] for line in lines)], [[0, 1], [0, 2], [0, 3]], lines,
        [np.full(40, 2.0)] * 3, spacing_um=ISOTROPIC,
    )  # fmt: skip
    found = meeting_points(graph, radius_um=graph.point_radius_um)
    assert np.linalg.norm(found[0]) <= 2.0 + 1e-9
