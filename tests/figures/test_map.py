"""The map says what the plan says: read from the SVG's own texts and shapes."""

from __future__ import annotations

import re
import struct
from dataclasses import replace
from xml.etree import ElementTree

import invented_plans as invented
import numpy as np
import pytest

from sampler.figures.bars import MOST_BARS, shown_limits
from sampler.figures.contours import worse_axis
from sampler.figures.map import audit_map, plan_map
from sampler.panel.candidates import Candidates
from sampler.panel.layout import Grid, Sites
from sampler.tasks.results import AuditedLimit, PositionMap
from sampler.tasks.study import Rules


def texts(pictures):
    root = ElementTree.fromstring(pictures["map.svg"])
    return ["".join(node.itertext()).strip() for node in root.iter("{http://www.w3.org/2000/svg}text")]


def png_size(data):
    assert data[:8] == b"\x89PNG\r\n\x1a\n"
    return struct.unpack(">II", data[16:24])


@pytest.fixture(scope="module")
def plan():
    return invented.first_plan()


@pytest.fixture(scope="module")
def drawn(plan):
    return plan_map(plan)


def test_two_files_with_title_answer_and_units(drawn):
    assert set(drawn) == {"map.png", "map.svg"}
    words = texts(drawn)
    assert "First plan: invented organic core" in words
    assert "24 sites, fewest proven; tightest limit dx_xy at 84 %" in words
    assert {"x, mm", "y, mm", "k·u of position, worse of dx and dy, µm (k = 3)"} <= set(words)
    assert {"edge exclusion 8 mm", "cells of grid exposure", "324 candidates",
            "24 sites, numbered in visiting order"} <= set(words)


def test_every_limit_has_its_values_and_unit(plan, drawn):
    words = texts(drawn)
    for limit in plan.audit.limits:
        assert limit.label in words
    assert "0.377 of 0.45 µm" in words
    assert "1.53 of 2.4 µrad" in words
    assert "Predicted k·u against its limit (k = 3)" in words


def test_sites_are_numbered_in_order(drawn):
    numbers = [word for word in texts(drawn) if re.fullmatch(r"[1-9]\d?", word)]
    assert [number for number in numbers if 1 <= int(number) <= 24] == [str(i) for i in range(1, 25)]


def test_same_plan_same_bytes_and_no_date(plan, drawn):
    assert plan_map(plan) == drawn
    assert b"<dc:date>" not in drawn["map.svg"]
    assert b"tIME" not in drawn["map.png"]
    assert b"Software" not in drawn["map.png"]


def test_panel_is_to_scale():
    """The outline in the SVG has the proportions of the panel."""
    for plan, size in ((invented.first_plan(), (510.0, 515.0)), (invented.notched_plan(), (457.0, 610.0))):
        svg = plan_map(plan)["map.svg"].decode()
        # The outline is the only closed path of the panel's corners drawn with the 1.2 pt line.
        look = 'style="fill: none; stroke: #1c1f24; stroke-width: 1.2'
        path = re.search(rf'<path d="([^"]+)" clip-path="[^"]+" {look}', svg).group(1)
        corners = np.array(re.findall(r"[ML] (\S+) (\S+)", path), float)
        spans = np.ptp(corners, axis=0)
        assert spans[0] / spans[1] == pytest.approx(size[0] / size[1], rel=1e-4)


def test_png_is_large_enough_to_print(drawn):
    width, height = png_size(drawn["map.png"])
    assert 1500 < width < 2500
    assert 1000 < height < 2000


def test_axes_are_in_the_layouts_own_frame():
    """With the origin at the lower left, sites, contours and ticks all move together."""
    plan = invented.notched_plan()
    ticks = [word for word in texts(plan_map(plan)) if re.fullmatch(r"[−\d]\d*", word)]
    assert "600" in ticks
    assert not any(tick.startswith("−") for tick in ticks)
    raster = worse_axis(plan.audit.position, plan.study.layout, ())
    assert raster.x_mm.min() < 0 < raster.x_mm[1] + 1e-9
    assert raster.x_mm.max() > 457


