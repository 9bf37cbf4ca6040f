import numpy as np
import pandas as pd
import pyvista
from small_graphs import ring_with_a_tail

from ramulus.network.vtp import vtp_bytes


def read_with_pyvista(content, folder):
    file = folder / "network.vtp"
    file.write_bytes(content)
    return pyvista.read(file)


def test_pyvista_reads_lines_radii_and_columns(tmp_path):
    graph = ring_with_a_tail()
    segments = graph.to_frames()["segments"]
    segments["order"] = pd.Series([2, None, 1, 1], dtype="Int64")
    mesh = read_with_pyvista(vtp_bytes(graph, segments), tmp_path)
    assert mesh.n_lines == graph.n_segments
    assert mesh.n_points == graph.n_points
    np.testing.assert_array_equal(mesh.points, graph.point_position_um[:, ::-1])
    np.testing.assert_array_equal(mesh.point_data["radius_um"], graph.point_radius_um)
    np.testing.assert_array_equal(mesh.cell_data["length_um"], graph.segment_length_um())
    np.testing.assert_array_equal(mesh.cell_data["node_b"], graph.segment_nodes[:, 1])
    np.testing.assert_array_equal(mesh.cell_data["order"], [2, np.nan, 1, 1])
    np.testing.assert_array_equal(mesh.cell_data["resolved"], [1, 1, 1, 1])
    assert "review" not in mesh.cell_data


def test_vtk_measures_the_same_lengths(tmp_path):
    graph = ring_with_a_tail()
    mesh = read_with_pyvista(vtp_bytes(graph, graph.to_frames()["segments"]), tmp_path)
    lengths = mesh.compute_cell_sizes(length=True, area=False, volume=False).cell_data["Length"]
    np.testing.assert_allclose(lengths, graph.segment_length_um())
    for k in range(graph.n_segments):
        assert mesh.get_cell(k).point_ids == list(
            range(*graph.points_of(k).indices(graph.n_points))
        )
