"""Drawing: volumes, blur, light and noise against closed forms and scipy; slabs byte for byte."""

import numba
import numpy as np
import pytest
from scipy import ndimage as ndi

from ramulus.errors import UnusableInputError
from ramulus.network.graph import CentrelineGraph
from ramulus.phantom._draw_kernels import cone_distance
from ramulus.phantom.draw import DrawSettings, compose, draw, draw_slab
from ramulus.phantom.tubes import arc_tube, ellipse_axes_um, straight_tube

PLAIN = DrawSettings(
    sigma_um=(0, 0, 0), contrast=1.0, background=0.0, snr=0, dtype="float32"
)  # what is drawn is the covered share of each voxel
HARD = DrawSettings(
    sigma_um=(1.2, 0.8, 0.8), background_gradient=0.5, uneven_filling=0.2, dim_thin_power=0.3,
    attenuation_length_um=60, flicker=0.1, debris=5, noise="poisson", noise_correlation_voxels=0.7,
)  # fmt: skip


def volume_um3(graph, settings=PLAIN, **more):
    image = draw(graph, settings=settings, seed=0, **more)
    return float(image.read().sum(dtype=np.float64) * np.prod(image.spacing_um))


# ---------------------------------------------------------------------- volumes


@pytest.mark.parametrize("spacing_um", [(1.0, 1.0, 1.0), (3.0, 1.0, 1.0), (5.0, 1.0, 1.0)])
@pytest.mark.parametrize("radius_um", [1.2, 2.0, 3.5])
def test_a_tube_has_its_volume_in_any_direction_at_any_offset(radius_um, spacing_um):
    rng = np.random.default_rng(int(10 * radius_um + spacing_um[0]))
    shape = tuple(int(25 / s) for s in spacing_um)
    for _ in range(2):
        tube = straight_tube(
            radius_um=radius_um, direction=rng.normal(size=3), length_um=12, shape=shape,
            spacing_um=spacing_um, offset_um=rng.uniform(-0.5, 0.5, 3),
        )  # fmt: skip
        # a cylinder and two half balls: the drawn vessel is the union of balls along its axis
        expected = np.pi * radius_um**2 * 12 + 4 / 3 * np.pi * radius_um**3
        assert volume_um3(tube) == pytest.approx(expected, rel=5e-3)


@pytest.mark.parametrize("offset", [0.0, 0.25, 0.37, 0.5])
@pytest.mark.parametrize("radius_um", [1.2, 2.0])
@pytest.mark.parametrize("axis", [0, 1, 2])
def test_a_tube_cut_by_the_faces_has_its_volume_at_any_offset(axis, radius_um, offset):
    shape, direction = [9, 9, 9], [0, 0, 0]
    shape[axis], direction[axis] = 6, 1
    tube = straight_tube(
        radius_um=radius_um, direction=direction, shape=tuple(shape), spacing_um=(1, 1, 1),
        offset_um=(offset, 0.7 * offset, 0.3 * offset),
    )  # fmt: skip
    assert volume_um3(tube) == pytest.approx(np.pi * radius_um**2 * 6, rel=5e-3)


def test_a_tapered_tube_has_the_volume_of_its_balls():
    tube = straight_tube(
        radius_um=4, end_radius_um=1.5, direction=(1, 2, 3), length_um=14, shape=(24, 24, 24),
        spacing_um=(1, 1, 1),
    )  # fmt: skip
    # solid of revolution: the outermost ball at every place along the axis
    t = np.linspace(0, 14, 1501)
    r = 4 + (1.5 - 4) * t / 14
    x = np.linspace(-4.5, 17, 2001)
    across = (r**2 - (x[:, None] - t) ** 2).max(axis=1).clip(0)
    assert volume_um3(tube) == pytest.approx(np.pi * np.trapezoid(across, x), rel=5e-3)


