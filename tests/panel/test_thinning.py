import numpy as np

from sampler.panel.thinning import thinned


def test_thinned_keeps_few_points_alone(rng):
    xy = rng.uniform(size=(50, 2))
    np.testing.assert_array_equal(thinned(xy, 50), np.arange(50))


def test_thinned_is_bounded_and_covers(rng):
    xy = rng.uniform(-200, 200, size=(100_000, 2))
    rows = thinned(xy, 4900)
    assert 4000 < len(rows) <= 4900
    assert len(set(rows.tolist())) == len(rows)
    counts, *_ = np.histogram2d(*xy[rows].T, bins=20, range=[[-200, 200]] * 2)
    assert counts.min() > 0.7 * 4900 / 400


def test_thinned_points_on_a_line():
    assert len(thinned(np.stack([np.linspace(0, 1, 9000), np.zeros(9000)], axis=1), 4900)) == 70
