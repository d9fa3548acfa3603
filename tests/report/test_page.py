"""The report page as text: answer, tables, data, escaping, size; what only a browser shows is in test_page_in_browser."""

from __future__ import annotations

import base64
import hashlib
import json
import re
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from invented_plans import core_layout
from pages import CLAIMS, COMMAND, ODD, big_page, cannot_page, full_page, page_of, small_study

from sampler.panel.layout import Grid
from sampler.report.page import page_html
from sampler.report.page_data import (
    COLOURS,
    MOST_LEVELS,
    NOT_DETERMINED,
    NOTHING,
    chart,
    coded,
    colours,
    levels,
)
from sampler.report.summary import CAUTION
from sampler.tasks.question import question
from sampler.tasks.results import MissChance
from sampler.tasks.review import recalled, review
from sampler.tasks.study import RegionLimit, Rules


class Reader(HTMLParser):
    """Tags, the text of the page outside scripts and styles, and what scripts and styles hold."""

    def __init__(self, html):
        super().__init__()
        self.tags, self.texts, self.raw, self.within = [], [], [], ""
        self.feed(html)
        self.text = " ".join(" ".join(self.texts).split())

    def handle_starttag(self, tag, attrs):
        self.tags.append((tag, dict(attrs)))
        self.within = tag

    def handle_endtag(self, tag):
        self.within = ""

    def handle_data(self, data):
        if self.within in ("script", "style"):
            self.raw.append((self.within, data))
        else:
            self.texts.append(data)

    @property
    def data(self):
        return json.loads(self.raw[1][1])


def read(page):
    return Reader(page_html(page))


def test_the_answer_comes_first():
    text = read(full_page()).text
    head = text[:text.index("Sites in visiting order")]
    for part in ("Invented organic core, pilot lot", "24 sites fewest proven; lower bound 23.09",
                 "88 % every limit met, tightest",
                 "Seconds per panel", "reading", "Worst position"):
        assert part in head.replace("\u00a0", " ")
    assert text.count(" ".join(CAUTION)) == 1


@pytest.mark.parametrize("page", [full_page, big_page, cannot_page])
def test_nothing_outside_the_file_is_named(page):
    html = page_html(page())
    assert not re.search(r"https?:|[\"'(=]\s*//|@import|url\((?!#)", html)
    assert not [tag for tag, attrs in Reader(html).tags if tag in ("link", "img", "iframe", "object", "embed") or "src" in attrs]


def test_the_policy_allows_this_script_and_style_only():
    found = read(full_page())
    policy = next(attrs["content"] for tag, attrs in found.tags if attrs.get("http-equiv") == "Content-Security-Policy")
    assert policy.startswith("default-src 'none'")
    style, _, script = (text for _, text in found.raw)
    for kind, text in (("style", style), ("script", script)):
        digest = base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()
        assert f"{kind}-src 'sha256-{digest}'" in policy
    assert not [attrs for _, attrs in found.tags if "style" in attrs or any(name.startswith("on") for name in attrs)]


def test_odd_names_stay_text():
    html = page_html(full_page())
    assert "<img" not in html and html.count("</script") == 2
    found = Reader(html)
    assert ODD in found.text and "</script><b>x</b>" in found.text and ODD in found.data["marks"]["id"]
    named = replace(full_page(), command="run <b>&", plan=replace(full_page().plan, warnings=("a <i>b</i>",), study=replace(
        full_page().plan.study, title="<script>alert(1)</script>\u202e")))
    html = page_html(named)
    assert "<script>alert" not in html and "\u202e" not in html and "<i>" not in html.split("<svg")[0]
    assert "run <b>&" in Reader(html).text