def test_a_torus_has_its_volume():
    ring = arc_tube(
        radius_um=2.5, bend_radius_um=8, angle_deg=360, shape=(12, 26, 26), spacing_um=(1, 1, 1),
        offset_um=(0.3, 0.1, 0.4), step_um=0.5,
    )  # fmt: skip
    # Pappus: 2 pi R times pi r^2
    assert volume_um3(ring) == pytest.approx(2 * np.pi * 8 * np.pi * 2.5**2, rel=5e-3)


@pytest.mark.parametrize("flatness", [0.8, 0.5])
def test_an_elliptical_tube_has_its_area_and_its_axes(flatness):
    tube = straight_tube(
        radius_um=4, direction=(0, 0, 1), shape=(21, 21, 8), spacing_um=(1, 1, 1),
        offset_um=(0.2, 0.3, 0),
    )  # fmt: skip
    wide_axis = [[np.sin(0.4), np.cos(0.4), 0]]
    image = draw(
        tube, settings=PLAIN, seed=0, flatness=np.array([flatness]), wide_axis=wide_axis
    ).read()
    area = image.sum(axis=(0, 1)) / 1.0
    assert area == pytest.approx(np.full(8, np.pi * 4**2), rel=5e-3)
    wide, narrow, _ = ellipse_axes_um(4, flatness)
    z, y = np.mgrid[:21, :21] - np.array([10.2, 10.3])[:, None, None]
    along = np.sin(0.4) * z + np.cos(0.4) * y
    across = np.cos(0.4) * z - np.sin(0.4) * y
    share = image[:, :, 3] / image[:, :, 3].sum()
    # second moments of an ellipse: a^2 / 4; the voxel's own 1/12 is added
    assert (share * along**2).sum() == pytest.approx(wide**2 / 4 + 1 / 12, rel=0.01)
    assert (share * across**2).sum() == pytest.approx(narrow**2 / 4 + 1 / 12, rel=0.01)


def test_a_stained_wall_surrounds_the_lumen():
    tube = straight_tube(radius_um=3, direction=(0, 0, 1), shape=(15, 15, 6), spacing_um=(1, 1, 1))
    wall = PLAIN.model_copy(update={"wall_um": 1.5, "lumen_level": 0.2})
    ring, lumen = np.pi * (4.5**2 - 3**2), np.pi * 3**2
    assert volume_um3(tube, wall) == pytest.approx(6 * (ring + 0.2 * lumen), rel=5e-3)
    assert draw(tube, settings=wall, seed=0).read()[7, 7, 3] == pytest.approx(0.2)


def test_overlapping_vessels_are_no_brighter():
    line = [[10, 10, -0.5], [10, 10, 19.5]]
    once = CentrelineGraph.from_polylines(
        line, [[0, 1]], [line], [[3, 3]], node_kind=[2, 2], spacing_um=(1, 1, 1),
        extent_um=(21, 21, 20),
    )  # fmt: skip
    twice = CentrelineGraph.from_polylines(
        line, [[0, 1], [0, 1]], [line, line], [[3, 3], [2, 2]], node_kind=[2, 2],
        spacing_um=(1, 1, 1), extent_um=(21, 21, 20),
    )  # fmt: skip
    inner = np.s_[:, :, 2:-2]  # at the faces a node of degree 2 is no border end
    one, two = (draw(g, settings=PLAIN, seed=0).read()[inner] for g in (once, twice))
    np.testing.assert_allclose(two, one, atol=1e-6)


@pytest.mark.parametrize(("ra", "rb"), [(2.0, 2.0), (3.0, 1.0), (1.0, 2.5), (4.0, 0.5), (0.5, 6.0)])
def test_distance_to_a_cone_equals_the_nearest_of_many_balls(ra, rb):
    rng = np.random.default_rng(5)
    t = np.linspace(0, 1, 4001)
    for along, across in rng.uniform(-6, 9, (30, 2)):
        square = along**2 + across**2
        balls = np.hypot(along - 4 * t, across) - (ra + (rb - ra) * t)
        distance, place = cone_distance(along, square, 4.0, (ra - rb) / 4.0, ra, rb)
        assert distance == pytest.approx(balls.min(), abs=1e-5)
        assert abs(np.hypot(along - 4 * place, across) - (ra + (rb - ra) * place) - distance) < 1e-4


