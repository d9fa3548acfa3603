"""Lost marks: the chance of a miss against all 2ⁿ patterns, and what any loss does against every set."""

from __future__ import annotations

from dataclasses import replace
from itertools import combinations, product

import numpy as np
import pytest
from invented_plans import core_layout

from sampler.model.basis import Model, ModelTerm
from sampler.model.terms import FAMILIES
from sampler.panel.layout import Sites
from sampler.tasks import chance
from sampler.tasks.chance import _likeliest, miss_chance
from sampler.tasks.loss import with_losses, without, worst_losses
from sampler.tasks.question import achieved, knowledge_of, limits_achieved, question
from sampler.tasks.study import Measure, RegionLimit, Rules, Study, TermLimit
from sampler.tasks.units import Visits
from sampler.uncertainty.noise import Noise

AFFINE = Model(tuple(ModelTerm(name) for name in FAMILIES["affine"]))


def few_marks(rng, n=9, rate=None, **changes):
    """Marks at invented places; limits a little above what all of them reach."""
    marks = replace(Sites.at(np.array([f"S{i}" for i in range(n)]), rng.uniform(-240, 240, (n, 2))),
                    read_rate=rng.uniform(0.5, 0.95, n) if rate is None else np.full(n, rate))
    study = Study("invented", core_layout(9, marks=marks, grids=()), AFFINE, Noise((0.3, 0.4)),
                  (TermLimit(("scale_x", "rotation"), 1.0), RegionLimit("panel", 1.0)))
    asked = question(replace(study, **changes))
    reached = achieved(asked, asked.units.visits(np.arange(len(asked.units)))).limits
    slack = rng.uniform(1.05, 1.3)
    limits = (TermLimit(("scale_x",), reached[0].predicted * slack), TermLimit(("rotation",), reached[1].predicted * slack),
              RegionLimit("panel", reached[2].predicted * slack))
    return question(replace(study, limits=limits, **changes))


def missed_by_all_patterns(asked, visits):
    """The chance, pattern by pattern, each audited anew."""
    rate, total = asked.candidates.sites.read_rate[visits.marks], 0.0
    for reads in product([False, True], repeat=len(rate)):
        kept = np.flatnonzero(reads)
        left = Visits(visits.marks[kept], visits.stop[kept], visits.unit)
        if any(limit.ratio > 1 for limit in limits_achieved(asked, knowledge_of(asked, left))):
            total += float(np.where(reads, rate, 1 - rate).prod())
    return total


@pytest.mark.parametrize("seed", range(3))
def test_chance_against_all_patterns(seed):
    asked = few_marks(np.random.default_rng(seed), 7)
    visits = asked.units.visits(np.arange(7))
    exact, found = missed_by_all_patterns(asked, visits), miss_chance(asked, visits)
    assert 0.1 < exact < 0.999
    assert found.panels == 0
    assert found.least - 1e-12 <= exact <= found.most + 1e-12
    assert found.most - found.least <= chance.LEFT_OUT + 1e-12


def test_chance_when_marks_of_a_stop_share_its_error(rng):
    measure = Measure(field_of_view_mm=(170.0, 170.0), stop_um=(0.3, 0.2))
    asked = few_marks(rng, 7, measure=measure)
    visits = asked.units.visits(np.arange(len(asked.units)))
    assert len(visits.unit) < len(visits.marks) or len(asked.units) > 4
    exact, found = missed_by_all_patterns(asked, visits), miss_chance(asked, visits)
    assert found.least - 1e-12 <= exact <= found.most + 1e-12


def test_simulation_where_patterns_are_too_many(rng, monkeypatch):
    asked = few_marks(rng, 8)
    visits = asked.units.visits(np.arange(8))
    exact = missed_by_all_patterns(asked, visits)
    monkeypatch.setattr(chance, "MOST_PATTERNS", 20)
    found = miss_chance(asked, visits)
    assert found.panels == chance.PANELS
    assert found.least <= exact <= found.most
    assert found.most - found.least < 0.02


def test_marks_that_always_read_leave_no_chance(rng):
    asked = few_marks(rng, 7, rate=1.0)
    assert miss_chance(asked, asked.units.visits(np.arange(7))) is None


def test_patterns_come_in_order_and_cover_the_chance(rng):
    rate = rng.uniform(0.1, 0.99, 9)
    lost, probability = _likeliest(rate)
    assert (np.diff(probability) <= 1e-15).all()
    assert len(np.unique(lost, axis=0)) == len(lost)
    assert probability == pytest.approx(np.where(lost, 1 - rate, rate).prod(axis=1))
    assert probability.sum() >= 1 - chance.LEFT_OUT
    every = np.array(list(product([False, True], repeat=9)))
    assert probability[:50] == pytest.approx(np.sort(np.where(every, 1 - rate, rate).prod(axis=1))[::-1][:50])


@pytest.mark.parametrize(("lost", "measure"), [
    (1, Measure()), (2, Measure()), (1, Measure(field_of_view_mm=(150.0, 150.0), stop_um=(0.2, 0.2)))])
def test_worst_loss_against_every_loss(lost, measure):
    asked = few_marks(np.random.default_rng(11), 10, rate=1.0, measure=measure)
    visits = asked.units.visits(np.arange(len(asked.units)))
    worst = np.zeros(3)
    for gone in combinations(range(len(visits.unit)), lost):
        left = without(asked, visits, np.array(gone))
        worst = np.maximum(worst, [limit.predicted for limit in limits_achieved(asked, knowledge_of(asked, left))])
    assert [loss.k_u for loss in worst_losses(asked, visits, lost)] == pytest.approx(worst.tolist(), rel=1e-6)


def test_a_limit_is_met_only_after_the_losses_it_must_bear(rng):
    asked = few_marks(rng, 9, rate=1.0)
    visits = asked.units.visits(np.arange(9))
    plain = achieved(asked, visits)
    told = replace(asked, study=replace(asked.study, rules=Rules(lost=1)))
    borne = with_losses(plain, told, visits)
    assert with_losses(plain, asked, visits) is plain
    assert plain.meets_limits
    assert not borne.meets_limits
    assert borne.lost == 1
    for limit in borne.limits:
        assert limit.after_loss >= limit.predicted
        assert limit.worst_ratio == limit.after_loss / limit.maximum
        assert limit.ratio == limit.predicted / limit.maximum


def test_a_reading_that_nothing_replaces(rng):
    """With three marks for six terms the loss of any one leaves a term undetermined."""
    asked = few_marks(rng, 3, rate=1.0)
    assert all(np.isinf(loss.k_u) for loss in worst_losses(asked, asked.units.visits(np.arange(3)), 1))
