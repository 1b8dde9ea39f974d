"""Runs to report on, and a browser to look at the reports with."""

from __future__ import annotations

import os
import shutil
from pathlib import Path

import pytest
from report_projects import HOSTILE, valley_project

from basinwright import pipeline


@pytest.fixture(scope="session")
def sample(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Run the sample without the audit and return its folder. Nobody may write into it."""
    file = pipeline.copy_sample(tmp_path_factory.mktemp("report-sample"))
    text = file.read_text(encoding="utf-8")
    file.write_text(text.replace('second_opinion = "all"', 'second_opinion = "none"'), encoding="utf-8")
    return pipeline.run(file).folder


@pytest.fixture(scope="session")
def hostile(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Run a valley whose project, outlets and capacities have hostile names; return its folder."""
    cells = {outlet_id: (20 + 6 * i, 20) for i, outlet_id in enumerate(HOSTILE)}
    evil = "<script>window.pwned=1</script>\u202e " + "A" * 300
    file = valley_project(tmp_path_factory.mktemp("hostile"), cells, HOSTILE, project={"name": evil})
    return pipeline.run(file).folder


@pytest.fixture(scope="session")
def many(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Run a valley of 27 outlets, one of which fails; return its folder."""
    cells = {f"P{i:02d}": (8 + 2 * i, 20) for i in range(26)} | {"outside": (400, 20)}
    return pipeline.run(valley_project(tmp_path_factory.mktemp("many"), cells, {"P00": "first"})).folder


@pytest.fixture(scope="session")
def browser():
    """Start a real headless Chromium; without one, skip, or fail where BASINWRIGHT_REQUIRE_BROWSER is set."""

    def without(why: str) -> None:
        if os.environ.get("BASINWRIGHT_REQUIRE_BROWSER"):
            pytest.fail(f"browser test not run: {why}")
        pytest.skip(f"browser test skipped: {why}")

    path = next(
        (found for name in ("chromium", "chromium-browser", "google-chrome") if (found := shutil.which(name))), None
    )
    if path is None:
        without("no chromium on this machine (Debian: apt-get install chromium)")
    try:
        from playwright.sync_api import sync_playwright
    except ImportError as error:
        without(f"{error}")
    with sync_playwright() as driver:
        chromium = driver.chromium.launch(executable_path=path, args=["--no-sandbox"])
        yield chromium
        chromium.close()
