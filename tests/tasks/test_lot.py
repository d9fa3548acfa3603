"""The mean of a lot against simulation, finite population, floors, and the curve."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from invented_plans import core_layout, study_of

from sampler.errors import InputError
from sampler.model.basis import design_blocks, places
from sampler.tasks.lot import Spread, lot, mean_covariance, told
from sampler.tasks.question import question
from sampler.tasks.study import Measure, RegionLimit, SearchOptions, TermLimit
from sampler.uncertainty.noise import Noise

TERMS = ("translation_x", "translation_y", "scale_x", "scale_y", "rotation", "orthogonality")


def study(limits, **changes):
    made = study_of(core_layout(8), ("affine",), limits)
    return replace(made, noise=Noise((0.3, 0.3), (0.2, 0.2)), search=SearchOptions(seconds=3), **changes)


def spread(size):
    return Spread(TERMS, np.diag(np.array([0.4, 0.3, 3.0, 2.0, 2.0, 1.0]) * size) ** 2)


def test_covariance_of_the_lots_mean_by_simulation(rng):
    """Panels drawn, some measured at alternating sites, their weighted mean against that of the whole lot."""
    asked = question(study((TermLimit(("scale_x",), 5.0),)))
    sets = [np.array([0, 7, 30, 56, 63]), np.array([3, 24, 39, 60])]
    each = [told(asked, rows) for rows in sets]
    vary, size, measured = spread(1.0).covariance, 12, 5
    predicted = mean_covariance([each[g % 2] for g in range(measured)], vary, size)
    errors = []
    for _ in range(4000):
        theta = rng.multivariate_normal(np.zeros(6), vary, size)
        weight, total = np.zeros((6, 6)), np.zeros(6)
        for g in range(measured):
            blocks = design_blocks(asked.study.model, places(asked.study.layout, asked.candidates.sites.xy_mm[sets[g % 2]]))
            y = blocks @ theta[g] + rng.normal(size=(len(blocks), 2)) * np.hypot(0.3, 0.2)
            fitted = np.linalg.lstsq(blocks.reshape(-1, 6), y.ravel(), rcond=None)[0]
            own = np.linalg.inv(vary + np.linalg.inv(each[g % 2]))
            weight, total = weight + own, total + own @ fitted
        errors.append(np.linalg.solve(weight, total) - theta.mean(axis=0))
    assert np.cov(np.array(errors).T).diagonal() == pytest.approx(np.diag(predicted), rel=0.1)


def test_laws():
    """All panels of a lot alike: only the estimation is left; without variation panels are only repeats."""
    asked = question(study((TermLimit(("scale_x",), 5.0),)))
    one = told(asked, np.arange(20))
    vary = spread(1.0).covariance
    assert mean_covariance([one] * 9, vary, 9) == pytest.approx(np.linalg.inv(one) / 9, rel=1e-6)
    assert mean_covariance([one] * 4, 0 * vary, 50) == pytest.approx(np.linalg.inv(one) / 4, rel=1e-6)
    halves = [told(asked, np.arange(0, 64, 2)), told(asked, np.arange(1, 64, 2))]
    assert halves[0] + halves[1] == pytest.approx(told(asked, np.arange(64)))
    assert mean_covariance([told(asked, np.array([0, 1]))], vary, 9) is None


def test_cheapest_of_the_curve_and_what_costs_change():
    asked = study((TermLimit(TERMS[:2], 2.0), TermLimit(TERMS[2:], 12.0)))
    found = lot(asked, spread(1.0), 40, panel_s=20.0, site_s=1.0)
    assert found.met and not found.feedback_useless and found.answer.startswith("measure ")
    assert found.best.seconds == min(choice.seconds for choice in found.curve)
    for choice in found.curve:
        assert choice.seconds == pytest.approx(choice.panels * (20.0 + choice.sites))
        assert choice.ratio <= 1 + 1e-9 and choice.groups == len(choice.ids)
        assert len({name for ids in choice.ids for name in ids}) == choice.groups * choice.sites
    assert found.forward.seconds == pytest.approx(40 * (20 + found.forward.sites))
    dear = lot(asked, spread(1.0), 40, panel_s=2000.0, site_s=1.0)
    assert dear.best.panels <= found.best.panels
    assert lot(asked, spread(1.0), 40).best.seconds > 0


def test_feedback_is_useless_when_panels_vary_more_than_the_limits():
    found = lot(study((TermLimit(("scale_x",), 6.0), RegionLimit("panel", 3.0))), spread(1.0), 30)
    assert found.feedback_useless and found.met and "only feed-forward can" in found.answer
    floor = {item.label: item for item in found.floors}["scale_x"]
    assert floor.k_u == pytest.approx(9.0)
    hopeless = lot(study((TermLimit(("scale_x",), 0.01),)), spread(1.0), 3)
    assert not hopeless.met and hopeless.best is None and "not even feed-forward" in hopeless.answer


def test_what_is_refused_or_noted():
    asked = study((TermLimit(("scale_x",), 20.0),))
    with pytest.raises(InputError, match="no limits"):
        lot(replace(asked, limits=()), spread(1.0), 9)
    with pytest.raises(InputError, match="none of which"):
        lot(asked, Spread(("dx_xy",), np.eye(1)), 9)
    with pytest.raises(InputError, match="field_of_view_mm"):
        lot(replace(asked, measure=Measure(field_of_view_mm=(5.0, 5.0))), spread(1.0), 9)
    found = lot(asked, Spread(("scale_x",), np.eye(1)), 9)
    assert "nothing is known of how translation_x" in found.notes[0]
