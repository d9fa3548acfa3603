"""plan.json and sites.csv of recipes: stops, seconds, frames, chances, floors and bias."""

from __future__ import annotations

import csv
import io
import json

import numpy as np
import pytest
from recipe_results import MACHINE, RECIPES, listed, planned

from sampler.files.output import audit_json, plan_json, sites_csv
from sampler.route.machine import to_panel_frame


def rows_of(result, frame="panel"):
    return list(csv.DictReader(io.StringIO(sites_csv(result, frame))))


@pytest.mark.parametrize("name", RECIPES)
def test_every_recipe_is_valid_json(name):
    for text in (plan_json(planned(name)), audit_json(listed(name))):
        json.loads(text, parse_constant=lambda constant: pytest.fail(constant))


def test_stops_in_visiting_order():
    result = planned("stops")
    said, rows = json.loads(plan_json(result)), rows_of(result)
    assert said["n_stops"] == result.units == len(said["stops"]) == int(rows[-1]["stop"])
    assert [site["stop"] for site in said["sites"]] == [int(row["stop"]) for row in rows] == result.stop.tolist()
    assert [float(row["at_s"]) for row in rows] == [site["at_s"] for site in said["sites"]]
    assert (np.diff([float(row["at_s"]) for row in rows]) >= 0).all()
    for row, stop in zip(rows, (said["stops"][int(row["stop"]) - 1] for row in rows), strict=True):
        assert (float(row["stop_x_mm"]), float(row["stop_y_mm"])) == (stop["x_mm"], stop["y_mm"])
        assert abs(float(row["x_mm"]) - stop["x_mm"]) <= 42.5
    assert said["panel"]["seconds"] == pytest.approx(result.route.seconds, abs=1e-3)
    assert sum(said["panel"][part] for part in ("travel_s", "read_s", "flip_s", "handling_s")) == pytest.approx(
        said["panel"]["seconds"], abs=2e-3)


def test_the_machines_frame_is_where_the_machine_sees_the_marks():
    result = planned("sides")
    rows = rows_of(result, "machine")
    assert "x_mm" not in rows[0]
    seen = np.array([[float(row["machine_x_mm"]), float(row["machine_y_mm"])] for row in rows])
    far = result.sites.side == "back"
    assert far.any()
    assert not far.all()
    assert to_panel_frame(seen, MACHINE, (510.0, 515.0), far) == pytest.approx(result.sites.xy_mm)
    # By hand: lower-left corner zero, turned by 90° counter-clockwise; the back's x is mirrored first.
    x, y = result.sites.xy_mm.T
    assert seen[:, 0] == pytest.approx(-(y + 257.5))
    assert seen[:, 1] == pytest.approx(np.where(far, -x, x) + 255.0)
    stops = rows_of(planned("stops"), "machine")
    assert {"stop_machine_x_mm", "stop_machine_y_mm"} <= set(stops[0])


def test_losses_chance_floors_and_bias_are_written():
    lost = json.loads(plan_json(planned("lost")))
    assert lost["lost"] == 1
    assert all(limit["after_loss"] >= limit["predicted"] >= limit["floor"] for limit in lost["limits"])
    assert 0 <= lost["miss_chance"]["at_least"] <= lost["miss_chance"]["at_most"] <= 1
    potential = json.loads(plan_json(planned("potential")))
    assert {term["name"]: term["bias"] > 0 for term in potential["terms"]}["scale_x"]
    assert "bias" not in lost["terms"][0]
    assert len(potential["notes"]) == 1


def test_seconds_and_given_numbers():
    quick = json.loads(plan_json(planned("seconds")))
    assert (quick["lower_bound"], quick["fewest_proven"]) == (None, False)
    assert quick["panel"]["seconds_at_least"] <= quick["panel"]["seconds"] + 1e-9
    given = json.loads(plan_json(planned("given")))
    assert (given["n_sites"], given["lower_bound"], given["limits"]) == (8, None, [])
    audited = json.loads(audit_json(listed("sides")))
    assert audited["panel"]["quickest"] <= audited["panel"]["seconds"]


def test_without_a_machine_there_are_no_seconds():
    result = planned("lost")
    assert "panel" not in json.loads(plan_json(result))
    assert set(rows_of(result)[0]) == {"order", "id", "x_mm", "y_mm", "side", "kind"}
