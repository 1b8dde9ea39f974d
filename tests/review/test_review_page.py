"""The review page in a real headless Chromium, and what its server refuses."""

from __future__ import annotations

import csv
import json
import os
import re
import shutil
import signal
import subprocess
import sys
import urllib.error
import urllib.request
from collections.abc import Callable, Iterator
from pathlib import Path
from typing import Any
from urllib.parse import parse_qs, urlsplit

import psutil
import pytest

pytestmark = pytest.mark.xdist_group("report")


class Serving:
    """A review server in its own process."""

    def __init__(self, run: Path) -> None:
        command = [sys.executable, "-m", "basinwright", "review", str(run), "--no-browser"]
        self.process = subprocess.Popen(command, stdout=subprocess.PIPE, text=True, env=os.environ)
        assert self.process.stdout is not None
        for line in self.process.stdout:
            if found := re.search(r"http\S+", line):
                self.address = found.group(0)
                break
        parts = urlsplit(self.address)
        self.host, self.token = parts.netloc, parse_qs(parts.query)["token"][0]

    def ask(self, path: str, body: Any = None, *, token: str | None = None, **headers: str) -> tuple[int, Any]:
        headers = {"X-Review-Token": self.token if token is None else token, **headers}
        data = None if body is None else json.dumps(body).encode()
        request = urllib.request.Request(f"http://{self.host}{path}", data, headers)
        try:
            with urllib.request.urlopen(request, timeout=60) as response:
                return response.status, json.loads(response.read() or b"{}")
        except urllib.error.HTTPError as error:
            text = error.read().decode()
            return error.code, json.loads(text) if text.startswith("{") else text

    def stop(self, how: int = signal.SIGINT) -> None:
        self.process.send_signal(how)
        self.process.wait(timeout=20)


@pytest.fixture
def serve() -> Iterator[Callable[[Path], Serving]]:
    """Start servers; they end with the test."""
    started: list[Serving] = []

    def start(run: Path) -> Serving:
        started.append(Serving(run))
        return started[-1]

    yield start
    for server in started:
        if server.process.poll() is None:
            server.stop(signal.SIGKILL)


@pytest.fixture
def look(browser: Any) -> Iterator[Callable[[str], Any]]:
    """Open pages; whatever goes wrong in one fails the test."""
    trouble: list[str] = []
    opened = []

    def open_page(address: str) -> Any:
        page = browser.new_page(viewport={"width": 1400, "height": 950})
        page.on("pageerror", lambda error: trouble.append(f"error: {error}"))
        page.on("console", lambda message: trouble.append(message.text) if message.type == "error" else None)
        page.goto(address)
        page.locator("#heading").wait_for()
        opened.append(page)
        return page

    yield open_page
    for page in opened:
        page.close()
    # A refused action and a server that was killed show on the console as resources that failed to load.
    assert [text for text in trouble if "Failed to load resource" not in text] == []


def choose(page: Any, outlet_id: str) -> None:
    page.locator(f'[data-id="{outlet_id}"]').click()
    page.locator("#heading", has_text=outlet_id).wait_for()


def figure(page: Any, stem: str, row: str = "now") -> str:
    return str(page.locator(f'#figures [data-stem="{stem}"][data-row="{row}"]').inner_text())


def centre(page: Any, joint: str) -> tuple[float, float]:
    box = page.locator(f"[data-joint={joint}] .grip").bounding_box()
    return box["x"] + box["width"] / 2, box["y"] + box["height"] / 2


def rows(run: Path, name: str) -> list[dict[str, str]]:
    with (run / f"{name}.csv").open(encoding="utf-8", newline="") as stream:
        return list(csv.DictReader(stream))


def test_drag_see_save_reload_and_find_it_in_the_tables(run: Path, serve: Any, look: Any) -> None:
    server = serve(run)
    page = look(server.address)
    choose(page, "TC-003")
    first = figure(page, "tc_h")
    x, y = centre(page, "channel_start")
    page.mouse.move(x, y)
    page.mouse.down()
    page.mouse.move(x + 60, y, steps=4)
    page.locator('#figures .moved[data-stem="tc_h"]').wait_for()  # while the handle is still held
    page.mouse.move(x + 120, y, steps=4)
    page.fill("#reason", "the gully begins below the road")
    page.mouse.up()
    page.locator("#progress", has_text="1 step not saved").wait_for()
    now = figure(page, "tc_h")
    assert now != first
    assert figure(page, "tc_h", "before") == first
    page.locator("#save").click()
    page.locator("#progress", has_text="all saved").wait_for(timeout=60_000)
    server.stop()

    row = next(row for row in rows(run, "outlets") if row["outlet_id"] == "TC-003")
    assert f"{float(row['tc_h']):.3g} h" == now
    edits = rows(run, "edits")
    assert [(edit["outlet_id"], edit["field"]) for edit in edits] == [("TC-003", "channel_start_ft")]
    start = next(row for row in rows(run, "segments") if row["outlet_id"] == "TC-003" and row["regime"] == "channel")
    assert float(start["from_ft"]) == pytest.approx(float(edits[0]["to"]), rel=1e-5)
    assert start["edited"] == "true"

    page = look(serve(run).address)
    choose(page, "TC-003")
    assert (figure(page, "tc_h"), figure(page, "tc_h", "before")) == (now, first)
    assert "reviewed and edited" in page.locator('[data-id="TC-003"]').inner_text()


