"""Layouts and studies read in full: frames, ids, hashes, per-cell terms, and the layouts of this repository."""

from __future__ import annotations

import hashlib
from pathlib import Path

import numpy as np
import pytest
from small_study import LAYOUT, MARKS, STUDY, write_study

from sampler.files.layout import read_layout
from sampler.files.study import read_study
from sampler.model.basis import ModelTerm
from sampler.panel.candidates import candidates
from sampler.tasks.study import RegionLimit, Rules, SearchOptions, TermLimit, TermPrior
from sampler.uncertainty.noise import Noise

LAYOUTS = Path(__file__).parents[2] / "layouts"


def test_study(tmp_path):
    study = read_study(write_study(tmp_path))
    assert study.title == "A small study"
    assert study.model.names == ("translation_x", "translation_y", "scale_x", "scale_y", "rotation", "orthogonality", "dx_xy",
                                 "dy_xy", "exposure.rotation")
    assert study.noise == Noise((0.25, 0.3), (0.4, 0.5))
    assert study.limits == (TermLimit(("scale_x", "scale_y"), 8.0), RegionLimit("panel", 2.0))
    assert study.rules == Rules(("E-c1r1-1",), ("E-c2r2-4",), max_sites=60)
    assert study.search == SearchOptions(5.0, 3)
    assert study.layout.name == "invented small panel"


def test_what_is_optional(tmp_path):
    study = STUDY[:STUDY.index("[rules]")].replace('title = "A small study"\n', "").replace("local_um = [0.4, 0.5]", "") \
        .replace("coverage_factor = 3.0", "")
    layout = LAYOUT.replace('name = "invented small panel"\n', "").replace("edge_exclusion_mm = 8.0\n", "").replace(
        'origin = "centre"', "")
    read = read_study(write_study(tmp_path, study, layout))
    assert (read.title, read.layout.name, read.layout.edge_exclusion_mm) == ("study", "panel", 0.0)
    assert (read.coverage_factor, read.noise.local_um, read.rules, read.search) == (3.0, (0, 0), Rules(), SearchOptions())
    assert read_study(write_study(tmp_path, 'name = "short"\n' + study)).title == "short"


def test_hashes(tmp_path):
    """The layout's hash covers its mark files: `cat layout.toml marks.csv | sha256sum`."""
    study = read_study(write_study(tmp_path))
    assert study.source.sha256 == hashlib.sha256(STUDY.encode()).hexdigest()
    assert study.layout_source.sha256 == hashlib.sha256((LAYOUT + MARKS).encode()).hexdigest()
    assert study.layout_source.path == (tmp_path / "layouts" / "panel.toml").as_posix()
    assert read_study(write_study(tmp_path, marks=MARKS + "\n")).layout_source.sha256 != study.layout_source.sha256


def test_paths_are_relative_to_the_file_that_names_them(tmp_path, monkeypatch):
    write_study(tmp_path)
    (tmp_path / "deep").mkdir()
    (tmp_path / "deep" / "study.toml").write_text(STUDY.replace("layouts/", "../layouts/"), encoding="utf-8")
    monkeypatch.chdir(tmp_path)
    read = read_study("deep/study.toml")
    assert (read.source.path, read.layout_source.path) == ("deep/study.toml", "layouts/panel.toml")


def test_marks_repeated_in_cells(tmp_path):
    marks = read_study(write_study(tmp_path)).layout.marks
    assert marks.id[:5].tolist() == ["E-c1r1-1", "E-c1r1-2", "E-c1r1-3", "E-c1r1-4", "E-c2r1-1"]
    assert marks.xy_mm[0].tolist() == [-1.5 * 122 - 50, -1.5 * 123 - 50]
    at = marks.id.tolist().index("E-c4r3-2")
    assert marks.xy_mm[at].tolist() == [1.5 * 122 + 50, 0.5 * 123 - 50]
    assert len(marks) == 68