def test_limit_line_is_drawn_only_where_it_is_reached():
    over = texts(plan_map(invented.region_plan(0.8, status="interval")))
    assert over.count("limit 0.8 µm") == 2  # on the line and in the legend
    assert "position over panel" in over
    met = texts(plan_map(invented.region_plan(1.2)))
    assert "limit 1.2 µm, nowhere reached" in met
    assert "limit 1.2 µm" not in met
    assert "limit 0.3 µm, exceeded everywhere" in texts(plan_map(invented.region_plan(0.3, status="interval")))


def test_cannot_be_met():
    words = texts(plan_map(invented.impossible_plan(), route=True))
    assert "cannot be met, even with all 324 candidates measured; tightest limit scale_x at 177 %" in words
    assert "0.532 of 0.3 ppm" in words
    assert not any("numbered" in word or word == "route" for word in words)


def test_overfull_bars_are_hatched(drawn):
    assert b"<pattern" not in drawn["map.svg"]
    assert plan_map(invented.impossible_plan())["map.svg"].count(b"<pattern") == 1


def test_keep_outs_are_hatched_and_named():
    pictures = plan_map(invented.notched_plan())
    assert {"keep-out", "clamp left", "vacuum port", "cells of grid drill",
            "256 marks that are no candidates"} <= set(texts(pictures))
    assert b"<pattern" in pictures["map.svg"]


def test_undetermined_predictions_are_said_in_words(plan):
    audit = plan.audit
    limits = (replace(audit.limits[0], predicted=np.inf), *audit.limits[1:])
    position = replace(audit.position, k_u_um=np.full_like(audit.position.k_u_um, np.inf))
    blind = replace(audit, limits=limits, position=position, worst_position=replace(audit.worst_position, predicted=np.inf))
    words = texts(plan_map(replace(plan, audit=blind, status="interval")))
    assert "not determined (limit 0.35 µm)" in words
    assert "position not determined by these sites" in words
    assert not any("worse of dx and dy" in word for word in words)
    assert not any("inf" in word or "nan" in word for word in words)


def test_partly_undetermined_position(plan):
    values = plan.audit.position.k_u_um.copy()
    values[:30] = np.inf
    position = replace(plan.audit.position, k_u_um=values)
    raster = worse_axis(position, plan.study.layout, ())
    assert np.isnan(raster.values[2:30, 5]).all()
    assert np.isfinite(raster.values[32:, 5]).all()
    assert raster.high < plan.audit.worst_position.predicted * 1.1
    assert plan_map(replace(plan, audit=replace(plan.audit, position=position)))["map.png"]


def test_limit_in_a_gap_of_the_map_draws_no_line():
    """Two determined parts, below and above the limit, with nothing between them."""
    plan = invented.region_plan(2.0)
    values = np.where(np.arange(60) < 25, 1.0, 3.0)[None, :, None] * np.ones((60, 1, 2))
    values[:, 20:30] = np.inf
    audit = replace(plan.audit, position=replace(plan.audit.position, k_u_um=values))
    assert texts(plan_map(replace(plan, audit=audit))).count("limit 2 µm") == 1  # in the legend alone


def test_limit_reached_only_in_a_corner_without_edge_exclusion():
    plan = invented.region_plan(1.0, status="interval")
    values = np.full((60, 60, 2), 0.5)
    values[0, 0] = 1.2
    audit = replace(plan.audit, position=replace(plan.audit.position, k_u_um=values))
    layout = replace(plan.study.layout, edge_exclusion_mm=0.0)
    words = texts(plan_map(replace(plan, audit=audit, study=replace(plan.study, layout=layout))))
    assert words.count("limit 1 µm") == 2


def test_raster_is_carried_straight_beyond_the_panel():
    """A plane stays a plane beyond the rim and across the notch's empty cells next to known ones."""
    layout = invented.core_layout()
    x, y = np.linspace(-255, 255, 31), np.linspace(-257.5, 257.5, 31)
    plane = 1.0 + 0.001 * x[None] + 0.002 * y[:, None]
    raster = worse_axis(PositionMap(x, y, np.stack([plane, 0.5 * plane], axis=2)), layout, ())
    xx, yy = np.meshgrid(raster.x_mm, raster.y_mm)
    known = np.isfinite(raster.values)
    assert known.all()
    np.testing.assert_allclose(raster.values, 1.0 + 0.001 * xx + 0.002 * yy, atol=1e-9)


