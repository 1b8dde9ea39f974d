"""What the pages say, read without a browser."""

from __future__ import annotations

import csv
import filecmp
import json
import re
import shutil
from html.parser import HTMLParser
from pathlib import Path
from xml.etree import ElementTree

import pyogrio
import pytest
from report_projects import HOSTILE, valley_project
from typer.testing import CliRunner

from basinwright import pipeline
from basinwright.cli import app
from basinwright.errors import InputRejected
from basinwright.flags import FLAGS
from basinwright.numbers import three_figures
from basinwright.progress import heard_by
from basinwright.report import write_report

pytestmark = pytest.mark.xdist_group("report")

VOID = {"meta", "input", "br", "img", "link", "hr"}
WITH_ADDRESS = {"src", "href", "action", "formaction", "data", "poster", "srcset", "xlink:href"}


class Page(HTMLParser):
    """A page as a reader's program takes it apart: checks nesting, keeps what could act."""

    def __init__(self, text: str) -> None:
        super().__init__()
        self.open: list[str] = []
        self.scripts = 0
        self.handlers: list[str] = []
        self.addresses: list[str] = []
        self.ids: list[str] = []
        self.words: list[str] = []
        self.feed(text)
        self.close()
        assert self.open == []

    def handle_starttag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self._look(tag, attrs)
        if tag not in VOID:
            self.open.append(tag)

    def handle_startendtag(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self._look(tag, attrs)

    def _look(self, tag: str, attrs: list[tuple[str, str | None]]) -> None:
        self.scripts += tag == "script"
        self.handlers += [name for name, _ in attrs if name.startswith("on")]
        self.addresses += [value or "" for name, value in attrs if name in WITH_ADDRESS]
        self.ids += [value or "" for name, value in attrs if name == "id"]

    def handle_endtag(self, tag: str) -> None:
        assert self.open.pop() == tag

    def handle_data(self, data: str) -> None:
        if self.open and self.open[-1] not in ("script", "style"):
            self.words.append(data)


def read(path: Path) -> str:
    return path.read_text(encoding="utf-8")


def rows_of(run: Path, name: str) -> list[dict[str, str]]:
    with (run / f"{name}.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


def pages(run: Path) -> list[Path]:
    return sorted((run / "report").rglob("*.html"))


@pytest.mark.parametrize("which", ["sample", "hostile", "many"])
def test_pages_are_whole_and_reach_for_nothing(which: str, request: pytest.FixtureRequest) -> None:
    for path in pages(request.getfixturevalue(which)):
        page = Page(read(path))
        assert page.scripts == 1
        assert page.handlers == []
        assert len(page.ids) == len(set(page.ids))
        for address in page.addresses:
            if address.startswith("#"):
                assert address[1:] in page.ids
            elif not address.startswith("data:image/jpeg;base64,"):
                assert (path.parent / address).is_file(), address
        assert "url(" not in read(path)
        assert "@import" not in read(path)


def test_pictures_are_well_formed_and_told_in_words(sample: Path) -> None:
    drawn = re.findall(r"<svg .*?</svg>", read(sample / "report" / "index.html"), re.DOTALL)
    charts = [ElementTree.fromstring(text) for text in drawn if "aria-labelledby" in text]
    assert len(charts) > 50
    for chart in charts:
        title, description = chart[0], chart[1]
        assert title.text
        assert len(description.text or "") > 40
        assert "nan" not in (description.text or "")
    assert not re.search(r'[ "](nan|inf|None)[ ",]', "".join(drawn))


def test_the_index_lists_what_the_tables_hold(sample: Path) -> None:
    text = read(sample / "report" / "index.html")
    body = text[text.index('<table id="table"') :]
    body = body[body.index("<tbody>") : body.index("</tbody>")]
    shown = [re.findall(r"<t[hd][^>]*>(.*?)</t[hd]>", row, re.DOTALL) for row in body.split("<tr ")[1:]]
    shown = [[re.sub(r"<[^>]+>", "", cell).strip() for cell in row] for row in shown]
    outlets = rows_of(sample, "outlets")
    assert [row[0] for row in shown] == [row["outlet_id"] for row in outlets]
    for cells, row in zip(shown, outlets, strict=True):
        assert cells[1] == row["name"]
        numbers = [row[name] for name in ("area_mi2", "path_length_ft", "curve_number", "tc_h")]
        numbers += [row[f"peak_{period}yr_cfs"] for period in (2, 10, 25, 100)] + [row["capacity_cfs"]]
        wanted = [three_figures(float(text)) if text else "–" for text in numbers]
        if "EDGE_TOUCH" in row["flags"]:
            wanted[0] = f"≥ {wanted[0]}"
        assert cells[3:12] == wanted
        verdict = row["exceeded_at_yr"] or ("none" if row["capacity_cfs"] else "–")
        assert cells[12] == verdict
        assert set(cells[-1].split()) == set(row["flags"].split())


def test_the_crossings_to_look_at_first_are_the_doubtful_ones(sample: Path) -> None:
    """The sample's county is made so: 006 leaves the terrain, 003 and 007 overtop first, 008 has no capacity."""
    text = read(sample / "report" / "index.html")
    first = text[text.index('<ol class="worries">') : text.index("</ol>")]
    order = re.findall(r'<a href="#outlet-(\d+)">', first)
    assert order[0] == "6"
    assert set(order[1:3]) == {"3", "7"}
    assert "No verdict on the capacity of 120 cfs" in first
    assert re.search(r"The 10-year peak of [\d,.]+ cfs exceeds the capacity of 300 cfs \(top of embankment\)", first)
    assert "Over capacity" not in first[first.index("#outlet-8") : first.index("#outlet-2")]


def test_every_flag_of_an_outlet_comes_with_what_to_do(sample: Path) -> None:
    articles = read(sample / "report" / "index.html").split('<article class="outlet"')[1:]
    flags = rows_of(sample, "flags")
    for article, row in zip(articles, rows_of(sample, "outlets"), strict=True):
        mine = [flag["flag"] for flag in flags if flag["outlet_id"] == row["outlet_id"]]
        words = " ".join(Page("<article" + article.partition("</main>")[0]).words)
        for key in mine:
            assert key in words
            assert FLAGS[key].remedy in words


def test_segments_and_sources_are_told_in_full(sample: Path) -> None:
    article = read(sample / "report" / "index.html").split('<article class="outlet"')[3]  # TC-003
    words = " ".join(" ".join(Page("<article" + article).words).split())
    segments = [row for row in rows_of(sample, "segments") if row["outlet_id"] == "TC-003"]
    table = article[article.index('class="data segments"') :]
    assert table[: table.index("</table>")].count("<tr") == len(segments) + 1
    for basis in {row["basis"] for row in segments}:
        assert basis in words
    for row in rows_of(sample, "timing"):
        if row["outlet_id"] == "TC-003" and row["tc_h"]:
            assert " ".join(row["source"].split()) in words
    assert "Type II" in words
    assert "table 16-1" in words


def test_the_time_area_curve_and_the_other_peaks_are_shown_where_the_run_has_them(sample: Path, tmp_path: Path) -> None:
    curve = [row for row in rows_of(sample, "time_area") if row["outlet_id"] == "TC-003"]
    article = read(sample / "report" / "index.html").split('<article class="outlet"')[3]
    longest = three_figures(float(curve[-1]["travel_time_h"]))
    assert f"all of it within {longest} h" in article
    peaks = [row for row in rows_of(sample, "cross_checks") if row["outlet_id"] == "TC-003" and row["peak_cfs"]]
    table = article[article.index("Peaks by other methods") :]
    for row in peaks:
        assert f"{three_figures(float(row['peak_cfs']))} cfs</td>" in table
        assert row["source"] in article

    run = tmp_path / "run"
    shutil.copytree(sample, run)
    (run / "time_area.csv").unlink()
    (run / "cross_checks.csv").unlink()
    without = read(pipeline.report(run))
    assert "Time–area curve" not in without
    assert "Peaks by other methods" not in without


def test_hostile_text_stays_text_in_pages_tables_and_layer(hostile: Path) -> None:
    rows = rows_of(hostile, "outlets")
    assert [row["outlet_id"] for row in rows] == list(HOSTILE)
    assert [row["name"] for row in rows] == list(HOSTILE.values())
    layer = pyogrio.read_dataframe(hostile / "basins.gpkg", layer="outlets")
    assert set(zip(layer["outlet_id"], layer["name"], strict=True)) <= set(HOSTILE.items())
    assert len(layer) == len(HOSTILE)

    page = Page(read(hostile / "report" / "index.html"))
    words = " ".join(page.words)
    assert "<script>window.pwned=1</script>" in words
    assert "=HYPERLINK(A1)" in words
    assert "{{7*7}}{% raw %}" in words
    assert not re.search("[\u202a-\u202e\u2066-\u2069]", words)  # what turns text round is shown instead
    assert not any(address.startswith("javascript:") for address in page.addresses)


def test_file_names_are_safe(tmp_path: Path, hostile: Path) -> None:
    run = tmp_path / "run"
    shutil.copytree(hostile, run)
    paths = [pipeline.report(run, outlet_id) for outlet_id in HOSTILE]
    assert len(set(paths)) == len(HOSTILE)
    assert {path.parent for path in paths} == {run / "report" / "outlets"}
    assert all(re.fullmatch(r"\d{4}(-[a-z0-9-]+)?\.html", path.name) for path in paths)


def test_many_outlets_have_a_page_each(many: Path) -> None:
    index = read(many / "report" / "index.html")
    assert "<article" not in index
    files = sorted(path.name for path in (many / "report" / "outlets").iterdir())
    assert len(files) == 27
    assert all(f'href="outlets/{name}"' in index for name in files)
    failed = read(many / "report" / "outlets" / files[-1])
    assert "This outlet was not computed." in failed
    assert "OUTLET_FAILED" in failed
    assert "<svg" in failed  # its mark
    assert 'class="map"' not in failed
    beside = read(many / "report" / "outlets" / files[3])
    assert f'href="{files[2]}" rel="prev"' in beside
    assert f'href="{files[4]}" rel="next"' in beside


def same(one: Path, other: Path) -> bool:
    files = [path.relative_to(one) for path in one.rglob("*") if path.is_file()]
    assert files
    assert sorted(files) == sorted(path.relative_to(other) for path in other.rglob("*") if path.is_file())
    return not any(not filecmp.cmp(one / name, other / name, shallow=False) for name in files)


def test_pages_do_not_depend_on_the_number_of_processes(many: Path, tmp_path: Path) -> None:
    run = tmp_path / "elsewhere"
    shutil.copytree(many, run)
    told: list[tuple[float, float, str]] = []
    with heard_by(lambda *far: told.append(far)):
        write_report(run, json.loads(read(run / "run.json")), jobs=1)
    assert same(run / "report", many / "report")
    assert told == [(done, 27, "pages") for done in range(1, 28)]
    assert str(tmp_path) not in read(run / "report" / "index.html")


def test_retime_refreshes_the_report(sample: Path, tmp_path: Path) -> None:
    run = tmp_path / "run"
    shutil.copytree(sample, run)
    pipeline.retime(run)
    assert same(run / "report", sample / "report")
    assert "report" in json.loads(read(run / "run.json"))["files"]

    rows = rows_of(run, "segments")
    edited = next(row for row in rows if row["outlet_id"] == "TC-001" and row["regime"] == "channel")
    edited["roughness"], edited["note"] = "0.09", "<b>seen in the field</b>"
    with (run / "segments.csv").open("w", encoding="utf-8", newline="") as file:
        writer = csv.DictWriter(file, rows[0])
        writer.writeheader()
        writer.writerows(rows)
    with pytest.raises(InputRejected, match=r"edited after it was computed: run: basinwright retime"):
        pipeline.report(run)
    pipeline.retime(run)
    article = read(run / "report" / "index.html").split('<article class="outlet"')[1]
    assert "edited, note" in article
    assert "&lt;b&gt;seen in the field&lt;/b&gt;" in article
    assert '<tr class="edited">' in article


def test_the_command_makes_the_whole_report_or_one_page(many: Path, tmp_path: Path) -> None:
    run = tmp_path / "run"
    shutil.copytree(many, run)
    shutil.rmtree(run / "report")
    command = CliRunner()
    alone = command.invoke(app, ["report", str(run), "P03"], standalone_mode=False)
    assert alone.return_value == 0
    page = Path(alone.stdout.strip())
    assert [path.name for path in pages(run)] == [page.name]
    assert filecmp.cmp(page, many / "report" / "outlets" / page.name, shallow=False)
    whole = command.invoke(app, ["report", str(run)], standalone_mode=False)
    assert Path(whole.stdout.strip()) == run / "report" / "index.html"
    assert same(run / "report", many / "report")

    with pytest.raises(InputRejected, match=r"has no 'P3': did you mean 'P\d3'"):
        pipeline.report(run, "P3")
    assert not list(run.parent.glob(".run.*"))
    with pytest.raises(InputRejected, match=r"run\.json.*does not exist"):
        pipeline.report(tmp_path / "nothing")


def test_a_summary_run_is_reported_without_maps_and_series(tmp_path: Path) -> None:
    file = valley_project(tmp_path / "project", {"a": (30, 20), "b": (50, 20)}, {"a": "upper"})
    run = pipeline.run(file, summary_only=True).folder
    assert not (run / "report").exists()
    text = read(pipeline.report(run))
    Page(text)
    assert 'class="map"' not in text
    assert "Design floods" in text  # the table of peaks
    assert "Unit hydrograph.</figcaption>" not in text
    assert "Long profile" in text
