"""plan, certify and audit as a user runs them, and every mistake a tired engineer makes."""

from __future__ import annotations

import csv
import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest
from click.testing import CliRunner

from sampler.cli.main import group, main

ROOT = Path(__file__).parents[2]
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


@pytest.fixture
def folder(tmp_path):
    rows = [f"M{i}{j};{10 + 40 * i},0;{10 + 30 * j},5;" for i in range(8) for j in range(7)]
    (tmp_path / "marks.csv").write_bytes("\ufeffID;X mm;Y mm;Note\r\n".replace("X mm", "x_mm").replace("Y mm", "y_mm").encode()
                                         + "\r\n".join(rows).encode() + b"\r\n;;;\r\n\r\n")
    (tmp_path / "layout.toml").write_text(LAYOUT)
    (tmp_path / "study.toml").write_text(STUDY)
    return tmp_path


def sampler(*arguments):
    """Runs the program in a process of its own: exit status, stdout, stderr."""
    done = subprocess.run([sys.executable, "-m", "sampler", *map(str, arguments)], capture_output=True, text=True,
                          encoding="utf-8", env={**os.environ, "PYTHONIOENCODING": "utf-8"})
    return done.returncode, done.stdout, done.stderr


def fails(monkeypatch, capsys, *arguments):
    """The same within this process: exit status, stdout, stderr."""
    monkeypatch.setattr(sys, "argv", ["sampler", *map(str, arguments)])
    with pytest.raises(SystemExit) as ended:
        main()
    return ended.value.code, *capsys.readouterr()


def run(*arguments):
    return CliRunner().invoke(group, [str(argument) for argument in arguments], catch_exceptions=True)


