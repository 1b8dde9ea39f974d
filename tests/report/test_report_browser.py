"""The report in a real headless Chromium: what a reader can do with it, and what it must not do."""

from __future__ import annotations

import copy
import json
import re
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import pytest
from report_projects import HOSTILE

from basinwright.report import pages
from basinwright.report.reading import read_run

pytestmark = pytest.mark.xdist_group("report")

DESK, TABLET, PHONE = (1280, 900), (768, 1000), (390, 800)


class Reader:
    """A page in the browser, with everything that went wrong or left the machine."""

    def __init__(self, browser: Any, size: tuple[int, int]) -> None:
        self.page = browser.new_page(viewport={"width": size[0], "height": size[1]})
        self.trouble: list[str] = []
        self.requests: list[str] = []
        self.page.on("console", lambda message: self.trouble.append(f"{message.type}: {message.text}"))
        self.page.on("pageerror", lambda error: self.trouble.append(f"error: {error}"))
        self.page.on("dialog", lambda dialog: (self.trouble.append("dialog"), dialog.dismiss()))
        self.page.on("request", lambda request: self.requests.append(request.url))

    def open(self, path: Path) -> Any:
        self.page.goto(path.as_uri())
        return self.page

    def close(self) -> None:
        self.page.close()
        assert self.trouble == []
        assert all(url.startswith(("file:", "data:image/")) for url in self.requests)


@pytest.fixture
def reader(browser: Any, request: pytest.FixtureRequest) -> Iterator[Reader]:
    """Open pages at the size of the test's parameter, a desk's without one; whatever goes wrong fails the test."""
    reader = Reader(browser, getattr(request, "param", DESK))
    yield reader
    reader.close()


def ids(page: Any) -> list[str]:
    return page.locator("#table tbody tr:visible th").all_inner_texts()


def test_the_table_sorts_and_filters(sample: Path, reader: Reader) -> None:
    page = reader.open(sample / "report" / "index.html")
    assert ids(page) == [f"TC-00{i}" for i in range(1, 9)]
    area = page.locator("#table thead button", has_text="area")
    area.click()
    assert ids(page)[0] == "TC-007"
    area.press("Enter")
    assert ids(page)[0] == "TC-004"
    assert area.locator("xpath=..").get_attribute("aria-sort") == "descending"
    page.locator("#table thead button", has_text="exceeded at").click()
    assert set(ids(page)[:2]) == {"TC-003", "TC-007"}
    assert set(ids(page)[-2:]) == {"TC-006", "TC-008"}  # no verdict, no capacity

    page.get_by_label("filter by area").fill("> 2.5")
    assert set(ids(page)) == {"TC-001", "TC-002", "TC-004", "TC-005"}
    assert page.inner_text("#shown") == "4 of 8 shown"
    page.get_by_label("filter by area").fill("1 - 3")
    assert set(ids(page)) == {"TC-001", "TC-003", "TC-005"}
    page.get_by_label("filter by name").fill("harrow")
    assert ids(page) == ["TC-003"]
    assert page.locator("a.outlet.off").count() == 7
    page.click("#clear")
    page.select_option("#flag", "LAKE_STORAGE")
    assert ids(page) == ["TC-005"]
    page.click("#clear")
    page.locator("button.pick", has_text="SNAP_FAR").click()
    flagged = [row for row in read_csv(sample, "flags") if row["flag"] == "SNAP_FAR"]
    assert set(ids(page)) == {row["outlet_id"] for row in flagged}
    page.click("#clear")
    page.fill("#find", "no such crossing")
    assert ids(page) == []


def read_csv(run: Path, name: str) -> list[dict[str, str]]:
    from projects import read_table

    return read_table(run, name)


def view_box(page: Any) -> list[float]:
    return [float(text) for text in page.locator(".mapbox.index svg.map").get_attribute("viewBox").split()]


