"""The report page in headless Chromium: the slider moves, hover answers, the keyboard reaches everything, nothing complains."""

from __future__ import annotations

import re
import shutil

import numpy as np
import pytest
from chromium import Browser, chromium
from pages import CLAIMS, ODD, big_page, cannot_page, full_page, page_of, small_study
from scipy.interpolate import RegularGridInterpolator

from sampler.report.page import page_html
from sampler.tasks.wording import significant

PAGES = {"full": full_page, "big": big_page, "cannot": cannot_page,
         "not determined": lambda: page_of(small_study(), 2, claims=CLAIMS)}
SHOWN = ("[...document.querySelectorAll('#answer, #limits, #terms, #sites-table, #sites, #shade, #labels')]"
         ".map(x => x.outerHTML).join()")


@pytest.fixture(scope="module")
def browser(tmp_path_factory):
    started = Browser(chromium(), tmp_path_factory.mktemp("profile"))
    yield started
    started.close()


@pytest.fixture
def opened(browser, tmp_path):
    """Opens a page by name; afterwards nothing may have complained."""
    def open_page(name, **size):
        path = tmp_path / "report.html"
        path.write_text(page_html(PAGES[name]()), encoding="utf-8")
        browser.open(path, **size)
        return browser

    yield open_page
    assert browser.trouble == []


@pytest.mark.parametrize("name", PAGES)
@pytest.mark.parametrize(("width", "height"), [(1366, 768), (800, 600), (1920, 1080)])
def test_no_complaint_and_no_sideways_scroll(opened, name, width, height):
    page = opened(name, width=width, height=height)
    assert page.value("document.documentElement.scrollWidth") <= width
    assert page.value("document.querySelector('#map').getBoundingClientRect().width") > 0.3 * width


def test_the_answer_the_map_and_the_limits_are_seen_without_scrolling(opened):
    page = opened("full")
    for selector in ("#answer", "#map", "#slider", "#limits"):
        assert page.value(f"document.querySelector('{selector}').getBoundingClientRect().bottom") <= 768, selector


def slide(page, key, code, times=1):
    page.value("document.querySelector('#slider').focus()")
    for _ in range(times):
        page.key(key, code)


def test_the_slider_moves_sites_and_numbers(opened):
    page = opened("full")
    before = page.value(SHOWN)
    slide(page, "ArrowLeft", 37, 4)
    count = int(page.value("document.querySelectorAll('.site-mark').length"))
    choice = next(choice for choice in full_page().others if choice.count == count)
    assert count < 24 and page.text("#slider-says") == f"{count} sites"
    assert page.value("document.querySelector('#slider').getAttribute('aria-valuetext')") == f"{count} sites"
    assert page.value("document.querySelectorAll('#sites-table tbody tr').length") == count
    assert page.value("[...document.querySelectorAll('#sites-table th button')].map(x => x.textContent)") == \
        choice.audit.sites.id.tolist()
    assert float(page.text("[data-limit='4'] [data-cell='0']")) == pytest.approx(choice.audit.limits[4].predicted, rel=5e-3)
    assert float(page.text("[data-term='3'] [data-cell='0']")) == pytest.approx(choice.audit.terms[3].k_u, rel=5e-3)
    at = page.value("[...document.querySelectorAll('.site-mark')].map(x => [+x.dataset.x, -x.dataset.y])")
    np.testing.assert_allclose(at, choice.audit.sites.xy_mm, atol=1e-3)
    assert f"{count} sites" in page.text("#said") and "Tightest limit" in page.text("#said")
    assert page.value("document.querySelector('#elsewhere').hidden") is False
    assert page.value(SHOWN) != before
    page.click("#back")
    assert page.value("document.querySelector('#elsewhere').hidden") is True
    assert page.value(SHOWN) == before


def test_a_missed_limit_is_said_in_words_and_hatched(opened):
    page = opened("full")
    slide(page, "Home", 36)
    assert page.text("[data-limit='4'] [data-cell='2']") == "MISSED"
    assert "missed" in page.text("[data-answer='tightest']")
    page.click("input[value='ratio']")
    assert page.value("document.querySelector(\"#shade [fill='url(#missed)']\").getAttribute('d').length") > 0
    assert "hatched: missed" in page.text("#scale-name") and "100 %" in page.text("#limit-names")


def test_every_stop_of_the_slider_works(opened):
    page = opened("full")
    slide(page, "Home", 36)
    seen = [page.text("#slider-says")]
    for _ in range(len(full_page().others) - 1):
        page.key("ArrowRight", 39)
        seen.append(page.text("#slider-says"))
    assert len(set(seen)) == len(full_page().others) and "24 sites, the plan" in seen


def test_hovering_over_a_site_answers(opened):
    page = opened("full")
    chosen = full_page().chosen
    page.hover("[data-site='9']")
    said = page.text("#detail-site")
    x, y = chosen.audit.sites.xy_mm[9]
    assert said.startswith(f"Site 10 of 24: {chosen.audit.sites.id[9]}") and f"x {x:g}, y {y:g} mm" in said
    assert re.search(rf"If it is lost: still met, .* at {100 * chosen.losses.ratio[9]:.0f} %", said)
    page.mouse("mouseMoved", 5, 5)
    assert "Point at a site" in page.text("#detail-site")


