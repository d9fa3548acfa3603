"""Results as text, and folders that are written whole or not at all."""

from __future__ import annotations

import json
import math
import os
import shutil
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from invented_plans import first_plan, impossible_plan, listed_audit, notched_plan
from small_study import faults_of

from sampler.errors import InputError
from sampler.files import output
from sampler.files.output import audit_json, plan_json, sites_csv, write_results
from sampler.files.plan import read_plan
from sampler.files.table import read_site_ids
from sampler.panel.layout import Sites
from sampler.tasks.study import Source

CONTRACT = {"format", "version", "study", "layout", "candidates", "n_sites", "lower_bound", "fewest_proven", "log_det",
            "d_efficiency_at_least", "meets_limits", "sites", "terms", "limits", "seconds", "seed"}
NEW = {"plan.json": "new plan", "sites.csv": "new sites", "map.png": b"\x89new"}


def with_sources(plan):
    study = replace(plan.study, source=Source("studies/a.toml", "a" * 64), layout_source=Source("layouts/a.toml", "b" * 64))
    return replace(plan, study=study)


def strict(text):
    def refuse(name):
        raise AssertionError(f"{name} is not JSON")
    return json.loads(text, parse_constant=refuse)


def test_plan_holds_what_the_contract_says():
    plan = with_sources(first_plan(seconds=1.2345))
    said = strict(plan_json(plan))
    assert set(said) >= CONTRACT
    assert said["format"] == 1
    assert said["study"] == {"path": "studies/a.toml", "sha256": "a" * 64}
    assert (said["candidates"], said["n_sites"], said["lower_bound"]) == (324, 24, plan.lower_bound)
    assert [site["order"] for site in said["sites"]] == list(range(1, 25))
    assert [site["id"] for site in said["sites"]] == plan.sites.id.tolist()
    assert {"name": "scale_x", "unit": "ppm", "k_u": plan.audit.terms[2].k_u} in said["terms"]
    first = said["limits"][0]
    assert first["ratio"] == first["predicted"] / first["max"] == plan.audit.limits[0].ratio
    assert said["worst_position"]["max"] is None
    assert said["worst_position"]["axis"] in ("dx", "dy")
    assert "certificate" not in said
    assert strict(plan_json(replace(plan, certificate={"sha256": "c" * 64})))["certificate"] == {"sha256": "c" * 64}


def test_coordinates_are_in_the_layouts_own_frame():
    plan = notched_plan()
    assert plan.study.layout.origin_mm == (-228.5, -305.0)
    site = strict(plan_json(plan))["sites"][0]
    assert (site["x_mm"], site["y_mm"]) == pytest.approx(tuple(plan.sites.xy_mm[0] + [228.5, 305.0]), abs=1e-9)
    assert sites_csv(plan).splitlines()[1] == f"1,{site['id']},{site['x_mm']},{site['y_mm']},front,"
    where = strict(plan_json(plan))["limits"][-1]
    by_hand = np.array(plan.audit.limits[-1].where_mm or (math.nan, math.nan)) + [228.5, 305.0]
    assert where.get("where_mm", [math.nan] * 2) == pytest.approx(by_hand.tolist(), nan_ok=True)


def test_what_does_not_exist_is_null_with_a_reason():
    plan = first_plan(d_efficiency_at_least=math.nan, lower_bound=math.nan)
    terms = (replace(plan.audit.terms[0], k_u=math.inf), *plan.audit.terms[1:])
    limits = (replace(plan.audit.limits[0], predicted=math.inf), *plan.audit.limits[1:])
    said = strict(plan_json(replace(plan, audit=replace(plan.audit, terms=terms, limits=limits, log_det=-math.inf))))
    assert said["d_efficiency_at_least"] is said["lower_bound"] is said["log_det"] is None
    assert said["terms"][0]["k_u"] is None
    assert said["terms"][0]["reason"] == "not determined by these sites"
    assert (said["limits"][0]["predicted"], said["limits"][0]["ratio"]) == (None, None)
    assert "reason" not in said["limits"][1]


def test_no_plan_has_no_sites(tmp_path):
    plan = impossible_plan()
    said = strict(plan_json(plan))
    assert (said["n_sites"], said["sites"], said["meets_limits"], said["lower_bound"]) == (0, [], False, None)
    assert said["predicted_with"] == "all candidates"
    assert said["advice"] == list(plan.advice)
    assert sites_csv(plan) == "order,id,x_mm,y_mm,side,kind\n"


def test_audit():
    result = listed_audit()
    said = strict(audit_json(result))
    assert said["droppable"] == ["E-12", "E-107"]
    assert (said["n_sites"], said["fewest"]["n_sites"], said["fewest"]["fewest_proven"]) == (28, 24, True)
    assert said["best_to_add"] is None
    tight = strict(audit_json(replace(result, best_to_add=("E-9", math.inf), fewest=impossible_plan())))
    assert tight["best_to_add"] == {"id": "E-9", "worst_ratio": None}
    assert tight["fewest"]["n_sites"] is None
    assert strict(audit_json(replace(result, fewest=None, d_efficiency=math.nan)))["fewest"] is None


