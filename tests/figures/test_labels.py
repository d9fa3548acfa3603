from __future__ import annotations

import numpy as np

from sampler.figures.labels import place_labels


def shared_area(centres, sizes):
    gap = (sizes[:, None] + sizes[None]) / 2 - np.abs(centres[:, None] - centres[None])
    area = np.clip(gap, 0, None).prod(axis=2)
    return area[np.triu_indices(len(centres), 1)]


def test_a_hundred_numbers_in_clusters_do_not_overlap_badly(rng):
    """Sites of a D-optimal plan gather in corners; boxes of numbers there must stay apart."""
    corners = np.array([[10, 10], [440, 10], [10, 440], [440, 440], [225, 225]])
    points = np.concatenate([corner + rng.uniform(-9, 9, (8, 2)) for corner in corners] + [rng.uniform(10, 440, (60, 2))])
    sizes = np.tile([10.5, 7.5], (100, 1))
    centres = place_labels(points, sizes, np.array([450.0, 450.0]))
    assert (shared_area(centres, sizes) > 0.25 * 10.5 * 7.5).sum() <= 2
    assert (np.linalg.norm(centres - points, axis=1) < 40).all()
    assert (centres > 0).all()
    assert (centres < 450).all()


def test_a_number_keeps_off_its_own_dot_and_inside_the_frame():
    centres = place_labels(np.array([[448.0, 448.0]]), np.array([[10.0, 7.0]]), np.array([450.0, 450.0]))
    assert (centres[0] + np.array([5.0, 3.5]) <= 450.0 + 1e-9).all()
    assert (np.abs(centres[0] - 448.0) >= np.array([5.0, 3.5])).any()
