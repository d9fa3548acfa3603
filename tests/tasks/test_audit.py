"""The audit of a given list: what can be dropped, what should be added, and how far it is from the fewest."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from invented_plans import core_layout

from sampler.errors import InputError
from sampler.model.basis import Model, ModelTerm
from sampler.model.terms import FAMILIES
from sampler.tasks.audit import audit
from sampler.tasks.plan import plan
from sampler.tasks.question import knowledge_of, limits_achieved, question
from sampler.tasks.study import RegionLimit, Rules, Study, TermLimit
from sampler.uncertainty.noise import Noise

STUDY = Study("invented", core_layout(8), Model(tuple(ModelTerm(name) for name in FAMILIES["affine"])),
              Noise((0.3, 0.3)), (RegionLimit("panel", 0.75), TermLimit(("rotation", "scale_x"), 1.9)))
ASKED = question(STUDY)


def worst_ratio(ids):
    place = {name: row for row, name in enumerate(ASKED.candidates.sites.id)}
    visits = ASKED.units.visits(np.array([place[name] for name in ids]))
    return max(limit.ratio for limit in limits_achieved(ASKED, knowledge_of(ASKED, visits)))


def test_a_plan_audits_as_it_claims():
    planned = plan(STUDY)
    result = audit(STUDY, planned.sites.id.tolist())
    assert [limit.predicted for limit in result.audit.limits] == [limit.predicted for limit in planned.audit.limits]
    assert result.droppable == ()
    assert result.best_to_add is None
    assert result.d_efficiency == pytest.approx(1.0)
    assert len(result.fewest.sites) == len(planned.sites)


def test_droppable_sites_by_dropping_each():
    ids = [str(name) for name in plan(STUDY).sites.id] + [str(ASKED.candidates.sites.id[27])]
    result = audit(STUDY, ids, search_fewest=False)
    assert result.fewest is None
    expected = [name for name in ids if worst_ratio([other for other in ids if other != name]) <= 1]
    assert list(result.droppable) == expected
    assert 0 < len(expected) < len(ids), "the added site at least can go"


def test_best_site_to_add_by_adding_each():
    ids = [str(name) for name in ASKED.candidates.sites.id[[0, 7, 56, 63, 30]]]
    result = audit(STUDY, ids, search_fewest=False)
    assert not result.audit.meets_limits
    best = min(worst_ratio([*ids, str(name)]) for name in ASKED.candidates.sites.id if name not in ids)
    assert result.best_to_add[1] == pytest.approx(best, rel=1e-6)
    assert worst_ratio([*ids, result.best_to_add[0]]) == pytest.approx(best, rel=1e-6)


def test_sites_that_leave_a_term_undetermined():
    result = audit(STUDY, [str(name) for name in ASKED.candidates.sites.id[:2]], search_fewest=False)
    assert np.isinf(result.audit.limits[0].predicted)
    assert result.audit.log_det == -np.inf
    assert result.best_to_add is not None


@pytest.mark.parametrize(("ids", "said"), [
    ([], "empty"),
    (["E-0", "E-0", "E-5"], 'site "E-0" is listed twice'),
    (["E-9x"], 'not a mark of the layout; did you mean "E-9"'),
])
def test_faults_of_a_list(ids, said):
    with pytest.raises(InputError, match=said):
        audit(STUDY, ids)


def test_a_mark_that_may_not_be_measured():
    with pytest.raises(InputError, match=r'site "E-3" may not be measured: forbidden by \[rules\]'):
        audit(replace(STUDY, rules=Rules(forbidden=("E-3",))), ["E-3", "E-4"])


def test_all_faults_together():
    with pytest.raises(InputError) as error:
        audit(STUDY, ["nonsense", "E-1", "E-1"])
    assert len(error.value.faults) == 2