def test_the_tables_say_what_the_audit_says():
    page = full_page()
    text = read(page).text
    for limit in page.plan.audit.limits:
        assert limit.label in text
    assert text.count("met") >= 5 and "MISSED" not in text
    for term in page.plan.audit.terms:
        assert term.name in text
    assert all(str(name) in text for name in page.plan.sites.id)
    assert "2,000 simulated panels" in text and "scale_x: 3σ of the refit 2.31 ppm" in text and "Verification held" in text
    for fact in ("5" * 64, "7" * 64, "studies/core.toml", "0.1.0", COMMAND, "at least 0.987"):
        assert fact in text


def test_a_failed_verification_says_so_in_words():
    page = full_page()
    text = read(replace(page, verdict=replace(page.verdict, held=False, findings=()))).text
    assert "Verification DID NOT HOLD" in text
    assert "Verification" not in read(replace(page, verdict=None)).text


def decoded(text, unit):
    code = np.frombuffer(base64.b64decode(text), "<u2")
    return np.where(code == NOTHING, np.nan, np.where(code == NOT_DETERMINED, np.inf, code * unit))


def test_the_map_holds_the_audit():
    page = full_page()
    data = read(page).data
    state = next(state for state in data["states"] if state["plan"])
    position = page.plan.audit.position
    unit = data["scales"]["um"]["unit"]
    for axis, name in enumerate(("dx", "dy")):
        values = decoded(state["raster"][name], unit)
        np.testing.assert_allclose(values, position.k_u_um[..., axis].ravel(), atol=unit)
    np.testing.assert_allclose(decoded(state["raster"]["ratio"], data["scales"]["ratio"]["unit"]), page.limit_ratio.ravel(),
                               atol=data["scales"]["ratio"]["unit"])
    assert [data["marks"]["id"][row] for row in state["rows"]] == page.plan.sites.id.tolist()
    assert 1.0 in data["scales"]["ratio"]["levels"]


def test_the_states_are_the_trade_off_with_the_plan_in_it():
    page = full_page()
    states = read(page).data["states"]
    assert [state["count"] for state in states] == sorted(choice.count for choice in page.others)
    plan = next(state for state in states if state["plan"])
    assert plan["name"] == "24 sites, the plan" and plan["at_least"] == pytest.approx(3.9 / 24**0.5, abs=1e-5)
    for state, choice in zip(states, page.others, strict=True):
        assert state["ratio"] == pytest.approx(choice.audit.worst.ratio, abs=1e-5)
        assert len(state["loss"]) == len(state["rows"]) == choice.count
    assert "another choice; no set of 8 sites gets below" in states[0]["answer"]["proof"][1]
    unknown = replace(page, others=(replace(page.others[0], ratio_at_least=np.nan), *page.others[1:]))
    assert "not known" in read(unknown).data["states"][0]["answer"]["proof"][1]


def test_without_a_trade_off_there_is_no_slider():
    page = replace(full_page(), others=())
    ids = [attrs.get("id") for _, attrs in read(page).tags]
    assert "slider" not in ids and "slider" in [attrs.get("id") for _, attrs in read(full_page()).tags]
    assert len(read(page).data["states"]) == 1


def test_a_plan_that_is_no_point_of_the_trade_off_is_put_among_them():
    page = full_page()
    states = read(replace(page, others=tuple(choice for choice in page.others if choice.count != 24))).data["states"]
    assert [state["count"] for state in states if state["plan"]] == [24] and len(states) == len(page.others)
    assert states == sorted(states, key=lambda state: state["count"])


def test_what_cannot_be_met_says_why_and_what_would_help():
    found = read(cannot_page())
    assert "Cannot be met: with all 324 candidates measured, 1 of 5 limits still missed." in found.text
    assert "loosen the limit on the position from 0.1 to 0.31 µm" in found.text and "MISSED" in found.text
    assert "Sites in visiting order" not in found.text
    plan = cannot_page().plan
    kept = replace(cannot_page(), plan=replace(plan, audit=replace(plan.audit, limits=plan.audit.limits[:4])))
    assert "every limit is met, but no set within the study's rules was found" in read(kept).text