# ---------------------------------------------------------------------- blur


def bent_vessel(spacing_um=(1.0, 1.0, 1.0), shape=(18, 20, 22)):
    points = np.array([[6.0, 7, 7], [8, 9, 10], [9, 11, 13], [9, 12, 15]])
    return CentrelineGraph.from_polylines(
        points[[0, -1]], [[0, 1]], [points], [[2, 2, 1.6, 1.5]], spacing_um=spacing_um,
        extent_um=tuple(n * s for n, s in zip(shape, spacing_um, strict=True)),
    )  # fmt: skip


def test_blur_equals_scipy_gaussian_filter_with_one_cell_a_voxel():
    graph = bent_vessel()
    sharp = draw(graph, settings=PLAIN, seed=0).read()
    blurred = draw(
        graph, settings=PLAIN.model_copy(update={"sigma_um": (1.1, 0.8, 0.9), "oversampling": 1}),
        seed=0,
    ).read()  # fmt: skip
    # scipy 1.13 and later; the vessel is further from every face than the kernel reaches
    expected = ndi.gaussian_filter(sharp.astype(float), (1.1, 0.8, 0.9), mode="constant")
    np.testing.assert_allclose(blurred, expected, atol=2e-6)


def test_blur_with_cells_finer_than_voxels_equals_scipy_on_the_fine_grid():
    sigma = (0.9, 0.5, 0.6)
    settings = PLAIN.model_copy(update={"sigma_um": sigma, "oversampling": 2})
    blurred = draw(bent_vessel(), settings=settings, seed=0).read()
    fine_graph = bent_vessel((0.5, 0.5, 0.5), (36, 40, 44))
    # fine cell (0, 0, 0) lies a quarter of a voxel before the voxel's centre
    fine = draw(fine_graph, settings=PLAIN, seed=0, origin_um=(-0.25, -0.25, -0.25)).read()
    fine = ndi.gaussian_filter(fine.astype(float), 2 * np.array(sigma), mode="constant")
    expected = fine.reshape(18, 2, 20, 2, 22, 2).mean(axis=(1, 3, 5))
    # their edge cells are split into other sub-cells
    np.testing.assert_allclose(blurred, expected, atol=4e-3)


@pytest.mark.parametrize("sigma_um", [0.6, 1.0, 1.5])
def test_the_axis_of_a_blurred_tube_is_as_bright_as_theory_says(sigma_um):
    tube = straight_tube(radius_um=2, direction=(0, 0, 1), shape=(19, 19, 5), spacing_um=(1, 1, 1))
    settings = PLAIN.model_copy(update={"sigma_um": (sigma_um,) * 3})
    image = draw(tube, settings=settings, seed=0).read()
    # A disc of radius r blurred by a Gaussian: 1 - exp(-r^2 / (2 s^2)) at its centre; elsewhere the
    # noncentral chi-square distribution with two degrees of freedom. Averaged here over the voxel.
    from scipy.stats import ncx2

    u = (np.arange(40) + 0.5) / 40 - 0.5
    rho_square = u[:, None] ** 2 + u**2
    expected = ncx2.cdf((2 / sigma_um) ** 2, 2, rho_square / sigma_um**2).mean()
    assert image[9, 9, 2] == pytest.approx(expected, abs=4e-3)


def test_a_vessel_cut_by_a_face_does_not_fade_there():
    tube = straight_tube(
        radius_um=2, direction=(0.3, 0.2, 1), shape=(20, 20, 12), spacing_um=(1, 1, 1)
    )
    settings = PLAIN.model_copy(update={"sigma_um": (1, 1, 1)})
    per_slice = draw(tube, settings=settings, seed=0).read().sum(axis=(0, 1))
    assert per_slice[[0, -1]] == pytest.approx(per_slice[[5, 6]], rel=0.01)