def test_lower_left_origin_moves_everything(tmp_path):
    """The same panel written from its corner: equal but for the origin."""
    centred = read_study(write_study(tmp_path, STUDY.replace(
        'region = "panel"', "polygon_mm = [[0, 0], [100, 0], [0, 100]]"), LAYOUT.replace(
        "[122.0, 123.0]", "[122.0, 123.0]\ncentre_mm = [1.0, 2.0]").replace(
        "8.0\n", "8.0\noutline_mm = [[-255, -257.5], [255, -257.5], [255, 257.5], [-200, 257.5]]\n")))
    moved_layout = (LAYOUT.replace('"centre"', '"lower-left"').replace("[-255.0, -40.0, -230.0, 40.0]", "[0, 217.5, 25, 297.5]")
                    .replace("[0.0, 0.0, 9.0]", "[255, 257.5, 9]")
                    .replace("[122.0, 123.0]", "[122.0, 123.0]\ncentre_mm = [256.0, 259.5]")
                    .replace("8.0\n", "8.0\noutline_mm = [[0, 0], [510, 0], [510, 515], [55, 515]]\n"))
    rows = [row.split(",") for row in MARKS.splitlines()]
    moved_marks = "\n".join([",".join(rows[0]), *(
        ",".join([row[0], str(float(row[1]) + 255), str(float(row[2]) + 257.5), *row[3:]]) for row in rows[1:])])
    moved = read_study(write_study(tmp_path, STUDY.replace(
        'region = "panel"', "polygon_mm = [[255, 257.5], [355, 257.5], [255, 357.5]]"), moved_layout, moved_marks))
    assert moved.layout.origin_mm == (-255.0, -257.5)
    assert np.allclose(moved.layout.marks.xy_mm, centred.layout.marks.xy_mm, atol=1e-12)
    assert np.array_equal(moved.layout.outline_mm, centred.layout.outline_mm)
    assert moved.layout.grids == centred.layout.grids
    assert np.array_equal(moved.layout.keep_outs[0].vertices_mm, centred.layout.keep_outs[0].vertices_mm)
    assert moved.layout.keep_outs[1].circle_mm == centred.layout.keep_outs[1].circle_mm
    assert np.array_equal(moved.limits[1].polygon_mm, centred.limits[1].polygon_mm)
    assert (candidates(moved.layout).reason == candidates(centred.layout).reason).all()


@pytest.mark.parametrize(("terms", "expected"), [
    ('"all"', None), ('["all"]', None), ('"scale"', ("scale_x", "scale_y")), ('["trapezoid", "dx_xy"]', ("dx_xy", "dy_xy")),
    ('"exposure.rotation"', ("exposure.rotation",)), ('["scale_y", "scale_x"]', ("scale_x", "scale_y")),
])
def test_limited_terms(tmp_path, terms, expected):
    study = read_study(write_study(tmp_path, STUDY.replace('["scale_x", "scale_y"]', terms)))
    assert study.limits[0].terms == (study.model.names if expected is None else expected)


def test_terms_of_each_cell(tmp_path):
    text = STUDY.replace('shared = ["rotation"]', 'shared = ["rotation"]\neach = ["translation"]')
    study = read_study(write_study(tmp_path, text))
    assert len(study.model) == 8 + 1 + 16 * 2
    assert study.model.terms[-1] == ModelTerm("translation_y", "exposure", 15, "c4r4")
    assert study.model.names[9:11] == ("exposure[c1r1].translation_x", "exposure[c1r1].translation_y")
    one = read_study(write_study(tmp_path, text.replace('["scale_x", "scale_y"]', '"exposure[c2r3].translation"')))
    assert one.limits[0].terms == ("exposure[c2r3].translation_x", "exposure[c2r3].translation_y")
    every = read_study(write_study(tmp_path, text.replace('["scale_x", "scale_y"]', '"exposure.translation_x"')))
    assert len(every.limits[0].terms) == 16


def test_priors_potential_terms_and_local_range(tmp_path):
    text = STUDY.replace("[noise]", """[model.potential]
terms = ["order2"]
sd_um = 0.2
[[prior]]
terms = "scale"
sd = 5
[noise]"""
                         ).replace("[[limit]]", "local_range_mm = 120\n[[limit]]", 1).replace(
        'region = "panel"', 'region = "cells:exposure"\nof = "displacement"')
    study = read_study(write_study(tmp_path, text))
    assert study.priors == (TermPrior(("scale_x", "scale_y"), 5.0),)
    assert study.potential.terms.names == ("dx_x2", "dx_y2", "dy_x2", "dy_y2")  # affine and trapezoid are corrected
    assert study.potential.sd_um == 0.2
    assert study.noise.local_range_mm == 120
    assert study.limits[1] == RegionLimit("cells:exposure", 2.0, None, "displacement")


@pytest.mark.parametrize(("name", "marks", "candidate_count"), [
    ("organic-core-510x515", 336, 324), ("glass-600x600", 324, 319), ("notched-457x610", 3024, 2924)])
def test_layouts_of_this_repository(name, marks, candidate_count):
    layout = read_layout(LAYOUTS / f"{name}.toml")
    found = candidates(layout)
    assert (len(layout.marks), len(found.sites)) == (marks, candidate_count)
    assert {reason.split('"')[0] for reason in found.counts()} <= {
        "outside the outline", "inside the edge exclusion of 6 mm", "inside keep-out "}
    assert (LAYOUTS / f"{name}.toml").read_text(encoding="utf-8").startswith("# Invented")