def test_plan_is_read_back(tmp_path):
    plan = with_sources(first_plan())
    write_results(tmp_path / "out", {"plan.json": plan_json(plan), "sites.csv": sites_csv(plan)})
    for path in (tmp_path / "out", tmp_path / "out" / "plan.json"):
        read = read_plan(path)
        assert read.ids == tuple(plan.sites.id)
        assert read.study == plan.study.source
        assert read.layout == plan.study.layout_source
        assert read.values == strict(plan_json(plan))
    assert read_site_ids(tmp_path / "out" / "sites.csv") == list(read.ids)


IDS = st.lists(st.text(st.characters(blacklist_categories=("Cs", "Cc")), min_size=1, max_size=12).map(str.strip).filter(bool),
               min_size=1, max_size=12, unique=True)


@settings(max_examples=15, deadline=None)
@given(ids=IDS, seed=st.integers(0, 2**32 - 1))
def test_any_plan_written_is_read_back(tmp_path_factory, ids, seed):
    xy = np.random.default_rng(seed).uniform(-250, 250, (len(ids), 2))
    plan = with_sources(PLAN)
    plan = replace(plan, audit=replace(plan.audit, sites=Sites.at(np.array(ids), xy)))
    folder = tmp_path_factory.mktemp("plan")
    write_results(folder, {"plan.json": plan_json(plan), "sites.csv": sites_csv(plan)})
    read = read_plan(folder)
    assert read.ids == tuple(ids) == tuple(read_site_ids(folder / "sites.csv"))
    written = np.array([[site["x_mm"], site["y_mm"]] for site in read.values["sites"]])
    assert np.abs(written - xy).max() <= 0.6e-9


PLAN = first_plan()


@pytest.mark.parametrize(("change", "phrase"), [
    (lambda said: said | {"format": 7}, "format is 7, which this version does not know"),
    (lambda said: {k: v for k, v in said.items() if k != "study"}, "study is missing"),
    (lambda said: said | {"layout": {"path": "x"}}, "[layout] sha256 is missing"),
    (lambda said: said | {"sites": [{"id": 3}]}, "[[sites]] id is 3; give a text"),
    (lambda said: said | {"sites": [4]}, "give tables [[sites]]"),
    (lambda said: said | {"sites": [{"id": "A"}, {"id": "A"}]}, "a site is listed more than once"),
    (lambda said: [said], "this holds no plan"),
])
def test_plans_that_are_not_right(tmp_path, change, phrase):
    path = tmp_path / "plan.json"
    path.write_text(json.dumps(change(strict(plan_json(with_sources(PLAN))))), encoding="utf-8")
    assert any(phrase in fault for fault in faults_of(path, read_plan))


@pytest.mark.parametrize("data", [b"{", b'{"format": NaN}', b"[" * 100_000])
def test_no_json(tmp_path, data):
    (tmp_path / "plan.json").write_bytes(data)
    fault, = faults_of(tmp_path, read_plan)
    assert "plan.json: this is not JSON" in fault


def test_no_plan(tmp_path):
    assert "there is no such file; give the path of the plan.json of a result" in faults_of(tmp_path, read_plan)[0]


def test_the_study_is_found_from_the_plans_folder(tmp_path, monkeypatch):
    (tmp_path / "studies").mkdir()
    (tmp_path / "studies" / "a.toml").touch()
    folder = tmp_path / "out" / "first"
    write_results(folder, {"plan.json": plan_json(with_sources(PLAN))})
    assert read_plan(folder).study_path() == tmp_path / "studies" / "a.toml"
    monkeypatch.chdir(tmp_path)
    assert read_plan("out/first").study_path() == Path("studies/a.toml")
    (tmp_path / "studies" / "a.toml").unlink()
    assert read_plan("out/first").study_path() == Path("studies/a.toml")


# -- folders ----------------------------------------------------------------------------------------------------------

def content(folder):
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in folder.rglob("*") if path.is_file()}


def as_bytes(files):
    return {name: text.encode() if isinstance(text, str) else text for name, text in files.items()}


def old_result(folder):
    """An earlier result with a file that the new one lacks, and files that are not ours."""
    folder.mkdir()
    for name, text in {"plan.json": "old plan", "sites.csv": "old sites", "map.svg": "old map", "notes.txt": "mine"}.items():
        (folder / name).write_text(text)
    (folder / "more").mkdir()
    (folder / "more" / "plan.json").write_text("mine too")
    return content(folder)