def test_plan_from_a_spreadsheet_export(folder):
    status, out, err = sampler("plan", folder / "study.toml", "--out", folder / "result")
    assert (status, err) == (0, "")
    assert "fewest proven" in out
    assert sorted(path.name for path in (folder / "result").iterdir()) == [
        "certificate.json", "map.png", "map.svg", "plan.json", "sites.csv"]
    plan = json.loads((folder / "result" / "plan.json").read_text(encoding="utf-8"))
    assert plan["meets_limits"] and plan["fewest_proven"] and plan["n_sites"] == len(plan["sites"])
    with open(folder / "result" / "sites.csv", encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert [row["id"] for row in rows] == [site["id"] for site in plan["sites"]]
    assert all(0 <= float(row["x_mm"]) <= 300 for row in rows), "written in the layout's own frame"


def test_certify_and_refuse(folder):
    run("plan", folder / "study.toml", "--out", folder / "result")
    status, out, err = sampler("certify", folder / "result")
    assert (status, err) == (0, "")
    assert "no set of fewer does" in out
    (folder / "marks.csv").write_bytes((folder / "marks.csv").read_bytes().replace(b"10,0", b"11,0", 1))
    status, out, err = sampler("certify", folder / "result")
    assert status == 1
    assert err.startswith("Refused: ")
    assert "another layout" in err
    assert "Traceback" not in err


def test_audit_of_a_list(folder):
    run("plan", folder / "study.toml", "--out", folder / "result")
    shown = run("audit", folder / "study.toml", "--sites", folder / "result" / "sites.csv", "--out", folder / "audit")
    assert shown.exit_code == 0
    assert (folder / "audit" / "audit.json").exists()
    (folder / "few.csv").write_text("id\nM00\nM70\nM06\n")
    shown = run("audit", folder / "study.toml", "--sites", folder / "few.csv", "--out", folder / "audit", "--json")
    assert shown.exit_code == 3
    written = json.loads(shown.output)
    assert written["best_to_add"]["id"]
    assert not written["meets_limits"]


def test_cannot_be_met_is_exit_3_and_still_written(folder):
    (folder / "study.toml").write_text(STUDY.replace("0.8", "0.08"))
    status, out, err = sampler("plan", folder / "study.toml", "--out", folder / "result")
    assert (status, err) == (3, "")
    assert "Cannot be met" in out
    assert "loosen position over the panel to" in out
    plan = json.loads((folder / "result" / "plan.json").read_text(encoding="utf-8"))
    assert plan["n_sites"] == 0 and not plan["meets_limits"] and plan["lower_bound"] is None


MISTAKES = [
    ("study.toml", lambda text: text.replace("mark_um", "mark_mu"), ["mark_mu", "mark_um"]),
    ("study.toml", lambda text: text.replace("0.3, 0.3", "0.3, 0.0"), ["mark_um", "0"]),
    ("study.toml", lambda text: text.replace('"affine"', '"afine"'), ["afine", "affine"]),
    ("study.toml", lambda text: text.replace("layout.toml", "lay.toml"), ["lay.toml"]),
    ("study.toml", lambda text: text.replace("position_um = 0.8", "position_um = nan"), ["position_um"]),
    ("study.toml", lambda text: text + "[rules]\nrequired = [\"M99\"]\n", ["M99"]),
    ("study.toml", lambda text: text + "[rules]\nrequired = [\"M00\"]\nforbidden = [\"M00\"]\n", ["M00"]),
    ("study.toml", lambda text: "\x00\x01" + text, ["study.toml"]),
    ("study.toml", lambda text: "", ["study.toml"]),
    ("layout.toml", lambda text: text.replace("300.0", "-300.0"), ["width_mm"]),
    ("marks.csv", lambda text: text.replace("M01;", "M00;", 1), ["M00"]),
    ("marks.csv", lambda text: "id\nM1\n", ["x_mm"]),
    ("marks.csv", lambda text: text.replace("10,0;10,5", "ten;10,5"), ["ten", "line 2"]),
]


@pytest.mark.parametrize(("name", "change", "said"), MISTAKES, ids=[f"{m[0]}-{m[2][0]}-{i}" for i, m in enumerate(MISTAKES)])
def test_bad_input_is_exit_1_named_and_nothing_written(folder, name, change, said, monkeypatch, capsys):
    text = (folder / name).read_text(encoding="utf-8-sig")
    (folder / name).write_text(change(text), encoding="utf-8")
    status, out, err = fails(monkeypatch, capsys, "plan", folder / "study.toml", "--out", folder / "result")
    assert status == 1, out + err
    assert out == ""
    assert err.startswith("Nothing was written")
    assert all(word in err for word in said), err
    assert not (folder / "result").exists()


@pytest.mark.parametrize("study", ["", ".", "no-such-file.toml"])
def test_not_a_study_file(folder, study, monkeypatch, capsys):
    status, _, err = fails(monkeypatch, capsys, "plan", folder / study, "--out", folder / "result")
    assert status == 1
    assert "Nothing was written" in err


def test_a_wrong_column_of_sites(folder, monkeypatch, capsys):
    (folder / "few.csv").write_text("name\nM00\n")
    status, _, err = fails(monkeypatch, capsys, "audit", folder / "study.toml", "--sites", folder / "few.csv", "--out",
                           folder / "audit")
    assert status == 1
    assert '"id"' in err or "id" in err


def test_ctrl_c_writes_the_best_so_far(folder):
    """SIGINT during a search that would take minutes: exit 0, files whole, and the summary says that it was interrupted."""
    study = STUDY.replace('"affine"', '"order3"').replace("0.8", "0.85").replace("seconds = 20", "seconds = 300")
    rows = [f"A{i}-{j},{5 + 4.8 * i:.3f},{5 + 4.7 * j:.3f}" for i in range(61) for j in range(41)]
    (folder / "marks.csv").write_text("id,x_mm,y_mm\n" + "\n".join(rows) + "\n")
    (folder / "study.toml").write_text(study)
    process = subprocess.Popen([sys.executable, "-m", "sampler", "plan", str(folder / "study.toml"), "--out",
                                str(folder / "result")], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True,
                               encoding="utf-8", env={**os.environ, "PYTHONIOENCODING": "utf-8"})
    time.sleep(8.0)
    assert process.poll() is None, "the search should still be running"
    process.send_signal(signal.SIGINT)
    out, err = process.communicate(timeout=60)
    assert process.returncode == 0, err
    assert "ending the search" in err
    assert "interrupted" in out
    plan = json.loads((folder / "result" / "plan.json").read_text(encoding="utf-8"))
    assert plan["interrupted"] and plan["meets_limits"] and not plan["fewest_proven"]
    assert plan["lower_bound"] <= plan["n_sites"]
    assert run("certify", folder / "result").exit_code == 0
