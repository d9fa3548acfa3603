"""The low-rank field against the full covariance it stands for."""

from __future__ import annotations

import numpy as np
import pytest

from sampler.uncertainty.field import NEGLECTED_SHARE, local_field


@pytest.mark.parametrize(("size", "range_mm"), [((510, 515), 120.0), ((510, 515), 60.0), ((457, 610), 300.0), ((600, 60), 80.0)])
def test_neglected_variance_at_the_worst_point(size, range_mm):
    field = local_field(*size, range_mm, (0.4, 0.5))
    x, y = (np.linspace(-s / 2, s / 2, 61) for s in size)
    points = np.stack(np.meshgrid(x, y), axis=-1).reshape(-1, 2)
    assert field.neglected(points).max() < NEGLECTED_SHARE
    assert field.neglected(points).max() > NEGLECTED_SHARE / 20  # no more directions than needed


def test_rank_of_the_usual_case():
    """About 40 per axis for a range of 120 mm on 510×515 mm."""
    assert 25 <= local_field(510, 515, 120.0, (1, 1)).rank <= 44


def test_covariance_of_the_field(rng):
    field = local_field(510, 515, 100.0, (1, 1))
    xy = rng.uniform(-250, 250, (40, 2))
    full = np.exp(-((xy[:, None] - xy) ** 2).sum(axis=2) / (2 * 100.0**2))
    basis = field.basis(xy)
    assert basis @ basis.T == pytest.approx(full, abs=2 * NEGLECTED_SHARE)


def test_a_very_short_range_is_cut_and_says_so():
    field = local_field(510, 515, 8.0, (1, 1))
    assert field.rank == 400
    assert 0.5 < field.neglected(np.array([[0.0, 0.0]]))[0] <= 1.0
