"""Readings as they come: repeats, losses, unknown marks, places without marks."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from invented_plans import core_layout, lattice

from sampler.errors import InputError
from sampler.estimation.charts import individuals, likeness, pooled
from sampler.estimation.doubts import doubts
from sampler.estimation.rates import often_lost, read_rates, wilson
from sampler.estimation.readings import Readings
from sampler.panel.layout import Sites

LAYOUT = core_layout(5)
IDS = LAYOUT.marks.id


def test_repeats_are_averaged_and_losses_counted():
    panel = ["B", "B", "B", "A", "A", "B"]
    ids = [IDS[3], IDS[3], IDS[1], IDS[1], IDS[2], IDS[3]]
    dxy = np.array([[1.0, 2.0], [3.0, np.nan], [5.0, 6.0], [np.nan, np.nan], [7.0, 8.0], [8.0, 4.0]])
    readings = Readings.of(LAYOUT, panel, dxy, id=ids, lot=["L1", "L1", "L1", "L2", "L2", "L1"])
    assert readings.panel_names == ("B", "A") and readings.lot_names == ("L1", "L2") and readings.lot.tolist() == [0, 1]
    assert readings.lost.tolist() == [False, True, False, True, False, False] and len(readings) == 6
    means = readings.averaged()
    assert [(readings.panel_names[p], str(readings.sites.id[s])) for p, s in zip(means.panel, means.site, strict=True)] == \
        [("B", IDS[1]), ("B", IDS[3]), ("A", IDS[1]), ("A", IDS[2])]
    assert means.dxy_um[:2].tolist() == [[5.0, 6.0], [4.0, 3.0]] and np.isnan(means.dxy_um[2]).all()
    assert means.count.tolist() == [[1, 1], [3, 2], [0, 0], [1, 1]]
    assert means.within_um2.tolist() == [[0, 0], [26.0, 2.0], [0, 0], [0, 0]]
    assert often_lost(readings, 1) == ((IDS[1], 1, 2), (IDS[3], 1, 3))


def test_panels_that_read_the_same_marks_share_a_pattern(rng):
    panel = np.repeat(["a", "b", "c", "d"], 4)
    dxy = rng.normal(size=(16, 2))
    dxy[9, 0] = np.nan
    dxy[12:] = np.nan
    means = Readings.of(LAYOUT, panel, dxy, id=np.tile(IDS[:4], 4)).averaged()
    patterns = means.patterns()
    assert [pattern.panels.tolist() for pattern in patterns] == [[0, 1], [2]]
    assert patterns[0].y.shape == (2, 8) and patterns[1].y.shape == (1, 7)
    assert patterns[1].axis.tolist() == [0, 1, 1, 0, 1, 0, 1] and patterns[1].mark.tolist() == [0, 0, 1, 2, 2, 3, 3]
    per_site = rng.normal(size=(4, 2, 3))
    assert (patterns[0].of(per_site) == per_site.reshape(8, 3)).all()
    assert (means.dxy_um[patterns[0].rows] == patterns[0].dxy_um).all()
    flagged = np.zeros((16, 2), bool)
    flagged[0, 1] = True
    assert [pattern.panels.tolist() for pattern in means.without(flagged).patterns()] == [[0], [1], [2]]


def test_marks_by_place(rng):
    """Drawn marks are recognised by their place; a place without one becomes a site; off the panel is left out and named."""
    xy = np.concatenate([LAYOUT.marks.xy_mm[[4, 7]] + 0.004, [[10.5, -20.25], [9999.0, 0.0], [10.5, -20.25], [np.nan, 0.0]]])
    readings = Readings.of(LAYOUT, ["P"] * 6, rng.normal(size=(6, 2)), xy_mm=xy, kind=["k"] * 6)
    assert readings.sites.id.tolist() == [IDS[4], IDS[7], "(10.5, -20.25)"] and readings.site.tolist() == [0, 1, 2, 2]
    assert readings.sites.kind.tolist() == ["", "", "k"]
    assert len(readings.warnings) == 1 and "(9999, 0)" in readings.warnings[0] and "2 rows left out" in readings.warnings[0]


def test_sides_at_one_place_are_different_marks(rng):
    xy = lattice(2, 1, 100.0, 0.0)
    both = Sites.at(np.array(["F1", "F2", "B1", "B2"]), np.tile(xy, (2, 1)))
    both = replace(both, side=np.array(["front"] * 2 + ["back"] * 2))
    readings = Readings.of(replace(LAYOUT, marks=both), ["P"] * 3, rng.normal(size=(3, 2)), xy_mm=xy[[0, 1, 1]],
                           side=["back", "front", "back"])
    assert readings.sites.id[readings.site].tolist() == ["B1", "F2", "B2"]


def test_unknown_ids_are_named_and_left_out(rng):
    readings = Readings.of(LAYOUT, ["P"] * 9, rng.normal(size=(9, 2)), id=[IDS[0], *[f"X{i}" for i in range(7)], IDS[1]])
    assert len(readings) == 2
    assert '"X0", "X1", "X2", "X3", "X4" and 2 more are not in the layout; 7 rows left out' in readings.warnings[0]
    moved = Readings.of(LAYOUT, ["P"], rng.normal(size=(1, 2)), id=[IDS[0]], xy_mm=LAYOUT.marks.xy_mm[[0]] + [3.0, 4.0])
    assert "by 5 mm" in moved.warnings[0]


def test_every_fault_is_told_together():
    with pytest.raises(InputError) as error:
        Readings.of(LAYOUT, ["P", "Q"], np.array([[np.inf, 0.0], [0.0, 0.0]]), lot=["L"])
    assert len(error.value.faults) == 3
    assert "no marks are named" in str(error.value) and "lot has 1 rows, panel 2" in str(error.value)
    with pytest.raises(InputError, match="no rows"):
        Readings.of(LAYOUT, [], np.zeros((0, 2)), id=[])
    with pytest.raises(InputError, match="no reading is of a mark"):
        Readings.of(LAYOUT, ["P"], np.zeros((1, 2)), id=["nowhere"])
    with pytest.raises(InputError, match='more than one lot: panel "P"'):
        Readings.of(LAYOUT, ["P", "P"], np.zeros((2, 2)), id=IDS[:2], lot=["a", "b"])


def test_order_of_rows_changes_nothing(rng):
    n = 40
    panel, site, dxy = rng.integers(0, 3, n).astype(str), rng.integers(0, 9, n), rng.normal(size=(n, 2))
    order = np.concatenate([[int(np.flatnonzero(panel == name)[0]) for name in dict.fromkeys(panel)], np.arange(n)])
    order = np.array(list(dict.fromkeys(order.tolist())))
    order = np.r_[order[:3], rng.permutation(order[3:])]
    one = Readings.of(LAYOUT, panel, dxy, id=IDS[site]).averaged()
    other = Readings.of(LAYOUT, panel[order], dxy[order], id=IDS[site[order]]).averaged()
    assert other.dxy_um == pytest.approx(one.dxy_um, rel=1e-12) and (other.count == one.count).all()


def test_read_rates_with_wilsons_interval(rng):
    """Wilson 1927: 81 of 263 at 95 % is 0.2553 to 0.3662 (Newcombe 1998, Stat. Med. 17:857, Table I; from memory)."""
    assert wilson(81, 263) == pytest.approx((0.2553, 0.3662), abs=1e-4)
    assert wilson(0, 20)[0] == 0.0 and wilson(20, 20)[1] == 1.0
    marks = LAYOUT.marks
    kinds = np.where(np.arange(25) < 10, "cross", "ring")
    layout = replace(LAYOUT, marks=replace(marks, kind=kinds))
    dxy = np.zeros((25, 2))
    dxy[[0, 1], 0], dxy[20, 1] = np.nan, np.nan
    rates = read_rates(Readings.of(layout, ["P"] * 25, dxy, id=IDS))
    assert [(rate.kind, rate.read, rate.tried) for rate in rates] == [("cross", 8, 10), ("ring", 14, 15)]
    assert rates[0].rate == 0.8 and rates[0].interval[0] < 0.8 < rates[0].interval[1]


def growing(rng, slope, scale=1.0):
    """Panels that grow by about 20 ppm in x and y, with noise 0.3 µm."""
    xy = LAYOUT.marks.xy_mm
    y = np.stack([(xy @ (np.array(slope) + rng.normal(size=(2, 2)) * 1e-3).T) + 0.3 * rng.normal(size=(25, 2)) for _ in range(4)])
    return Readings.of(LAYOUT, np.repeat(list("abcd"), 25), scale * y.reshape(-1, 2), id=np.tile(IDS, 4))


@pytest.mark.parametrize(("slope", "scale", "said"), [
    ([[0.02, -0.005], [0.005, 0.018]], 1.0, None), ([[0.02, -0.001], [0.005, 0.018]], 1.0, None),
    ([[0.0005, 0.018], [0.02, -0.0005]], 1.0, "swapped"), ([[0.02, 0.0], [0.0, 0.02]], 1e-3, "given in mm"),
    ([[0.02, 0.0], [0.0, 0.02]], 1e3, "given in nm"), ([[0.0, 0.0], [0.0, 0.0]], 1.0, None)])
def test_doubtful_columns(rng, slope, scale, said):
    readings = growing(rng, slope, scale)
    found = doubts(readings, readings.averaged(), (0.3, 0.3), "pilot.csv")
    assert (found == ()) if said is None else (len(found) == 1 and said in found[0])


def test_constant_and_empty_columns(rng):
    dxy = np.column_stack([np.zeros(25), np.full(25, np.nan)])
    readings = Readings.of(LAYOUT, ["P"] * 25, dxy, id=IDS)
    said = doubts(readings, readings.averaged(), None, "pilot.csv")
    assert len(said) == 2 and "dx_um is 0 in every row" in said[0] and "dy_um was read nowhere" in said[1]
    small = Readings.of(LAYOUT, ["P"] * 25, rng.normal(size=(25, 2)) * 1e-3, id=IDS)
    assert "in mm" in doubts(small, small.averaged(), None, "pilot.csv")[0]
    few = Readings.of(LAYOUT, ["P"] * 4, rng.normal(size=(4, 2)), id=IDS[:4])
    assert doubts(few, few.averaged(), (0.3, 0.3), "pilot.csv") == ()


def test_chart_of_single_values():
    """Mean 10, moving ranges 2, 2, 2, 20: mean range 6.5, sigma 6.5/1.128."""
    chart = individuals(np.array([9.0, 11.0, 9.0, 11.0, 31.0]))
    assert chart.mean == pytest.approx(14.2) and chart.sigma == pytest.approx(6.5 / 1.128379, rel=1e-6)
    assert chart.upper - chart.mean == pytest.approx(3 * chart.sigma) and not chart.outside.any()
    assert np.isnan(individuals(np.array([1.0])).sigma) and not individuals(np.array([1.0])).outside.any()
    drift = individuals(np.arange(40.0))
    assert drift.outside[[0, -1]].all() and not drift.outside[20]


def test_pooled_chance_is_right_when_panels_repeat_each_other(rng):
    """Five panels whose residuals correlate by 0.8 at the same mark: p below 5 % in 5 % of trials, not in 20 %."""
    small, plain = 0, 0
    for _ in range(600):
        common = rng.normal(size=60)
        r = np.sqrt(0.8) * common + np.sqrt(0.2) * rng.normal(size=(5, 60))
        both = np.stack([r.ravel(), np.full(300, np.nan)], axis=1)
        alike = likeness(np.tile(np.arange(60), 5), both)
        chi = (r**2).sum(axis=1)
        small += pooled(chi, np.full(5, 60), alike).p_value < 0.05
        plain += pooled(chi, np.full(5, 60), 0.0).p_value < 0.05
    assert 0.03 < small / 600 < 0.08 < plain / 600
    none = pooled(np.zeros(2), np.zeros(2), 0.0)
    assert np.isnan(none.ratio) and none.p_value == 1.0 and likeness(np.arange(3), np.ones((3, 2))) == 0.0