def test_the_place_under_the_pointer_is_read_from_the_map(opened):
    page = opened("full")
    box = page.value("(() => { const m = document.querySelector('#map'), p = new DOMPoint(61, 40)"
                     ".matrixTransform(m.getScreenCTM()); return [p.x, p.y]; })()")
    page.mouse("mouseMoved", *box)
    said = page.text("#detail-place")
    position = full_page().plan.audit.position
    row, column = np.abs(position.y_mm + 40).argmin(), np.abs(position.x_mm - 61).argmin()
    dx, dy = (significant(value) for value in position.k_u_um[row, column])
    ratio = significant(100 * full_page().limit_ratio[row, column])
    assert f"k·u {dx} µm in x, {dy} µm in y, {ratio} % of the limit" in said
    page.mouse("mouseMoved", 5, 5)
    assert "Drag moves the map" in page.text("#detail-place")


def test_odd_names_stay_text(opened):
    page = opened("full")
    assert page.value("document.querySelectorAll('img, b b').length") == 0
    assert page.value("document.title") == "Invented organic core, pilot lot: measurement plan"
    site = full_page().plan.sites.id.tolist().index(ODD)
    page.click(f"[data-site='{site}']")
    assert ODD in page.text("#detail-site") and ODD in page.text("#sites-table")
    assert ODD in page.value(f"document.querySelector(\"[data-site='{site}']\").getAttribute('aria-label')")
    assert page.value("document.title") == "Invented organic core, pilot lot: measurement plan"


FOCUS = "(() => { const a = document.activeElement; return a.id || a.dataset.site || a.value || a.className || a.tagName; })()"


def test_the_keyboard_reaches_everything_in_order(opened):
    page = opened("full")
    seen = []
    for _ in range(12):
        page.key("Tab", 9)
        seen.append(page.value(FOCUS))
    assert seen[:11] == ["skip", "worst", "route", "closer", "farther", "fit", "map", "0", "slider", seen[9], seen[10]]
    assert page.value("document.activeElement.closest('#sites-table') !== null")


def test_arrows_go_from_site_to_site(opened):
    page = opened("full")
    page.value("document.querySelector('.site-mark').focus()")
    for key, code, site in (("ArrowRight", 39, 1), ("End", 35, 23), ("ArrowDown", 40, 0), ("ArrowLeft", 37, 23), ("Home", 36, 0)):
        page.key(key, code)
        assert page.value(FOCUS) == str(site)
        assert page.text("#detail-site").startswith(f"Site {site + 1} of 24")
        assert page.value("[...document.querySelectorAll('[aria-pressed=true]')].map(x => x.dataset.site)") == [str(site)]
        assert page.value("[...document.querySelectorAll('#sites-table tr.on')].map(x => x.rowIndex)") == [site + 1]
        assert page.value("document.querySelectorAll('.site-mark[tabindex=\"0\"]').length") == 1
    page.key("Escape", 27)
    assert page.value(FOCUS) == "map" and "Point at a site" in page.text("#detail-site")


def test_the_table_leads_to_the_map(opened):
    page = opened("full")
    page.value("document.querySelectorAll('#sites-table th button')[6].click()")
    assert page.value("document.querySelector('.site-mark.on').dataset.site") == "6"
    assert page.text("#said").startswith("Site 7 of 24")


VIEW = "document.querySelector('#map').getAttribute('viewBox').split(' ').map(Number)"


def test_zoom_and_pan(opened):
    page = opened("full")
    home = page.value(VIEW)
    page.value("document.querySelector('#map').focus()")
    page.key("+")
    closer = page.value(VIEW)
    assert closer[2] == pytest.approx(home[2] / 1.5, abs=0.01)
    page.key("ArrowRight", 39)
    page.key("ArrowUp", 38)
    moved = page.value(VIEW)
    assert moved[0] > closer[0] and moved[1] < closer[1]
    x, y = page.centre("#map")
    place = (f"(() => {{ const p = new DOMPoint({x}, {y})"
             ".matrixTransform(document.querySelector('#map').getScreenCTM().inverse()); return [p.x, p.y]; })()")
    under = page.value(place)
    page.mouse("mouseWheel", x, y, deltaX=0, deltaY=-100, modifiers=2)
    assert page.value(VIEW)[2] < moved[2]
    np.testing.assert_allclose(page.value(place), under, atol=0.3)  # less than half a pixel
    before = page.value(VIEW)
    page.mouse("mousePressed", x, y, button="left", clickCount=1)
    page.mouse("mouseMoved", x + 40, y + 20, button="left")
    page.mouse("mouseReleased", x + 40, y + 20, button="left", clickCount=1)
    assert page.value(VIEW)[0] < before[0] and page.value(VIEW)[1] < before[1]
    page.click("#closer")
    page.click("#farther")
    page.key("0")
    page.click("#fit")
    assert page.value(VIEW) == pytest.approx(home, abs=1e-3)
    page.mouse("mouseWheel", x, y, deltaX=0, deltaY=-100)
    assert page.value(VIEW) == pytest.approx(home, abs=1e-3), "the wheel alone scrolls the page"