def test_flat_map_and_one_site():
    """Translations only: k·u is the same everywhere, and one site determines it."""
    study = invented.study_of(invented.core_layout(4), ("translation",), title="$ingle_site$\n\x1b[31m")
    words = texts(plan_map(invented.plan_of(study, 1, {"translation_x": 2.0})))
    assert "$ingle_site$ [31m" in words
    assert any(word.startswith("1 site, fewest proven") for word in words)
    assert "1 site, numbered in visiting order" in words


def test_no_limits():
    study = invented.study_of(invented.core_layout(4))
    words = texts(plan_map(invented.plan_of(study, 6, {})))
    assert "The study sets no limits." in words
    assert "6 sites, fewest proven; no limits set" in words


def test_many_limits_show_the_tightest():
    limits = tuple(AuditedLimit(f"t{i}", 1.0, 0.01 * i, "ppm") for i in range(30))
    assert [limit.label for limit in shown_limits(limits)] == [f"t{i}" for i in range(29, 29 - MOST_BARS, -1)]
    plan = invented.first_plan()
    words = texts(plan_map(replace(plan, audit=replace(plan.audit, limits=limits))))
    assert "tightest 20 of 30 limits" in words
    assert "t10" in words
    assert "t9" not in words


def test_far_overfull_bar_says_how_far():
    plan = invented.first_plan()
    limits = (AuditedLimit("scale_x", 1.0, 7.314, "ppm"), *plan.audit.limits[1:])
    words = texts(plan_map(replace(plan, audit=replace(plan.audit, limits=limits), status="interval")))
    assert "7.31 of 1 ppm (731 %)" in words


def test_route_is_drawn_on_request(plan, drawn):
    assert "route" not in texts(drawn)
    assert "route" in texts(plan_map(plan, route=True))


def test_required_sites_and_many_sites(plan):
    rules = Rules(required=(str(plan.sites.id[3]),))
    assert "required site" in texts(plan_map(replace(plan, study=replace(plan.study, rules=rules))))
    study = invented.study_of(invented.core_layout(), title="Many")
    words = texts(plan_map(invented.plan_of(study, 101, {"scale_x": 9.0})))
    assert "101 sites" in words
    assert "101" not in words


def test_a_hundred_thousand_candidates_are_thinned(plan, rng):
    xy = rng.uniform(-240, 240, (100_000, 2))
    marks = Sites.at(np.arange(100_000).astype("U6"), xy)
    big = replace(plan, study=replace(plan.study, layout=replace(plan.study.layout, marks=marks)),
                  candidates=Candidates(marks, np.full(100_000, "")))
    pictures = plan_map(big)
    label = next(word for word in texts(pictures) if word.startswith("100,000 candidates"))
    assert re.fullmatch(r"100,000 candidates, 4,\d{3} of them drawn", label)
    assert len(pictures["map.svg"]) < 1_500_000


def test_a_grid_of_too_many_cells_is_only_named(plan):
    layout = replace(plan.study.layout, grids=(Grid("fine", 60, 60, (8.0, 8.0), (8.5, 8.5)),))
    words = texts(plan_map(replace(plan, study=replace(plan.study, layout=layout))))
    assert "cells of grid fine: 3,600, not drawn" in words


def test_every_grid_is_drawn_however_many(plan):
    grids = tuple(Grid(f"g{i}", 2, 2, (50.0, 50.0), (60.0, 60.0)) for i in range(6))
    layout = replace(plan.study.layout, grids=grids)
    words = texts(plan_map(replace(plan, study=replace(plan.study, layout=layout))))
    assert {f"cells of grid g{i}" for i in range(6)} <= set(words)


def test_no_edge_exclusion(plan):
    layout = replace(plan.study.layout, edge_exclusion_mm=0.0)
    assert not any("edge" in word for word in texts(plan_map(replace(plan, study=replace(plan.study, layout=layout)))))


def test_audit_map():
    words = texts(audit_map(invented.listed_audit(0.9)))
    assert "28 listed sites, 3 of 8 limits missed; fewest plan: 24 sites, fewest proven" in words
    assert "28 sites, numbered in the order of the list" in words
    alone = texts(audit_map(invented.listed_audit(2.0, fewest=None), route=True))
    assert "28 listed sites, every limit met" in alone
    assert "route" in alone
