"""characterise and fit as a user runs them, with every file they write, and bad input."""

from __future__ import annotations

import csv
import json
import tomllib

import numpy as np
import pytest
from click.testing import CliRunner
from invented_pilots import Pilot
from small_pilot import write_pilot, write_readings

from sampler.cli.main import group
from sampler.files.study import read_study


def run(*arguments):
    return CliRunner().invoke(group, [str(argument) for argument in arguments], catch_exceptions=True)


def rows(path):
    with open(path, encoding="utf-8", newline="") as file:
        return list(csv.DictReader(line for line in file if not line.startswith("#")))


PILOT = Pilot(panels=6, lots=2, repeats=2, lost=0.01, per_side=10, local_um=(0.3, 0.3))


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    """A pilot characterised once, and a study that takes what it said."""
    place = tmp_path_factory.mktemp("loop")
    write_pilot(place, PILOT, np.random.default_rng(8))
    shown = run("characterise", place / "pilot.csv", "--study", place / "study.toml", "--out", place / "process")
    assert shown.exit_code == 0, shown.output
    (place / "said.txt").write_text(shown.output, encoding="utf-8")
    return place


def test_characterise_writes_what_a_study_takes(folder):
    said = (folder / "said.txt").read_text(encoding="utf-8").splitlines()
    assert len(said) <= 24 and max(map(len, said)) <= 80
    assert "model trapezoid is recommended" in said[0]
    result = folder / "process"
    pictures = {f"{name}.{kind}" for name in ("residuals", "variogram", "models", "terms") for kind in ("png", "svg")}
    assert {path.name for path in result.iterdir()} == {"process.toml", "characterise.json", "outliers.csv"} | pictures
    found = json.loads((result / "characterise.json").read_text(encoding="utf-8"))
    assert found["model"]["family"] == "trapezoid" and found["panels"] == 6
    process = tomllib.loads((result / "process.toml").read_text(encoding="utf-8"))
    assert process["noise"]["mark_um"] == pytest.approx(found["noise"]["mark_um"], rel=1e-5)
    study = read_study(folder / "next.toml")
    assert study.noise.mark_um == pytest.approx(tuple(process["noise"]["mark_um"]))
    assert "dx_xy" in study.model.names and study.priors
    for axis in found["axes"]:
        assert axis["reading_interval_um"][0] < axis["reading_um"] < axis["reading_interval_um"][1]


def test_fit_of_a_study_and_of_a_plan(folder):
    production, truth = PILOT.but(panels=3, repeats=1, lost=0.0, lots=1).readings(np.random.default_rng(2))
    write_readings(folder / "made.csv", production)
    shown = run("fit", folder / "next.toml", folder / "made.csv", "--out", folder / "fit", "--predict")
    assert shown.exit_code == 0, shown.output
    assert "every limit met" in shown.output and len(shown.output.splitlines()) <= 24
    first = (folder / "fit" / "corrections.csv").read_text(encoding="utf-8").splitlines()[0]
    assert first.startswith("#") and "NEGATED" in first
    corrections = rows(folder / "fit" / "corrections.csv")
    found = json.loads((folder / "fit" / "fit.json").read_text(encoding="utf-8"))
    for row, panel, theta in zip(corrections, found["panels"], truth, strict=True):
        at = found["terms"].index("scale_x")
        assert float(row["correct_scale_x_ppm"]) == pytest.approx(-panel["terms"][at], rel=1e-4)
        assert abs(panel["terms"][at] - theta[at]) < 2 * panel["k_u"][at]
    assert {row["met"] for row in rows(folder / "fit" / "limits.csv")} == {"yes"}
    assert len(rows(folder / "fit" / "predicted.csv")) == 3 * 100
    residuals = rows(folder / "fit" / "residuals.csv")
    assert len(residuals) + len(found["outliers"]) == 3 * 200
    assert (folder / "fit" / "terms.png").read_bytes().startswith(b"\x89PNG")
    plan = {"format": 1, "version": "0", "study": {"path": str(folder / "next.toml"), "sha256": "0"},
            "layout": {"path": "layout.toml", "sha256": "0"}, "sites": [{"id": f"E-{i}"} for i in range(0, 100, 4)]}
    (folder / "plan.json").write_text(json.dumps(plan), encoding="utf-8")
    shown = run("fit", folder / "plan.json", folder / "made.csv", "--out", folder / "fit", "--json")
    assert json.loads(shown.output)["panels_fitted"] == 3
    plan["sites"].append({"id": "gone"})
    (folder / "plan.json").write_text(json.dumps(plan), encoding="utf-8")
    gone = run("fit", folder / "plan.json", folder / "made.csv", "--out", folder / "nothing")
    assert gone.exception and 'gone" first, are not in the' in str(gone.exception)


def test_missed_limit_and_louder_noise_are_exit_3(folder):
    few, _ = PILOT.but(panels=2, repeats=1, lost=0.9, lots=1, per_side=10).readings(np.random.default_rng(3))
    write_readings(folder / "few.csv", few)
    shown = run("fit", folder / "next.toml", folder / "few.csv", "--out", folder / "few")
    assert shown.exit_code == 3 and "missed a limit" in shown.output
    loud, _ = PILOT.but(panels=8, repeats=1, mark_um=0.8, lots=1).readings(np.random.default_rng(4))
    write_readings(folder / "loud.csv", loud)
    shown = run("fit", folder / "next.toml", folder / "loud.csv", "--out", folder / "loud")
    assert shown.exit_code == 3 and "characterise again" in shown.output.replace("\n  ", " ")


@pytest.mark.parametrize("command", ["characterise", "fit"])
@pytest.mark.parametrize(("content", "says"), [
    ("panel,id,dx_um\nA,E-1,0.1\n", "dy_um"), ("", "empty"), ("panel,id,dx_um,dy_um\n", "row"),
    ("panel,id,dx_um,dy_um\nA,E-1,zero,0\n", "zero"), ("panel,id,dx_um,dy_um\nA,nobody,0.1,0\n", "no reading is of a mark"),
    ("panel,id,dx_um,dy_um\nA,E-1,0.1,0\nA,E-2,0.1,0.2\n", "too few")])
def test_bad_readings_write_nothing(folder, command, content, says):
    (folder / "bad.csv").write_text(content, encoding="utf-8")
    arguments = ["bad.csv", "--study", "study.toml"] if command == "characterise" else ["study.toml", "bad.csv"]
    arguments = [str(folder / part) if "." in part else part for part in arguments]
    shown = run(command, *arguments, "--out", folder / "nothing")
    assert shown.exception and says in " ".join(str(shown.exception).split()), shown.exception
    assert not (folder / "nothing").exists()