def test_a_map_that_is_not_determined_is_left_empty():
    page = page_of(small_study(), 2, claims=replace(CLAIMS, status="interval"))
    found = read(page)
    assert found.data["scales"]["um"] is None and found.data["states"][0]["raster"] is None
    assert "not determined" in found.text and "scale_x not determined" in found.text


@pytest.mark.parametrize(("changes", "words"), [
    ({"status": "interval"}, "fewest not proven; lower bound 23.09"),
    ({"status": "interval", "lower_bound": 20.2}, "at least 21 needed; lower bound 20.2"),
    ({"status": "interval", "lower_bound": 20.2, "interrupted": True}, "at least 21 needed, search interrupted; lower"),
    ({"status": "interval", "lower_bound": -np.inf}, "fewest not proven; no lower bound"),
])
def test_never_more_than_was_proven(changes, words):
    page = full_page()
    found = read(replace(page, plan=replace(page.plan, **changes)))
    assert words in found.text and "fewest proven" not in found.text
    assert ("interrupted: fewer sites may be possible" in found.text) == bool(changes.get("interrupted"))


def test_seconds_are_never_called_the_fewest_sites():
    page = full_page()
    study = page.plan.study
    quick = replace(study, search=replace(study.search, objective="seconds"))
    assert "fewest proven" not in read(replace(page, plan=replace(page.plan, study=quick))).text


def test_chance_and_warnings_are_told():
    page = full_page()
    text = read(replace(page, plan=replace(page.plan, warnings=("the model is wide",), chance=MissChance(0.011, 0.012)))).text
    assert "the model is wide" in text and "with a chance between 1.1 and 1.2 %" in text


def test_without_limits():
    page = full_page()
    chosen = replace(page.chosen, audit=replace(page.plan.audit, limits=()), losses=replace(
        page.chosen.losses, ratio=np.zeros(0), limit=np.zeros(0, int)))
    bare = replace(page, others=(), chosen=chosen, plan=replace(page.plan, audit=chosen.audit))
    assert "The study sets no limits." in read(bare).text


def test_three_thousand_candidates_fit_and_more_are_thinned():
    html = page_html(big_page())
    assert len(html.encode()) < 2_000_000 and "thinned" not in Reader(html).text
    crowded = page_of(small_study(core_layout(150)), 30, points=[(28, 0.5), (60, 0.4)])
    crowded = replace(crowded, others=crowded.others * 30)  # as heavy as sixty points
    html = page_html(crowded)
    found = Reader(html)
    assert len(html.encode()) < 2_000_000
    assert "The map shows at most 3,000 of 22,500 candidates" in found.text and "of them drawn" in found.text
    data = found.data
    assert 1500 < len(data["candidates"]) <= 3000
    assert all(row < len(data["marks"]["id"]) for state in data["states"] for row in state["rows"])


def test_grids_with_too_many_cells_are_named_only():
    dense = core_layout(grids=(Grid("units", 60, 60, (8.0, 8.0), (8.2, 8.2)),
                               Grid("exposure", 4, 4, (118.0, 119.0), (122.0, 123.0))))
    html = page_html(page_of(small_study(dense), 20))
    assert "cells of grid units: 3,600, not drawn" in html
    cells = re.findall(r'class="cells [^>]*d="([^"]*)"', html)
    assert len(cells) == 1 and cells[0].count("M") == 16


def test_a_limit_is_cut_to_its_region():
    study = small_study(limits=(RegionLimit("polygon", 0.8, np.array([[-50.0, -50.0], [50.0, -50.0], [0.0, 60.0]])),
                                RegionLimit("cells:exposure", 0.9), RegionLimit("marks", 0.9)))
    html = page_html(page_of(study, 24))
    clip = html[html.index('id="in-limit"'):]
    paths = re.findall(r' d="([^"]*)"', clip[:clip.index("</clipPath>")])
    assert paths[0] == "M-50 50L50 50L0 -60Z" and paths[1].count("M") == 16 and len(paths) == 2


