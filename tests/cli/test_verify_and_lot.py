"""verify and lot as a user runs them, and bad input."""

from __future__ import annotations

import json

import numpy as np
import pytest
from click.testing import CliRunner
from invented_pilots import Pilot
from small_pilot import write_pilot

from sampler.cli.main import group

PILOT = Pilot("affine", panels=6, repeats=2, per_side=8, local_um=(0.3, 0.3))


def run(*arguments):
    return CliRunner().invoke(group, [str(argument) for argument in arguments], catch_exceptions=True)


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """From pilot to plan, nothing typed."""
    place = tmp_path_factory.mktemp("loop")
    write_pilot(place, PILOT, np.random.default_rng(8), position_um=0.9)
    assert run("characterise", place / "pilot.csv", "--study", place / "study.toml", "--out", place / "process").exit_code == 0
    shown = run("plan", place / "next.toml", "--out", place / "plan")
    assert shown.exit_code == 0, shown.output
    return place


def test_a_plan_holds_and_an_altered_one_fails(folder):
    shown = run("verify", folder / "plan", "--pilot", folder / "pilot.csv", "--panels", 500, "--lacks", 0.3,
                "--out", folder / "v")
    assert shown.exit_code == 0, shown.output
    assert shown.output.startswith("The plan held") and len(shown.output.splitlines()) <= 24
    found = json.loads((folder / "v" / "verify.json").read_text(encoding="utf-8"))
    assert found["held"] and len(found["pilot"]) == 2 and found["lacking"]["amplitude_um"] == 0.3
    assert (folder / "v" / "verify.png").read_bytes().startswith(b"\x89PNG")
    plan = json.loads((folder / "plan" / "plan.json").read_text(encoding="utf-8"))
    plan["terms"][0]["k_u"] *= 0.7
    (folder / "altered.json").write_text(json.dumps(plan), encoding="utf-8")
    shown = run("verify", folder / "altered.json", "--panels", 500, "--out", folder / "w", "--json")
    assert shown.exit_code == 3 and not json.loads(shown.output)["held"]


@pytest.mark.parametrize(("change", "says"), [
    ({"terms": [{"name": "nonsense", "k_u": 1.0}]}, "nonsense"), ({"status": "cannot"}, "nothing to verify"),
    ({"terms": [], "limits": []}, "claims nothing"), ({"limits": [{"label": "x", "where_mm": [1]}]}, "no place")])
def test_plans_that_claim_nonsense_are_refused(folder, change, says):
    plan = json.loads((folder / "plan" / "plan.json").read_text(encoding="utf-8")) | change
    (folder / "bad.json").write_text(json.dumps(plan), encoding="utf-8")
    shown = run("verify", folder / "bad.json", "--out", folder / "nothing")
    assert says in str(shown.exception) and not (folder / "nothing").exists()


def test_lot_from_the_process_file(folder):
    shown = run("lot", folder / "next.toml", "--process", folder / "process" / "process.toml", "--panels", 30,
                "--out", folder / "lot")
    assert shown.exit_code == 0, shown.output
    found = json.loads((folder / "lot" / "lot.json").read_text(encoding="utf-8"))
    assert found["met"] and found["curve"] and found["best"]["seconds"] == min(item["seconds"] for item in found["curve"])
    assert (folder / "lot" / "lot.png").read_bytes().startswith(b"\x89PNG") and len(shown.output.splitlines()) <= 24


@pytest.mark.parametrize(("content", "says"), [
    ("format = 1\n", "no table [variation]"), ("[variation]\nterms = 3\n", "give the names"),
    ('[variation]\nterms = ["scale_x"]\npanel_covariance = [["a"]]\n', "no symmetric table"),
    ('[variation]\nterms = ["scale_x"]\npanel_covariance = [[-1.0]]\n', "negative variance")])
def test_process_files_without_variation_are_refused(folder, content, says):
    (folder / "odd.toml").write_text(content, encoding="utf-8")
    shown = run("lot", folder / "next.toml", "--process", folder / "odd.toml", "--out", folder / "nothing")
    assert says in str(shown.exception) and not (folder / "nothing").exists()
