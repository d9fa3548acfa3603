"""Maps of stops, sides and routes."""

from __future__ import annotations

import re

from recipe_results import listed, planned

from sampler.figures.map import audit_map, plan_map


def words(pictures):
    return re.sub(r"<!--\s*(.*?)\s*-->", r"\1\n", pictures["map.svg"].decode(), flags=re.DOTALL)


def test_stops_show_their_field_of_view():
    result = planned("stops")
    text = words(plan_map(result, route=True))
    assert "field of view, 85 × 80 mm" in text
    assert f"{len(result.sites)} sites in {result.units} stops, numbered in visiting order" in text
    assert "route" in text
    assert "route" not in words(plan_map(result)).replace("route on", "")


def test_both_sides_differ():
    text = words(plan_map(planned("sides"), route=True))
    for phrase in ("candidates on the front", "candidates on the back", "on the back", "route on the front",
                   "route on the back", "required site"):
        assert phrase in text
    assert "on the back" not in words(plan_map(planned("lost")))


def test_bars_show_what_is_left_after_a_loss():
    assert "k·u after the worst loss against its limit" in words(plan_map(planned("lost")))
    assert "Predicted k·u against its limit" in words(audit_map(listed("sides"), route=True))