def test_the_back_is_a_column_only_when_marks_lie_there():
    page = full_page()
    assert ">side<" not in page_html(page)
    layout = core_layout()
    side = np.where(np.arange(324) % 2 == 0, "front", "back")
    html = page_html(page_of(small_study(replace(layout, marks=replace(layout.marks, side=side))), 24))
    assert ">side<" in html and "turning over" in html and "site on the back" in html


def test_required_sites_have_a_sign_of_their_own():
    data = read(full_page()).data
    assert [data["marks"]["id"][row] for row in data["marks"]["required"]] == ["</script><b>x</b>"]
    free = page_of(small_study(rules=Rules()), 24)
    assert "required site" not in read(free).text


def test_one_study_gives_one_page():
    asked = question(replace(small_study(), source=CLAIMS.study, layout_source=CLAIMS.layout))
    ids = asked.candidates.sites.id[::14].tolist()
    made = [page_html(review(recalled(asked.study, ids, CLAIMS))) for _ in range(2)]
    assert made[0] == made[1]


def test_the_scale_darkens_steadily():
    def luminance(colour):
        part = np.array([int(colour[k:k + 2], 16) for k in (1, 3, 5)]) / 255
        linear = np.where(part <= 0.04045, part / 12.92, ((part + 0.055) / 1.055) ** 2.4)  # sRGB, IEC 61966-2-1
        return float(linear @ [0.2126, 0.7152, 0.0722])

    assert list(COLOURS) == colours(len(COLOURS))
    for count in range(2, MOST_LEVELS + 2):
        light = np.array([luminance(colour) for colour in colours(count)])
        assert (np.diff(light) < 0).all()
    # Ink on the darkest colour: a contrast of 3 is what marks need (WCAG 2.1, 1.4.11).
    assert (luminance(COLOURS[-1]) + 0.05) / (luminance("#1c1f24") + 0.05) > 2.5


@given(st.floats(1e-3, 1e3), st.floats(0.0, 50.0))
def test_levels_lie_inside_and_are_few(low, more):
    high = low * (1 + more)
    found = levels(low, high)
    assert 1 <= len(found) <= MOST_LEVELS and (np.diff(found) > 0).all()
    assert found[0] > 0.89 * low and found[-1] < 1.11 * high
    if more > 1e-2:
        assert found[0] > low * (1 - 1e-5) and found[-1] < high * (1 + 1e-5)


def test_numbers_beyond_the_scale_and_none_at_all_keep_their_meaning():
    values = np.array([[0.0, 1.0, np.nan], [np.inf, 1e9, 0.25]])
    np.testing.assert_array_equal(decoded(coded(values, 0.25), 0.25), [0.0, 1.0, np.nan, np.inf, 15_000.0, 0.25])


def test_the_curve_puts_better_lower_and_more_to_the_right():
    states = [{"count": n, "ratio": ratio, "at_least": bound} for n, ratio, bound in
              ((4, None, None), (6, 9.0, 3.0), (8, 1.4, 1.0), (10, 0.9, 0.5))]
    drawn = chart(states, (400, 200), (10, 10, 30, 40))
    assert states[0]["chart"] is None and len(drawn["found"]) == 3
    x, y = np.array(drawn["found"]).T
    assert (np.diff(x) > 0).all() and (np.diff(y) > 0).all() and drawn["one"] < y[2] and drawn["one"] > y[1]
    assert x.max() == 390.0 and max(y for _, y in drawn["bound"]) == 170.0
    heights = sorted(height for height, _ in drawn["y"])
    assert np.diff(heights).min() >= 14 and ("100 %" in {name for _, name in drawn["y"]})
    assert chart(states[:2], (400, 200), (10, 10, 30, 40)) is None