def test_the_map_zooms_moves_lights_up_and_leads_on(sample: Path, reader: Reader) -> None:
    page = reader.open(sample / "report" / "index.html")
    whole, bar = view_box(page), page.inner_text(".mapbox.index .scalebar")
    page.locator(".mapbox.index [data-zoom=in]").click(click_count=3)
    near = view_box(page)
    assert near[2] < whole[2] / 3
    assert near[2] / near[3] == pytest.approx(whole[2] / whole[3], rel=1e-6)
    assert page.inner_text(".mapbox.index .scalebar") != bar
    page.locator(".mapbox.index svg.map").focus()
    page.keyboard.press("ArrowRight")
    assert view_box(page)[0] > near[0]
    page.keyboard.press("0")
    assert view_box(page) == whole
    box = page.locator(".mapbox.index svg.map").bounding_box()
    page.keyboard.press("+")
    before = view_box(page)
    page.mouse.move(box["x"] + 200, box["y"] + 300)
    page.mouse.down()
    page.mouse.move(box["x"] + 260, box["y"] + 300, steps=4)
    page.mouse.up()
    assert view_box(page)[0] < before[0]
    page.keyboard.press("0")

    # Pointing at 002 lights its whole basin: its own piece and that of 001, upstream of it.
    page.locator('a.outlet[data-o="1"] use').hover()
    assert page.locator(".basin.lit").evaluate_all("all => all.map(b => b.dataset.o)") == ["0", "1"]
    assert page.locator('#table tr[data-o="1"].lit').count() == 1
    page.locator('a.outlet[data-o="4"] use').click()
    assert page.url.endswith("#outlet-5")
    heading = page.locator("#outlet-5-h")
    deadline = time.monotonic() + 10  # it scrolls there smoothly
    while heading.bounding_box()["y"] > 300 and time.monotonic() < deadline:
        page.wait_for_timeout(50)
    assert heading.bounding_box()["y"] < 300
    assert "Lakeside Road" in heading.inner_text()


def test_the_scale_bar_is_as_long_as_it_says(sample: Path, reader: Reader) -> None:
    """Two outlets of the sample lie a known distance apart: the bar measures it."""
    page = reader.open(sample / "report" / "index.html")
    rows = {row["outlet_id"]: row for row in read_csv(sample, "outlets")}
    one, two = ((float(rows[key]["x"]), float(rows[key]["y"])) for key in ("TC-001", "TC-004"))
    apart_m = ((one[0] - two[0]) ** 2 + (one[1] - two[1]) ** 2) ** 0.5
    centres = [
        page.locator(f'a.outlet[data-o="{i}"] use').evaluate(
            "e => { const b = e.getBoundingClientRect(); return [b.x + b.width / 2, b.y + b.height / 2]; }"
        )
        for i in (0, 3)
    ]
    apart_px = ((centres[0][0] - centres[1][0]) ** 2 + (centres[0][1] - centres[1][1]) ** 2) ** 0.5
    number, unit = page.inner_text(".mapbox.index .scalebar").split()
    assert unit == "mi"
    bar_px = page.locator(".mapbox.index .scalebar").bounding_box()["width"]
    assert bar_px / (float(number) * 1609.344) == pytest.approx(apart_px / apart_m, rel=0.02)


def test_pages_of_many_outlets_lead_to_one_another(many: Path, reader: Reader) -> None:
    page = reader.open(many / "report" / "index.html")
    page.locator("#table tbody a", has_text="P05").click()
    assert page.title().startswith("P05")
    page.locator("a[rel=next]").click()
    assert page.title().startswith("P06")
    page.locator("nav.crumbs a").first.click()
    assert page.url.endswith("report/index.html")


@pytest.mark.parametrize("reader", [DESK, TABLET, PHONE], indirect=True, ids=["desk", "tablet", "phone"])
@pytest.mark.parametrize("which", ["sample", "hostile"])
def test_no_page_is_wider_than_its_window(which: str, reader: Reader, request: pytest.FixtureRequest) -> None:
    page = reader.open(request.getfixturevalue(which) / "report" / "index.html")
    wide, window = page.evaluate("[document.documentElement.scrollWidth, document.documentElement.clientWidth]")
    assert wide <= window


def test_hostile_names_run_nothing(hostile: Path, reader: Reader) -> None:
    page = reader.open(hostile / "report" / "index.html")
    for i in range(len(HOSTILE)):
        page.locator(f'a.outlet[data-o="{i}"] use').first.dispatch_event("pointerover")
    page.fill("#find", "<script>")
    assert len(ids(page)) >= 1
    page.locator("#table tbody a").first.click()
    assert page.evaluate("window.pwned") is None
    assert page.locator("script").count() == 1
    assert page.locator("img, iframe, object, embed").count() == 0