def test_a_new_folder_with_its_parents(tmp_path):
    write_results(tmp_path / "a" / "b", NEW)
    assert content(tmp_path / "a" / "b") == as_bytes(NEW)
    assert os.listdir(tmp_path / "a") == ["b"]
    umask = os.umask(0)
    os.umask(umask)
    assert (tmp_path / "a" / "b").stat().st_mode & 0o777 == 0o777 & ~umask


def test_an_old_result_is_replaced_whole_and_foreign_files_stay(tmp_path):
    old_result(tmp_path / "out")
    write_results(tmp_path / "out", NEW)
    assert content(tmp_path / "out") == {**as_bytes(NEW), "notes.txt": b"mine", "more/plan.json": b"mine too"}
    assert sorted(os.listdir(tmp_path / "out")) == ["map.png", "more", "notes.txt", "plan.json", "sites.csv"]


def test_into_the_working_directory(tmp_path, monkeypatch):
    monkeypatch.chdir(tmp_path)
    for _ in range(2):
        write_results(".", NEW)
        assert content(tmp_path) == as_bytes(NEW)


class Struck(BaseException):
    """Stands for whatever ends a program: not an Exception."""


STEPS = ((os, "rename"), (os, "fsync"), (Path, "mkdir"))
CLEARING = (shutil, "rmtree")


def strike(monkeypatch, call, error=Struck, steps=STEPS):
    """Makes the given one of the calls that change a folder fail."""
    made = {"calls": 0}

    def counted(plain):
        def wrapper(*args, **kwargs):
            made["calls"] += 1
            if made["calls"] == call:
                raise error
            return plain(*args, **kwargs)
        return wrapper

    for owner, name in steps:
        monkeypatch.setattr(owner, name, counted(getattr(owner, name)))
    return made


@pytest.mark.parametrize("call", range(1, 15))
def test_a_failure_at_any_step_leaves_the_old_result(tmp_path, call, monkeypatch):
    before = old_result(tmp_path / "out")
    with monkeypatch.context() as patch:
        strike(patch, call)
        with pytest.raises(Struck):
            write_results(tmp_path / "out", NEW)
    assert content(tmp_path / "out") == before
    assert not [name for name in os.listdir(tmp_path / "out") if name.startswith(".")]


def test_there_are_no_more_steps_than_were_struck(tmp_path, monkeypatch):
    old_result(tmp_path / "out")
    with monkeypatch.context() as patch:
        made = strike(patch, -1)
        write_results(tmp_path / "out", NEW)
    assert made["calls"] == 14


@pytest.mark.parametrize("call", range(1, 7))
def test_a_failure_leaves_no_new_folder(tmp_path, call, monkeypatch):
    with monkeypatch.context() as patch:
        strike(patch, call)
        with pytest.raises(Struck):
            write_results(tmp_path / "out", NEW)
    assert os.listdir(tmp_path) == []


@pytest.mark.skipif(not hasattr(os, "fork"), reason="ends a copy of this process")
@pytest.mark.parametrize("call", range(1, 17))
def test_a_killed_process_is_put_right_by_the_next(tmp_path, call):
    """The process ends at a step, without a chance to tidy; then the result is whole after the next call's recovery."""
    old = old_result(tmp_path / "out")
    pid = os.fork()
    if pid == 0:
        patch = pytest.MonkeyPatch()
        try:
            strike(patch, call, error=type("Killed", (BaseException,), {"__init__": lambda self: os._exit(0)}),
                   steps=(*STEPS, CLEARING))
            write_results(tmp_path / "out", NEW)
        finally:
            os._exit(1)
    assert os.waitstatus_to_exitcode(os.waitpid(pid, 0)[1]) == 0
    plan = tmp_path / "out" / "plan.json"
    if plan.exists() and plan.read_text() == "new plan":  # whoever reads the new plan finds all of it
        assert as_bytes(NEW).items() <= content(tmp_path / "out").items()
    output._recover(tmp_path / "out")
    after = content(tmp_path / "out")
    assert after in (old, {**as_bytes(NEW), "notes.txt": b"mine", "more/plan.json": b"mine too"})
    assert not [name for name in os.listdir(tmp_path / "out") if name.startswith(".")]
    write_results(tmp_path / "out", NEW)
    assert as_bytes(NEW).items() <= content(tmp_path / "out").items()


def test_refusals(tmp_path, monkeypatch):
    (tmp_path / "file").touch()
    with pytest.raises(InputError, match="this is a file; give a folder"):
        write_results(tmp_path / "file", NEW)
    with pytest.raises(InputError, match="choose another folder with --out"):
        write_results(tmp_path / "file" / "below", NEW)
    with monkeypatch.context() as patch:
        strike(patch, 1, error=PermissionError(13, "Permission denied", str(tmp_path / "out")))
        with pytest.raises(InputError, match="Permission denied"):
            write_results(tmp_path / "out", NEW)
    assert sorted(os.listdir(tmp_path)) == ["file"]
