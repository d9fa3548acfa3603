"""What summaries say of seconds, stops, lost marks, bias and floors, still on one screen."""

from __future__ import annotations

from dataclasses import replace

import pytest
from recipe_results import RECIPES, listed, planned

from sampler.report.summary import audit_summary, plan_summary
from sampler.tasks.advise import notes
from sampler.tasks.results import MissChance
from sampler.tasks.wording import columns, significant


def lines(text):
    found = text.splitlines()
    assert len(found) <= 24
    assert max(columns(line) for line in found) <= 80
    assert " nan" not in text
    assert " inf" not in text
    return " ".join(line.strip() for line in found)


@pytest.mark.parametrize("name", RECIPES)
def test_every_recipe_fits_a_screen(name):
    lines(plan_summary(planned(name)))
    lines(audit_summary(listed(name)))


def test_stops_and_seconds():
    result = planned("stops")
    said = lines(plan_summary(result))
    assert said.startswith(f"{result.units} stops, fewest proven")
    assert f"They read {len(result.sites)} marks." in said
    route = result.route
    assert f"One panel: {route.seconds:.1f} s (travel {route.travel_s:.1f}, reading {route.read_s:.1f}, handling 3.0)" in said
    assert "order proven quickest" in said
    slower = replace(result, route=replace(route, travel_at_least_s=route.travel_s - 0.3))
    assert "at most 0.3 s from the quickest order" in lines(plan_summary(slower))
    assert "One panel" not in lines(plan_summary(replace(result, study=replace(result.study, machine_stated=False))))


def test_turning_over_is_accounted_for():
    assert "turning over 5.0" in lines(plan_summary(planned("sides")))


def test_losses_and_chance():
    result = planned("lost")
    said = lines(plan_summary(result))
    assert "k·u, any 1 lost" in said
    assert "A panel misses a limit because marks do not read: " in said
    simulated = lines(plan_summary(replace(result, chance=MissChance(0.01, 0.02, 20_000))))
    assert "1.0 to 2.0 % (95 % interval of 20,000 simulated panels)" in simulated
    few = listed("lost")
    assert "A panel misses" in lines(audit_summary(few))


def test_bias_floors_and_what_is_assumed():
    said = lines(plan_summary(planned("potential")))
    (scale,) = [term for term in planned("potential").audit.terms if term.name == "scale_x"]
    assert scale.bias == max(term.bias for term in planned("potential").audit.terms)
    assert f"Largest bias by potential terms: scale_x {significant(scale.bias)} ppm (one sd)." in said
    assert "local_um counts as independent from mark to mark" in said
    assert notes(RECIPES["floor"]) == ()
    floored = planned("floor")
    assert floored.status == "cannot"
    text = lines(plan_summary(floored))
    assert "no number of them beats" in text
    limit = replace(floored.audit.limits[0], floor=0.7 * floored.audit.limits[0].maximum, predicted=0.8)
    met = replace(floored, status="interval", audit=replace(floored.audit, limits=(limit,)))
    assert "floor 70 %" in plan_summary(met)
    below = replace(met, audit=replace(floored.audit, limits=(replace(limit, floor=1.2, predicted=1.3),)))
    assert "BELOW ITS FLOOR" in plan_summary(below)


def test_seconds_and_given_numbers_claim_nothing_of_the_fewest():
    said = lines(plan_summary(planned("seconds")))
    assert "fewest" not in said
    assert f"sites in {planned('seconds').route.seconds:.1f} s, " in said
    assert lines(plan_summary(planned("given"))).startswith("8 sites, as asked.")


def test_a_list_that_could_be_visited_quicker():
    assert "One panel in the order listed: " in lines(audit_summary(listed("seconds")))
    assert "the best order found takes" in lines(audit_summary(listed("sides")))
