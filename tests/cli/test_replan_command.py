"""`sampler replan` as a user runs it."""

from __future__ import annotations

import json

import pytest
from click.testing import CliRunner

from sampler.cli.main import group

STUDY = """format = 1
title = "Small panel"
layout = "layout.toml"
[model]
panel = ["affine"]
[noise]
mark_um = [0.3, 0.3]
[[limit]]
region = "panel"
position_um = 0.8
[search]
seconds = 20
"""
LAYOUT = """format = 1
name = "invented"
[panel]
width_mm = 300.0
height_mm = 200.0
origin = "lower-left"
[[marks]]
file = "marks.csv"
"""


def run(*arguments):
    return CliRunner().invoke(group, [str(argument) for argument in arguments])


@pytest.fixture(scope="module")
def folder(tmp_path_factory):
    folder = tmp_path_factory.mktemp("replan")
    rows = [f"M{i}{j},{10 + 40 * i},{10 + 30 * j}" for i in range(8) for j in range(7)]
    (folder / "marks.csv").write_text("id,x_mm,y_mm\n" + "\n".join(rows) + "\n")
    (folder / "layout.toml").write_text(LAYOUT)
    (folder / "study.toml").write_text(STUDY)
    assert run("plan", folder / "study.toml", "--out", folder / "plan").exit_code == 0
    gone = json.loads((folder / "plan" / "plan.json").read_text(encoding="utf-8"))["sites"][0]["id"]
    (folder / "fewer.csv").write_text("id,x_mm,y_mm\n" + "\n".join(row for row in rows if not row.startswith(gone)) + "\n")
    (folder / "fewer.toml").write_text(LAYOUT.replace("marks.csv", "fewer.csv"))
    return folder


def test_an_unchanged_layout(folder):
    shown = run("replan", folder / "plan", "--layout", folder / "layout.toml", "--out", folder / "same")
    assert shown.exit_code == 0, shown.output
    assert "0 moved, 0 dropped, 0 added" in shown.output
    ids = [[site["id"] for site in json.loads((folder / name / "plan.json").read_text(encoding="utf-8"))["sites"]]
           for name in ("plan", "same")]
    assert sorted(ids[0]) == sorted(ids[1])


def test_a_mark_is_gone(folder):
    shown = run("replan", folder / "plan", "--layout", folder / "fewer.toml", "--out", folder / "new", "--json")
    assert shown.exit_code == 0, shown.output
    written = json.loads(shown.output)
    assert written["dropped"] >= 1
    assert any(change["reason"] == "gone from the layout" for change in written["changes"])
    assert {path.name for path in (folder / "new").iterdir()} == {
        "plan.json", "replan.json", "change.csv", "study.toml", "sites.csv", "certificate.json", "map.png", "map.svg",
        "change.png", "change.svg"}
    certified = run("certify", folder / "new")
    assert certified.exit_code == 0, certified.output
    assert "meet every limit" in certified.output


def test_most_new_that_is_too_few(folder):
    shown = run("replan", folder / "plan", "--layout", folder / "fewer.toml", "--out", folder / "capped", "--most-new", "0")
    assert shown.exit_code == 3
    assert "--most-new" in shown.output


@pytest.mark.parametrize("arguments", [("--layout", "nowhere.toml"), ("--layout", "fewer.toml", "--study", "nowhere.toml")])
def test_missing_files_are_named(folder, monkeypatch, arguments):
    monkeypatch.chdir(folder)
    shown = run("replan", "plan", *arguments, "--out", "nothing")
    assert shown.exit_code == 1
    assert "nowhere.toml" in str(shown.exception)
    assert not (folder / "nothing").exists()