# ---------------------------------------------------------------------- slabs and threads


def test_slabs_of_any_size_give_the_same_bytes():
    graph = bent_vessel()
    whole = draw(graph, settings=HARD, seed=7).read()
    scene = compose(graph, settings=HARD, seed=7)
    for height in (1, 5, 18):
        slabs = [draw_slab(scene, z, min(z + height, 18)) for z in range(0, 18, height)]
        assert np.concatenate(slabs).tobytes() == whole.tobytes()


def test_one_thread_gives_the_same_bytes_as_many():
    graph = bent_vessel()
    many = draw(graph, settings=HARD, seed=7).read()
    before = numba.get_num_threads()
    numba.set_num_threads(1)
    try:
        assert draw(graph, settings=HARD, seed=7).read().tobytes() == many.tobytes()
    finally:
        numba.set_num_threads(before)


def test_another_seed_gives_other_noise():
    graph = bent_vessel()
    one, two = (draw(graph, settings=DrawSettings(), seed=s).read() for s in (1, 2))
    assert (one != two).mean() > 0.5


# ---------------------------------------------------------------------- light and noise


def empty(shape=(12, 40, 40)):
    point = [[1e4, 1e4, 1e4], [1e4, 1e4, 1e4 + 1]]
    return CentrelineGraph.from_polylines(
        point, [[0, 1]], [point], [[1, 1]], spacing_um=(1, 1, 1), extent_um=shape
    )


@pytest.mark.parametrize("correlation", [0.0, 1.0])
def test_gaussian_noise_has_the_sd_of_contrast_over_snr(correlation):
    settings = DrawSettings(
        contrast=300, background=5000, snr=6, dtype="float32", noise_correlation_voxels=correlation
    )
    noise = draw(empty(), settings=settings, seed=3).read() - 5000
    assert noise.std() == pytest.approx(50, rel=0.05)
    neighbours = np.corrcoef(noise[:, :, 1:].ravel(), noise[:, :, :-1].ravel())[0, 1]
    # the autocorrelation of Gaussian-smoothed noise one step away: exp(-1 / (4 sigma^2))
    assert neighbours == pytest.approx(np.exp(-0.25) if correlation else 0, abs=0.04)


def test_shot_noise_grows_with_the_signal_and_meets_snr_in_the_lumen():
    tube = straight_tube(
        radius_um=300, direction=(1, 0, 0), shape=(8, 40, 40), spacing_um=(1, 1, 1)
    )
    settings = DrawSettings(
        contrast=400, background=100, snr=8, noise="poisson", read_noise_share=0.2, dtype="float32"
    )
    lumen = draw(tube, settings=settings, seed=1).read()
    dark = draw(empty((8, 40, 40)), settings=settings, seed=1).read()
    assert lumen.mean() == pytest.approx(500, rel=0.01)
    assert lumen.std() == pytest.approx(50, rel=0.05)
    # read noise and a fifth (100 of 500) of the shot noise's variance
    assert dark.std() == pytest.approx(50 * np.sqrt(0.2 + 0.8 / 5), rel=0.05)


def test_dark_vessels_lie_below_the_background():
    settings = DrawSettings(polarity="dark", background=150, snr=0)
    image = draw(bent_vessel(), settings=settings, seed=0).read()
    assert image.dtype == np.uint8
    assert image.max() == 150
    assert 50 <= image.min() < 80


def test_grey_values_are_clipped_to_their_type():
    settings = DrawSettings(background=250, contrast=100, snr=0)
    image = draw(bent_vessel(), settings=settings, seed=0).read()
    assert image.max() == 255
    assert (
        draw(bent_vessel(), settings=settings.model_copy(update={"dtype": "uint16"}), seed=0)
        .read()
        .max()
        > 255
    )


