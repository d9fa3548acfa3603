"""`sampler report` as a user runs it."""

from __future__ import annotations

import json
from pathlib import Path

import pytest
from click.testing import CliRunner

from sampler.cli.main import group
from sampler.errors import InputError

ROOT = Path(__file__).parents[2]


def run(*arguments):
    return CliRunner().invoke(group, [str(argument) for argument in arguments])


@pytest.fixture
def folder(tmp_path, monkeypatch):
    monkeypatch.chdir(ROOT)
    assert run("plan", "examples/near-saturated/study.toml", "--out", tmp_path / "plan").exit_code == 0
    return tmp_path / "plan"


def test_page_of_a_plan_and_its_verdict(folder):
    before = {path.name for path in folder.iterdir()}
    shown = run("report", folder)
    assert shown.exit_code == 0, shown.output
    assert "8 sites, fewest proven" in shown.output
    page = (folder / "report.html").read_text(encoding="utf-8")
    assert "Organic core, hardly more readings than terms" in page
    assert "sampler plan examples/near-saturated/study.toml" in page
    assert "not what chance allows" not in page
    assert {path.name for path in folder.iterdir()} == before | {"report.html"}
    (folder / "verify.json").write_text(json.dumps({"held": False, "summary": "not what chance allows", "findings": ["scale_x"]}))
    shown = run("report", folder, "--json")
    assert json.loads(shown.output)["verified"] is False
    assert "not what chance allows" in (folder / "report.html").read_text(encoding="utf-8")


def test_a_damaged_verdict_is_named(folder):
    (folder / "verify.json").write_text("{}")
    shown = run("report", folder)
    assert isinstance(shown.exception, InputError)
    assert "verify.json" in str(shown.exception)


def test_a_plan_whose_limits_cannot_be_met(tmp_path, monkeypatch):
    monkeypatch.chdir(ROOT)
    assert run("plan", "examples/cannot-be-met/study.toml", "--out", tmp_path / "plan").exit_code == 3
    shown = run("report", tmp_path / "plan", "--out", tmp_path / "page")
    assert shown.exit_code == 0, shown.output
    assert (tmp_path / "page" / "report.html").exists()
    assert "cannot be met" in shown.output
