"""How sure, and which crossings fail first: the report says what the tables say."""

import csv
import re

import pytest

from basinwright.numbers import three_figures

pytestmark = pytest.mark.xdist_group("report")


def table(folder, name):
    with (folder / f"{name}.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


@pytest.fixture(scope="module")
def page(sample):
    return (sample / "report" / "index.html").read_text(encoding="utf-8")


def section(page, key):
    """Return the text of a section, tags as line ends."""
    part = page[page.index(f'id="{key}"') :]
    return re.sub(r"<[^>]+>", "\n", part[: part.index("</section>")])


def test_the_list_is_in_the_order_of_the_table(sample, page):
    rows = [row for row in table(sample, "capacity") if row["scenario"] == "base"]
    told = section(page, "failing")
    places = [told.index(row["outlet_id"]) for row in rows]
    assert len(rows) == 7
    assert places == sorted(places)
    for row in rows:
        assert row["name"] in told
        assert row["capacity_basis"] in told
        assert row["band"] in told
    assert "unknown" in told


def test_an_outlets_band_and_what_drives_it_in_a_sentence(sample, page):
    for outlet in table(sample, "outlets"):
        bands = [row for row in table(sample, "uncertainty") if row["outlet_id"] == outlet["outlet_id"]]
        swings = [
            row
            for row in table(sample, "swings")
            if (row["outlet_id"], row["return_period_yr"], row["sampled"]) == (outlet["outlet_id"], "100.0", "true")
        ]
        first = min(swings, key=lambda row: int(row["rank"]))["input"]
        low, high = (three_figures(float(bands[-1][name])) for name in ("p05", "p95"))
        words = {"curve_number": "curve number", "roughness": "roughness", "peak_rate_factor": "peak rate factor",
                 "depths": "rain depth", "stream_area_factor": "channel start"}  # fmt: skip
        assert f"100-year peak: {low} to {high} cfs; the {words[first]} moves it most" in page


def test_a_run_without_ranges_says_nothing_of_them(many):
    index = (many / "report" / "index.html").read_text(encoding="utf-8")
    assert "Which crossings fail first" in index  # there are capacities
    assert "of the sample" not in index
    one = next((many / "report" / "outlets").glob("*.html")).read_text(encoding="utf-8")
    assert "How sure" not in one