def test_signal_falls_with_depth_by_the_attenuation_length():
    settings = DrawSettings(background=1000, snr=0, dtype="float32", attenuation_length_um=10)
    plane = draw(empty(), settings=settings, seed=0).read()[:, 0, 0]
    assert plane[10] / plane[0] == pytest.approx(np.exp(-1), rel=1e-6)


def test_the_background_changes_by_its_gradient_from_corner_to_corner():
    settings = DrawSettings(background=1000, snr=0, dtype="float32", background_gradient=0.6)
    image = draw(empty(), settings=settings, seed=0).read()
    assert image.max() - image.min() == pytest.approx(600, rel=1e-3)
    assert image.mean() == pytest.approx(1000, rel=1e-3)


def test_flicker_changes_whole_slices():
    settings = DrawSettings(background=1000, snr=0, dtype="float32", flicker=0.1)
    image = draw(empty((200, 2, 2)), settings=settings, seed=0).read()
    assert np.ptp(image, axis=(1, 2)).max() == 0
    assert image[:, 0, 0].std() == pytest.approx(100, rel=0.15)


def test_uneven_filling_has_its_sd_along_the_vessels():
    tube = straight_tube(radius_um=1, direction=(0, 0, 1), shape=(3, 3, 300), spacing_um=(1, 1, 1))
    settings = PLAIN.model_copy(update={"uneven_filling": 0.2, "uneven_length_um": 10})
    axis = draw(tube, settings=settings, seed=4).read()[1, 1]
    assert axis.std() == pytest.approx(0.2, rel=0.25)
    assert axis.mean() == pytest.approx(1, abs=0.05)


def test_thin_vessels_are_dimmed_by_the_power_asked_for():
    lines = [[[4, 4, -0.5], [4, 4, 9.5]], [[4, 16, -0.5], [4, 16, 9.5]]]
    graph = CentrelineGraph.from_polylines(
        np.concatenate(lines), [[0, 1], [2, 3]], lines, [[4, 4], [2, 2]], node_kind=[2] * 4,
        spacing_um=(1, 1, 1), extent_um=(9, 22, 10),
    )  # fmt: skip
    image = draw(graph, settings=PLAIN.model_copy(update={"dim_thin_power": 0.5}), seed=0).read()
    assert image[4, 4, 5] == pytest.approx(1.0)
    assert image[4, 16, 5] == pytest.approx(0.5**0.5)


def test_debris_keeps_clear_of_the_vessels():
    graph = bent_vessel()
    settings = PLAIN.model_copy(update={"debris": 12, "debris_clearance_um": 2.0})
    with_debris = draw(graph, settings=settings, seed=2).read()
    specks = with_debris - draw(graph, settings=PLAIN, seed=2).read()
    distance = ndi.distance_transform_edt(draw(graph, settings=PLAIN, seed=2).read() == 0)
    assert specks.sum() > 20
    assert distance[specks > 0].min() > 1.0


# ---------------------------------------------------------------------- refusals


def test_a_graph_without_radii_is_refused():
    line = [[1, 1, 1], [2, 2, 2]]
    graph = CentrelineGraph.from_polylines(
        line, [[0, 1]], [line], spacing_um=(1, 1, 1), extent_um=(4, 4, 4)
    )
    with pytest.raises(UnusableInputError, match="point_radius_um"):
        draw(graph, settings=PLAIN, seed=0)


def test_a_graph_without_a_grid_is_refused():
    graph = bent_vessel().replace(extent_um=(0.0, 0.0, 0.0))
    with pytest.raises(UnusableInputError, match="extent_um"):
        draw(graph, settings=PLAIN, seed=0)
    with pytest.raises(UnusableInputError, match="spacing_um"):
        draw(graph.replace(spacing_um=(0.0, 0.0, 0.0)), settings=PLAIN, seed=0)


def test_slices_outside_the_volume_are_refused():
    scene = compose(bent_vessel(), settings=PLAIN, seed=0)
    with pytest.raises(UnusableInputError, match=r"0\.\.18"):
        draw_slab(scene, 10, 19)