def test_profile_and_map_mark_the_same_place(run: Path, serve: Any, look: Any) -> None:
    page = look(serve(run).address)
    choose(page, "TC-003")
    box = page.locator("#profile svg").bounding_box()
    places = []
    for share in (0.3, 0.7):
        page.mouse.move(box["x"] + share * box["width"], box["y"] + 0.4 * box["height"])
        spot = page.locator("#map .here").bounding_box()
        places.append((spot["x"] + spot["width"] / 2, spot["y"] + spot["height"] / 2))
    assert places[0] != places[1]
    page.mouse.move(*places[0])
    line = page.locator("#profile .at").bounding_box()
    assert line["x"] == pytest.approx(box["x"] + 0.3 * box["width"], abs=6)


def test_undo_by_keyboard_and_a_reason_for_rejecting(run: Path, serve: Any, look: Any) -> None:
    page = look(serve(run).address)
    choose(page, "TC-008")
    first = figure(page, "tc_h")
    page.locator("[data-joint=channel_start]").focus()
    page.keyboard.press("ArrowRight")
    page.locator('#figures .moved[data-stem="tc_h"]').wait_for()
    page.keyboard.press("Control+z")
    page.locator('#figures .moved[data-stem="tc_h"]').wait_for(state="detached")
    assert figure(page, "tc_h") == first
    page.locator("[data-mark=rejected]").click()
    page.locator("#told", has_text="is missing").wait_for()
    page.fill("#reason", "on the wrong bank")
    page.locator("[data-mark=rejected]").click()
    page.locator(".decide .now", has_text="on the wrong bank").wait_for()
    assert "1 rejected" in page.locator("#progress").inner_text()


def test_killed_in_mid_edit_it_loses_only_the_drag_in_hand(run: Path, serve: Any, look: Any) -> None:
    server = serve(run)
    page = look(server.address)
    choose(page, "TC-003")
    page.locator("[data-joint=channel_start]").focus()
    page.keyboard.press("PageDown")
    page.locator("#progress", has_text="1 step not saved").wait_for()
    kept = figure(page, "tc_h")
    x, y = centre(page, "channel_start")
    page.mouse.move(x, y)
    page.mouse.down()
    page.mouse.move(x + 90, y, steps=3)
    server.stop(signal.SIGKILL)
    page.mouse.up()
    page.locator("#told", has_text="has stopped").wait_for()
    page = look(serve(run).address)
    choose(page, "TC-003")
    assert figure(page, "tc_h") == kept


def test_hostile_names_run_nothing_on_the_page(hostile: Path, serve: Any, look: Any) -> None:
    server = serve(hostile)
    page = look(server.address)
    for entry in page.locator("#queue button").all():
        entry.click()
        page.locator("#heading").wait_for()
    assert page.locator("#queue button").count() >= 5
    assert page.locator("#main script, #main img, #queue script").count() == 0
    status, answer = server.ask("/api/outlet?id=" + urllib.request.quote("../../etc/passwd"))
    assert status == 200
    assert answer["outlet"]["id"] == "../../etc/passwd"


def test_only_its_own_page_is_answered(run: Path, serve: Any) -> None:
    server = serve(run)
    assert server.ask("/api/queue")[0] == 200
    refused = [
        server.ask("/api/queue", token=""),
        server.ask("/api/queue", token="x" * 32),
        server.ask(f"/api/queue?token={server.token}", token=""),
        server.ask("/?token=guess", token=""),
        server.ask("/api/save", {"id": "TC-003"}, Origin="http://elsewhere.example"),
        server.ask("/api/queue", Origin="null"),
        server.ask("/api/queue", Host="rebound.example"),
    ]
    assert [status for status, _ in refused] == [403] * len(refused)
    for path in ("/../run.json", "/run.json", "/%2e%2e/run.json", "/api/../run.json", "/static/../../run.json"):
        assert server.ask(path)[0] in (403, 404, 405)
    assert server.ask("/api/outlet?id=../../run.json")[0] == 404
    assert server.ask("/api/do", {"id": "TC-003", "kind": "mark", "value": "accepted", "revision": 99})[0] == 422


def test_it_answers_on_this_machine_only(run: Path, serve: Any) -> None:
    server = serve(run)
    listening = psutil.Process(server.process.pid).net_connections(kind="inet")
    assert {entry.laddr.ip for entry in listening if entry.status == psutil.CONN_LISTEN} == {"127.0.0.1"}


def test_two_hundred_outlets_in_one_sitting(many: Path, tmp_path: Path, serve: Any) -> None:
    server = serve(Path(shutil.copytree(many, tmp_path / "run")))
    memory = psutil.Process(server.process.pid).memory_info
    ids = [entry["id"] for entry in server.ask("/api/queue")[1]["outlets"] if entry["severity"] != "failed"]
    after_some = 0
    for turn in range(200):
        outlet_id = ids[turn % len(ids)]
        status, answer = server.ask(f"/api/outlet?id={outlet_id}")
        assert status == 200
        action: dict[str, Any] = {"kind": "mark", "value": "accepted"}
        if turn % 10 == 0:
            value = f"{0.03 + 0.0001 * turn:.4f}"
            action = {"kind": "cell", "table": "segments", "row": 0, "column": "roughness", "value": value}
        assert server.ask("/api/do", {"id": outlet_id, "revision": answer["revision"], **action})[0] == 200
        if turn == 100:
            after_some = memory().rss
    assert memory().rss < after_some + 20e6