def test_zoomed_in_sites_keep_their_size(opened):
    page = opened("big")
    size = "document.querySelector(\"[data-site='3'] .hit\").getBoundingClientRect().width"
    before = page.value(size)
    page.value("document.querySelector('#closer').click()")
    assert page.value(size) == pytest.approx(before, rel=0.01)


def test_route_on_and_off(opened):
    page = opened("full")
    legs = "document.querySelector('#legs').getAttribute('d')"
    assert not page.value(legs)
    page.click("#route")
    assert page.value(legs).count("L") == 23
    page.click("#route")
    assert not page.value(legs)


def test_the_map_switches(opened):
    page = opened("full")
    shown = {}
    for value, name in (("dx", "in x"), ("dy", "in y"), ("ratio", "share of its limit"), ("worst", "worse of dx and dy")):
        page.click(f"input[value='{value}']")
        assert name in page.text("#scale-name")
        shown[value] = page.value("document.querySelector('#shade').innerHTML")
        assert page.value("document.querySelectorAll('#scale i').length") == \
            page.value("document.querySelectorAll('#scale span').length") + 1
    # y is the worse axis of this plan everywhere.
    assert shown["dx"] != shown["dy"] == shown["worst"] != shown["ratio"]


def test_a_limit_within_the_map_is_a_heavy_line_with_its_name(opened):
    page = opened("cannot")
    assert page.text("#limit-names") == "limit 0.1 µm" and "limit 0.1 µm: heavy line" in page.text("#scale-name")
    line = page.value("document.querySelector('#shade .limit').getAttribute('d')")
    at = np.array([[float(part) for part in point.split()] for point in re.findall(r"[ML]([^ML]*)", line)]) * [1, -1]
    position = cannot_page().plan.audit.position
    known = RegularGridInterpolator((position.y_mm, position.x_mm), position.k_u_um.max(axis=2))
    assert len(at) > 50
    np.testing.assert_allclose(known(at[:, ::-1]), 0.1, atol=2e-4)


def test_the_shading_reaches_the_outline(opened):
    """The raster knows nothing within the edge exclusion; there it is carried on, for the outline to cut."""
    page = opened("full")
    box = page.value("(() => { const b = document.querySelector('#shade path').getBBox();"
                     " return [b.x, b.y, b.width, b.height]; })()")
    np.testing.assert_allclose(box, [-255, -257.5, 510, 515], atol=0.01)


def test_everything_has_a_name_for_a_screen_reader(opened):
    page = opened("full")
    page.call("Accessibility.enable")
    nodes = page.call("Accessibility.getFullAXTree")["nodes"]
    page.call("Accessibility.disable")
    roles = {}
    for node in nodes:
        if not node.get("ignored"):
            roles.setdefault(node.get("role", {}).get("value"), []).append(node.get("name", {}).get("value", ""))
    for role, least in (("button", 24), ("slider", 1), ("radio", 4), ("checkbox", 1), ("table", 3), ("columnheader", 10)):
        assert len(roles[role]) >= least, role
    for role in ("button", "slider", "radio", "checkbox", "image"):
        assert all(roles[role]), role
    assert "status" in roles


def test_print(opened, tmp_path):
    page = opened("full")
    page.pdf(tmp_path / "page.pdf")
    pdf = (tmp_path / "page.pdf").read_bytes()
    assert pdf.startswith(b"%PDF") and 2 <= len(re.findall(rb"/Type\s*/Page\b", pdf)) <= 5
    page.call("Emulation.setEmulatedMedia", media="print")
    hidden = page.value("['.tools', '#slider', '#detail', '#back'].map(x => getComputedStyle(document.querySelector(x)).display)")
    seen = page.value("['#map', '#limits', '#terms', '#sites-table', '#scale', 'pre', 'footer'].map(x => "
                      "document.querySelector(x).getBoundingClientRect().height > 0)")
    page.call("Emulation.setEmulatedMedia", media="")
    assert set(hidden) == {"none"} and all(seen)


def test_screenshot(opened, tmp_path):
    """The map is shaded in more than a few colours: a blank picture would pass every other test."""
    from matplotlib.image import imread

    page = opened("full")
    page.screenshot(tmp_path / "page.png")
    picture = imread(tmp_path / "page.png")
    assert picture.shape[:2] == (768, 1366)
    x, y = (int(part) for part in page.centre("#map"))
    area = np.rint(255 * picture[y - 200:y + 200, x - 200:x + 200, :3]).astype(int)
    _, counts = np.unique(area.reshape(-1, 3), axis=0, return_counts=True)
    assert (counts > 1000).sum() >= 4


@pytest.mark.parametrize("ci", ["true", ""])
def test_a_missing_browser_fails_where_it_must_be_there(monkeypatch, ci):
    monkeypatch.setattr(shutil, "which", lambda name: None)
    monkeypatch.setenv("CI", ci)
    with pytest.raises(pytest.fail.Exception if ci else pytest.skip.Exception, match="no chromium here"):
        chromium()