def test_nothing_but_the_page_s_own_script_may_run(sample: Path, tmp_path: Path, browser: Any) -> None:
    """The page's policy is the second lock: were text ever to become markup, it would still do nothing."""
    text = (sample / "report" / "index.html").read_text(encoding="utf-8")
    evil = "<img src='http://192.0.2.1/x.png' onerror='window.pwned=1'><script>window.pwned=1</script>"
    (tmp_path / "index.html").write_text(text.replace("<main", evil + "<main", 1), encoding="utf-8")
    page = browser.new_page()
    stopped: list[str] = []
    page.on("requestfailed", lambda request: stopped.append(f"{request.failure} {request.url}"))
    page.goto((tmp_path / "index.html").as_uri())
    assert page.evaluate("window.pwned") is None
    assert stopped == ["csp http://192.0.2.1/x.png"]  # by the policy, before it left
    page.click("#clear")  # our own script runs
    page.close()


@pytest.mark.parametrize("size", [DESK, PHONE], ids=["desk", "phone"])
@pytest.mark.parametrize("which", ["index", "page"])
def test_no_barrier_for_readers_with_disabilities(which: str, size: tuple[int, int], many: Path, browser: Any) -> None:
    """No finding of axe-core, of any weight, by the rules of WCAG 2.1 A and AA and its best practices."""
    from axe_playwright_python.sync_playwright import Axe

    files = {"index": many / "report" / "index.html", "page": sorted((many / "report" / "outlets").iterdir())[4]}
    # The page's policy keeps out axe as well: it is injected by the browser's own tool, past the policy.
    context = browser.new_context(bypass_csp=True, viewport={"width": size[0], "height": size[1]})
    page = context.new_page()
    page.goto(files[which].as_uri())
    found = Axe().run(page)
    context.close()
    told = [
        f"{finding['impact']} {finding['id']}: {finding['nodes'][0]['html'][:160]}"
        for finding in found.response["violations"]
    ]
    assert told == []


@pytest.mark.parametrize(("paper", "width_pt", "height_pt"), [("A4", 595, 842), ("Letter", 612, 792)])
def test_it_prints_on_paper(paper: str, width_pt: int, height_pt: int, sample: Path, reader: Reader) -> None:
    page = reader.open(sample / "report" / "index.html")
    printed = page.pdf(format=paper, print_background=True)
    sizes = re.findall(rb"/MediaBox\s*\[0 0 ([\d.]+) ([\d.]+)\]", printed)
    assert sizes
    assert all(abs(float(w) - width_pt) < 2 and abs(float(h) - height_pt) < 2 for w, h in sizes)
    assert 20 < len(sizes) < 80  # eight outlets, some seven pages each
    # Nothing is cut off at the right: laid out at the width of the paper between its margins.
    page.set_viewport_size({"width": round((width_pt / 72 * 25.4 - 26) / 25.4 * 96), "height": 1000})
    page.emulate_media(media="print")
    cut = page.evaluate(
        """[...document.querySelectorAll('table, figure, svg, p, li, dl')]
           .filter(e => e.getBoundingClientRect().right > document.documentElement.clientWidth + 1)
           .map(e => e.tagName + ' ' + e.className.toString())"""
    )
    assert cut == []
    assert page.locator(".zoom:visible, .controls:visible").count() == 0


def test_a_thousand_outlets_open_fast(sample: Path, tmp_path: Path, reader: Reader) -> None:
    """An index of the sample's outlets over and over: heavier than a real one, whose basins are smaller pieces."""
    run = read_run(sample, json.loads((sample / "run.json").read_text(encoding="utf-8")))
    outlets = []
    for i in range(1000):
        outlet = copy.copy(run.outlets[i % 8])
        outlet.number, outlet.row = i + 1, {**outlet.row, "outlet_id": f"C{i:04d}", "downstream_outlet_id": ""}
        outlets.append(outlet)
    run.outlets = outlets
    path = tmp_path / "index.html"
    path.write_text(pages._index(run, []), encoding="utf-8")
    assert path.stat().st_size < 3_000_000
    started = time.monotonic()
    page = reader.open(path)
    assert page.inner_text("#shown") == "1000 of 1000 shown"
    assert time.monotonic() - started < 20.0  # a bound against blow-ups, not a measure: other work shares the machine
    page.get_by_label("filter by area").fill("> 5")
    assert page.inner_text("#shown") == "250 of 1000 shown"
