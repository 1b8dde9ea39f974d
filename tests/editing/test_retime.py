"""A person's edits: what is computed again, what stands, what is marked, what is refused."""

import csv
import io
import json
import shutil
from pathlib import Path

import numpy as np
import pytest
from projects import make_project, read_table, v_valley

from basinwright import pipeline
from basinwright.errors import InputRejected

Rows = list[dict[str, str]]


class Run:
    """A finished run whose tables a person edits."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder

    def read(self, name: str, outlet_id: str | None = None) -> Rows:
        return [row for row in read_table(self.folder, name) if outlet_id in (None, row["outlet_id"])]

    def save(self, name: str, rows: Rows) -> None:
        text = io.StringIO(newline="")
        writer = csv.DictWriter(text, list(rows[0]), lineterminator="\r\n")
        writer.writeheader()
        writer.writerows(rows)
        (self.folder / f"{name}.csv").write_text(text.getvalue(), encoding="utf-8", newline="")

    def edit(self, table: str, where: dict[str, str], **cells: str) -> None:
        """Write cells into the one row that has the values of `where`."""
        rows = self.read(table)
        chosen = [row for row in rows if where.items() <= row.items()]
        assert len(chosen) == 1
        assert cells.keys() <= chosen[0].keys()
        chosen[0].update(cells)
        self.save(table, rows)

    def row(self, table: str, **where: str) -> dict[str, str]:
        (row,) = [row for row in self.read(table) if where.items() <= row.items()]
        return row

    def retime(self) -> None:
        pipeline.retime(self.folder)

    def files(self) -> dict[str, bytes]:
        """The bytes of every file but those of the store."""
        paths = (path for path in self.folder.rglob("*") if path.is_file() and ".store" not in path.parts)
        return {path.relative_to(self.folder).as_posix(): path.read_bytes() for path in paths}

    def tables(self) -> dict[str, bytes]:
        return {path.name: path.read_bytes() for path in self.folder.glob("*.csv")}


@pytest.fixture(scope="session")
def finished(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A valley with three classes of cover: A lies below B, C has a supplied time, D is a single cell."""
    folder = tmp_path_factory.mktemp("editing")
    elevation = v_valley(80, 61, 0.05, 0.02) + np.random.default_rng(1).uniform(0.0, 0.02, (80, 61))
    elevation[10, 5] += 30.0
    cover = np.full(elevation.shape, 71)
    cover[:40], cover[:, 40:] = 41, 82
    file = make_project(
        folder,
        elevation,
        {"A": (79, 30), "B": (45, 30), "C": (78, 20), "007": (10, 5)},
        cover=cover,
        columns={"tc_h": {"C": "1.5"}, "name": {"A": "Mill Lane, lower"}},
        overrides={"outlets": {"name": "name"}},
    )
    return pipeline.run(file).folder


@pytest.fixture
def whole(finished: Path, tmp_path: Path) -> Run:
    """A copy of the whole run."""
    return Run(Path(shutil.copytree(finished, tmp_path / "out")))


@pytest.fixture(scope="session")
def tables(finished: Path) -> Path:
    """The same run without layers, series and report, which would only take time."""
    return pipeline.run(finished.parent / "project.toml", out=finished.parent / "tables", summary_only=True).folder


@pytest.fixture
def run(tables: Path, tmp_path: Path) -> Run:
    """A copy of its tables alone: all that `retime` needs."""
    folder = tmp_path / "out"
    folder.mkdir()
    for path in [*tables.glob("*.csv"), *tables.glob("*.json")]:
        shutil.copy(path, folder)
    return Run(folder)


OF_THE_TERRAIN = (
    "outlet_id", "name", "x", "y", "longitude", "latitude", "snap_m", "downstream_outlet_id", "area_km2",
    "centroid_length_m", "path_length_m", "path_length_raw_m", "relief_m", "basin_slope_pct", "path_slope_pct",
    "path_slope_1085_pct", "open_water_pct", "depth_2yr_mm", "depth_10yr_mm", "depth_100yr_mm",
)  # fmt: skip


def number(row, column):
    return float(row[column])


def time_h(run, outlet_id):
    return sum(number(row, "travel_time_h") for row in run.read("segments", outlet_id))


def rejected(run):
    """Retime, expect a refusal, and see that nothing was changed; return its lines."""
    before = run.files()
    with pytest.raises(InputRejected) as caught:
        run.retime()
    assert run.files() == before
    assert sorted(path.name for path in run.folder.parent.iterdir()) == [run.folder.name]
    lines = str(caught.value).splitlines()
    assert all(line.count(": ") >= 3 for line in lines)
    return lines


class TestUnedited:
    def test_gives_the_same_bytes(self, whole):
        before = whole.files()
        whole.retime()
        assert whole.files() == before

    def test_needs_four_files(self, finished, tmp_path):
        copy = tmp_path / "copy"
        copy.mkdir()
        for name in ("run.json", "outlets.csv", "segments.csv", "cover_shares.csv"):
            shutil.copy(finished / name, copy)
        pipeline.retime(copy)
        for path in [*finished.glob("*.csv"), finished / "tables.json"]:
            assert (copy / path.name).read_bytes() == path.read_bytes()

    def test_gives_the_same_bytes_after_a_spreadsheet(self, run):
        """15 digits, TRUE and FALSE, a byte-order mark, plain line ends, other column order, empty rows at the end."""
        before = run.tables()
        for name in ("outlets", "segments", "cover_shares"):
            rows = [{column: as_in_a_spreadsheet(cell) for column, cell in row.items()} for row in run.read(name)]
            columns = sorted(rows[0])
            text = io.StringIO(newline="")
            writer = csv.DictWriter(text, columns, lineterminator="\n")
            writer.writeheader()
            writer.writerows(rows)
            text.write("," * (len(columns) - 1) + "\n\n")
            (run.folder / f"{name}.csv").write_text(text.getvalue(), encoding="utf-8-sig")
        run.retime()
        assert run.tables() == before

    def test_gives_the_same_bytes_after_a_sort(self, run):
        before = run.tables()
        for name in ("outlets", "segments", "cover_shares"):
            run.save(name, run.read(name)[::-1])
        run.retime()
        assert run.tables() == before


def as_in_a_spreadsheet(cell):
    if cell in ("true", "false"):
        return cell.upper()
    try:
        return cell if cell.isdigit() else f"{float(cell):.15g}"
    except ValueError:
        return cell


EDITS = [
    ("segments", {"outlet_id": "A", "segment": "3"}, {"slope": "0.005"}),
    ("segments", {"outlet_id": "A", "segment": "4"}, {"roughness": "0.08"}),
    ("segments", {"outlet_id": "A", "segment": "1"}, {"roughness": "0.6"}),
    ("segments", {"outlet_id": "A", "segment": "2"}, {"roughness": "0.3"}),
    ("segments", {"outlet_id": "A", "segment": "4"}, {"hydraulic_radius_m": "0.9"}),
    ("segments", {"outlet_id": "A", "segment": "4"}, {"hydraulic_radius_half_m": "0.4"}),
    ("segments", {"outlet_id": "A", "segment": "2"}, {"cover": "82"}),
    ("segments", {"outlet_id": "A", "segment": "1"}, {"cover": "82"}),
    ("segments", {"outlet_id": "A", "segment": "2"}, {"regime": "channel"}),
    ("segments", {"outlet_id": "A", "segment": "3"}, {"regime": "shallow"}),
    ("segments", {"outlet_id": "A", "segment": "5"}, {"regime": "open_water"}),
    ("segments", {"outlet_id": "A", "segment": "2"}, {"top_elevation_m": "1040"}),
    ("segments", {"outlet_id": "A", "segment": "2"}, {"bottom_elevation_m": "1010"}),
    ("segments", {"outlet_id": "A", "segment": "2"}, {"note": "seen on 3 May, a ditch"}),
    ("outlets", {"outlet_id": "A"}, {"area_km2": "0.6"}),
    ("outlets", {"outlet_id": "A"}, {"path_length_m": "1200"}),
    ("outlets", {"outlet_id": "A"}, {"basin_slope_pct": "3"}),
    ("outlets", {"outlet_id": "A"}, {"curve_number": "80"}),
    ("outlets", {"outlet_id": "A"}, {"tc_h": "2"}),
    ("outlets", {"outlet_id": "C"}, {"tc_h": "2"}),
    ("cover_shares", {"outlet_id": "A", "cover": "71"}, {"cover": "24"}),
    ("cover_shares", {"outlet_id": "A", "cover": "71"}, {"soil_group": "D"}),
    ("cover_shares", {"outlet_id": "A", "cover": "71"}, {"area_km2": "0.4"}),
    ("cover_shares", {"outlet_id": "A", "cover": "71"}, {"curve_number": "90"}),
    ("cover_shares", {"outlet_id": "A", "cover": "71"}, {"impervious_pct": "20"}),
    ("cover_shares", {"outlet_id": "A", "cover": "71"}, {"source": "county manual, 2019"}),
]  # fmt: skip


def named(edit):
    table, where, cells = edit
    return f"{table}-{where['outlet_id']}{where.get('segment', '')}-{'-'.join(cells)}"


@pytest.mark.parametrize(("table", "where", "cells"), EDITS, ids=map(named, EDITS))
def test_one_edit_stands_marks_repeats_and_is_undone(run, table, where, cells):
    before = run.tables()
    rows = {name: run.read(name) for name in ("outlets", "segments", "cover_shares")}
    old = {column: run.row(table, **where)[column] for column in cells}
    run.edit(table, where, **cells)
    run.retime()
    once = run.tables()
    place = {**where, **{column: cells[column] for column in where.keys() & cells.keys()}}
    row = run.row(table, **place)
    assert all(same_value(row[column], cells[column]) for column in cells)
    only_what_follows_changed(rows, run, cells)
    marked = {(row["outlet_id"], row["segment"]) for row in run.read("segments") if row["edited"] == "true"}
    assert marked == ({(where["outlet_id"], where["segment"])} if table == "segments" else set())
    run.retime()
    assert run.tables() == once
    run.edit(table, place, **{column: as_in_a_spreadsheet(cell) for column, cell in old.items()})
    run.retime()
    assert run.tables() == before


def same_value(a, b):
    try:
        return float(a) == float(b)
    except ValueError:
        return a == b


def only_what_follows_changed(before, run, cells):
    """See that outlets A's neighbours, the terrain's columns and everything else that was not edited stand."""
    for old, new in zip(before["outlets"], run.read("outlets"), strict=True):
        for column in set(OF_THE_TERRAIN) - cells.keys():
            assert new[column] == old[column], column
        if old["outlet_id"] == "B":
            assert new == old
    terrain = {"outlet_id", "segment", "regime", "cover", "from_m", "to_m", "top_elevation_m", "bottom_elevation_m",
               "area_km2", "note"} - cells.keys()  # fmt: skip
    for old, new in zip(before["segments"], run.read("segments"), strict=True):
        assert {column: new[column] for column in terrain} == {column: old[column] for column in terrain}
    patch = {"outlet_id", "cover", "soil_group", "area_km2"} - cells.keys()
    for old, new in zip(before["cover_shares"], run.read("cover_shares"), strict=True):
        assert {column: new[column] for column in patch} == {column: old[column] for column in patch}


class TestDependentCells:
    """What stands where a person filled it, and what is computed again."""

    def test_slope_follows_edited_elevations(self, run):
        run.edit("segments", {"outlet_id": "A", "segment": "4"}, bottom_elevation_m="1006.5")
        run.retime()
        row = run.row("segments", outlet_id="A", segment="4")
        fall, length = number(row, "top_elevation_m") - 1006.5, number(row, "to_m") - number(row, "from_m")
        assert number(row, "slope") == pytest.approx(fall / length, rel=1e-12)

    def test_a_changed_slope_stands_beside_edited_elevations(self, run):
        where = {"outlet_id": "A", "segment": "4"}
        run.edit("segments", where, slope="0.004", bottom_elevation_m="1006.5")
        run.retime()
        run.edit("segments", where, bottom_elevation_m="1002")
        run.retime()
        assert run.row("segments", **where)["slope"] == "0.004"

    def test_an_emptied_slope_is_computed(self, run):
        before, where = run.tables(), {"outlet_id": "A", "segment": "4"}
        run.edit("segments", where, slope="0.004")
        run.retime()
        run.edit("segments", where, slope="")
        run.retime()
        assert run.tables() == before

    @pytest.mark.parametrize("column", ["slope", "roughness", "hydraulic_radius_m", "hydraulic_radius_half_m"])
    def test_an_emptied_computed_cell_comes_back(self, run, column):
        before = run.tables()
        run.edit("segments", {"outlet_id": "A", "segment": "4"}, **{column: ""})
        run.retime()
        assert run.tables() == before

    def test_the_half_radius_keeps_its_proportion_until_it_is_given(self, run):
        where = {"outlet_id": "A", "segment": "4"}
        old = run.row("segments", **where)
        run.edit("segments", where, hydraulic_radius_m=str(2 * number(old, "hydraulic_radius_m")))
        run.retime()
        half = number(run.row("segments", **where), "hydraulic_radius_half_m")
        assert half == pytest.approx(2 * number(old, "hydraulic_radius_half_m"), rel=1e-12)

    def test_shallow_to_channel_takes_the_channel_roughness_and_its_section(self, run):
        where = {"outlet_id": "A", "segment": "2"}
        run.edit("segments", where, regime="channel")
        run.retime()
        row = run.row("segments", **where)
        assert row["roughness"] == "0.045"
        assert number(row, "bankfull_width_m") > 0
        assert row["hydraulic_radius_m"]

    def test_channel_to_shallow_takes_the_coefficient_of_its_cover(self, run):
        where = {"outlet_id": "A", "segment": "4"}
        run.edit("segments", where, regime="shallow")
        run.retime()
        row, other = run.row("segments", **where), run.row("segments", outlet_id="A", segment="2")
        assert row["cover"] == other["cover"] == "41"
        assert row["roughness"] == other["roughness"]
        assert row["bankfull_width_m"] == row["hydraulic_radius_m"] == ""

    def test_a_roughness_given_for_one_regime_does_not_serve_another(self, run):
        where = {"outlet_id": "A", "segment": "2"}
        run.edit("segments", where, roughness="0.3")
        run.retime()
        run.edit("segments", where, regime="channel")
        run.retime()
        assert run.row("segments", **where)["roughness"] == "0.045"
        run.edit("segments", where, regime="shallow", roughness="0.5")
        run.retime()
        assert run.row("segments", **where)["roughness"] == "0.5"

    def test_a_class_unknown_to_the_scheme_keeps_the_roughness_beside_it(self, run):
        where = {"outlet_id": "A", "segment": "2"}
        old = run.row("segments", **where)["roughness"]
        run.edit("segments", where, cover="heath")
        run.retime()
        assert run.row("segments", **where)["roughness"] == old

    def test_a_supplied_time_stands_and_gives_way_to_the_method_when_emptied(self, run):
        before = run.tables()
        assert run.row("outlets", outlet_id="C")["tc_h"] == "1.5"
        run.edit("outlets", {"outlet_id": "C"}, tc_h="")
        run.retime()
        row, timing = run.row("outlets", outlet_id="C"), run.row("timing", outlet_id="C", method="velocity")
        assert number(row, "tc_h") == max(number(timing, "tc_h"), 0.1)
        assert "OVERRIDE" not in row["flags"]
        assert timing["adopted"] == "true"
        run.retime()
        assert run.row("outlets", outlet_id="C") == row
        run.edit("outlets", {"outlet_id": "C"}, tc_h="1.5")
        run.retime()
        assert run.tables() == before

    def test_an_override_is_flagged_and_no_method_is_adopted(self, run):
        run.edit("outlets", {"outlet_id": "A"}, tc_h="2")
        run.retime()
        row = run.row("outlets", outlet_id="A")
        assert row["tc_h"] == "2"
        assert number(row, "lag_h") == pytest.approx(1.2)
        assert "OVERRIDE" in row["flags"].split()
        assert all(row["adopted"] == "false" for row in run.read("timing", "A"))

    @pytest.mark.parametrize("stem", ["area_km2", "path_length_m", "basin_slope_pct"])
    def test_an_emptied_figure_of_the_terrain_is_the_terrains_again(self, run, stem):
        before = run.tables()
        run.edit("outlets", {"outlet_id": "A"}, **{stem: "3"})
        run.retime()
        assert "OVERRIDE" in run.row("outlets", outlet_id="A")["flags"]
        run.edit("outlets", {"outlet_id": "A"}, **{stem: ""})
        run.retime()
        assert run.tables() == before

    def test_peaks_grow_with_the_area(self, run):
        old = run.row("outlets", outlet_id="A")
        run.edit("outlets", {"outlet_id": "A"}, area_km2=repr(2.5 * number(old, "area_km2")))
        run.retime()
        new = run.row("outlets", outlet_id="A")
        for period in ("2", "10", "100"):
            assert number(new, f"peak_{period}yr_m3s") == pytest.approx(2.5 * number(old, f"peak_{period}yr_m3s"))
            assert new[f"runoff_{period}yr_mm"] == old[f"runoff_{period}yr_mm"]

    def test_length_and_slope_of_the_basin_feed_the_lag_method(self, run):
        """NEH 630 ch. 15 eq. 15-4: the lag grows with length^0.8 and falls with the root of the land slope."""
        old = run.row("timing", outlet_id="A", method="nrcs_lag"), run.row("outlets", outlet_id="A")
        for column, factor, power in (("path_length_m", 1.5, 0.8), ("basin_slope_pct", 1.5, -0.5)):
            run.edit("outlets", {"outlet_id": "A"}, **{column: repr(factor * number(old[1], column))})
            run.retime()
            new = run.row("timing", outlet_id="A", method="nrcs_lag")
            assert number(new, "tc_h") == pytest.approx(number(old[0], "tc_h") * factor**power)
            run.edit("outlets", {"outlet_id": "A"}, **{column: ""})


class TestShares:
    def test_a_curve_number_of_the_outlet_replaces_the_shares(self, run):
        """SCS runoff by hand: S = 25400/80 - 254 = 63.5 mm, P = 182.88 mm (7.2 in): (P - 0.2 S)^2 / (P + 0.8 S)."""
        run.edit("outlets", {"outlet_id": "A"}, curve_number="80")
        run.retime()
        row = run.row("outlets", outlet_id="A")
        assert number(row, "runoff_100yr_mm") == pytest.approx((182.88 - 12.7) ** 2 / (182.88 + 50.8))
        assert row["curve_number"] == "80"
        assert number(row, "curve_number_used") == pytest.approx(80)

    def test_the_mean_follows_the_shares(self, run):
        run.edit("cover_shares", {"outlet_id": "A", "cover": "82"}, soil_group="D")
        run.retime()
        rows = run.read("cover_shares", "A")
        assert number(run.row("cover_shares", outlet_id="A", cover="82"), "curve_number") > 78
        mean = sum(number(row, "area_km2") * number(row, "curve_number") for row in rows)
        mean /= sum(number(row, "area_km2") for row in rows)
        assert number(run.row("outlets", outlet_id="A"), "curve_number") == pytest.approx(mean)

    def test_typing_the_old_mean_after_an_edit_of_the_shares_is_an_override(self, run):
        old = run.row("outlets", outlet_id="A")["curve_number"]
        run.edit("cover_shares", {"outlet_id": "A", "cover": "82"}, soil_group="D")
        run.retime()
        run.edit("outlets", {"outlet_id": "A"}, curve_number=old)
        run.retime()
        row = run.row("outlets", outlet_id="A")
        assert row["curve_number"] == old
        assert "OVERRIDE" in row["flags"]

    def test_rows_are_added_and_deleted(self, run):
        before = run.tables()
        rows = run.read("cover_shares")
        gone = next(row for row in rows if row["outlet_id"] == "A" and row["cover"] == "71")
        new = {
            **dict.fromkeys(gone, ""),
            "outlet_id": "A",
            "cover": "Pasture/Hay",
            "soil_group": "C",
            "area_km2": "0.1",
        }
        run.save("cover_shares", [row for row in rows if row is not gone] + [new])
        run.retime()
        (added,) = [row for row in run.read("cover_shares", "A") if row["soil_group"] == "C"]
        assert number(added, "curve_number") > 60
        assert added["source"]
        once = run.tables()
        run.retime()
        assert run.tables() == once
        run.save("cover_shares", rows)
        run.retime()
        assert run.tables() == before

    def test_a_patch_of_a_class_of_its_own_needs_its_curve_number(self, run):
        where = {"outlet_id": "A", "cover": "71"}
        old = run.row("cover_shares", **where)
        run.edit("cover_shares", where, cover="solar farm", curve_number="")
        (line,) = rejected(run)
        assert line.startswith("cover_shares.csv: row 3, cover: 'solar farm' is no class of the scheme")
        run.edit("cover_shares", {"outlet_id": "A", "cover": "solar farm"}, curve_number="81")
        run.retime()
        assert number(run.row("cover_shares", outlet_id="A", cover="solar farm"), "curve_number") == 81
        run.edit("cover_shares", {"outlet_id": "A", "cover": "solar farm"}, **old)
        run.retime()
        assert run.row("cover_shares", **where) == old


class TestPieces:
    """Segments split, added and deleted."""

    def test_a_split_changes_no_time(self, run):
        """A copied row with only the cut typed in: elevations at the cut lie on the line, so slope and time stay."""
        old, before = run.row("segments", outlet_id="A", segment="5"), time_h(run, "A")
        rows = run.read("segments")
        split(rows, "A", "5", 800.0)
        run.save("segments", rows)
        run.retime()
        a, b = [row for row in run.read("segments", "A") if number(row, "to_m") > 700.0]
        assert number(a, "slope") == pytest.approx(number(old, "slope"), rel=1e-9)
        assert number(b, "slope") == pytest.approx(number(old, "slope"), rel=1e-9)
        assert (a["to_m"], b["to_m"]) == (b["from_m"], old["to_m"])
        assert a["bottom_elevation_m"] == b["top_elevation_m"]
        assert (a["segment"], b["segment"]) == ("5", "6")
        assert (a["edited"], b["edited"]) == ("true", "true")
        assert time_h(run, "A") == pytest.approx(before, rel=1e-9)
        once = run.tables()
        run.retime()
        assert run.tables() == once

    def test_a_split_is_undone(self, run):
        before, rows = run.tables(), run.read("segments")
        changed = run.read("segments")
        split(changed, "A", "5", 800.0)
        run.save("segments", changed)
        run.retime()
        run.save("segments", rows)
        run.retime()
        assert run.tables() == before

    def test_an_added_row_needs_no_more_than_its_place(self, run):
        """A culvert of 40 m in a channel: the pieces above and below keep the line of the profile."""
        rows = run.read("segments")
        split(rows, "A", "5", 800.0)
        split(rows, "A", "5", 760.0)
        at = next(i for i, row in enumerate(rows) if row["from_m"] == "760.0")
        rows[at] = {
            **dict.fromkeys(rows[at], ""),
            "outlet_id": "A",
            "from_m": "760",
            "to_m": "800",
            "roughness": "0.013",
        }
        run.save("segments", rows)
        run.retime()
        pieces = [row for row in run.read("segments", "A") if number(row, "from_m") >= 665]
        assert [row["to_m"] for row in pieces][:2] == ["760.0", "800"]
        assert pieces[1]["roughness"] == "0.013"
        assert pieces[1]["regime"] == "channel"
        assert number(pieces[1], "slope") == pytest.approx(number(pieces[0], "slope"), rel=1e-6)
        assert number(pieces[1], "velocity_mps") > 3 * number(pieces[0], "velocity_mps")

    def test_the_neighbour_downstream_takes_the_length_of_a_deleted_row(self, run):
        before, rows = run.tables(), run.read("segments")
        gone, below = (run.row("segments", outlet_id="A", segment=number) for number in ("3", "4"))
        run.save("segments", [row for row in rows if row != gone])
        run.retime()
        row = run.row("segments", outlet_id="A", segment="4")
        assert (row["from_m"], row["top_elevation_m"]) == (gone["from_m"], gone["top_elevation_m"])
        fall = number(gone, "top_elevation_m") - number(below, "bottom_elevation_m")
        length = number(below, "to_m") - number(gone, "from_m")
        assert number(row, "slope") == pytest.approx(fall / length, rel=1e-12)
        assert row["edited"] == "true"
        once = run.tables()
        run.retime()
        assert run.tables() == once
        run.save("segments", rows)
        run.retime()
        assert run.tables() == before

    def test_two_rows_deleted_at_the_divide(self, run):
        rows = [row for row in run.read("segments") if not (row["outlet_id"] == "A" and row["segment"] in ("1", "2"))]
        run.save("segments", rows)
        run.retime()
        row = run.read("segments", "A")[0]
        assert (row["segment"], row["from_m"]) == ("3", "0.0")

    def test_a_moved_boundary(self, run):
        run.edit("segments", {"outlet_id": "A", "segment": "4"}, to_m="700")
        run.edit("segments", {"outlet_id": "A", "segment": "5"}, from_m="700")
        run.retime()
        row = run.row("segments", outlet_id="A", segment="4")
        fall = number(row, "top_elevation_m") - number(row, "bottom_elevation_m")
        assert number(row, "slope") == pytest.approx(fall / (700 - number(row, "from_m")), rel=1e-12)
        assert number(run.row("outlets", outlet_id="A"), "channel_length_m") == pytest.approx(730.0)

    def test_an_emptied_elevation_is_read_off_the_profile(self, run):
        before = run.tables()
        run.edit("segments", {"outlet_id": "A", "segment": "4"}, bottom_elevation_m="1000")
        run.retime()
        run.edit("segments", {"outlet_id": "A", "segment": "4"}, bottom_elevation_m="")
        run.retime()
        assert run.tables() == before


def split(rows, outlet_id, segment, at):
    """Copy a row below itself and type in the cut, as one does in a spreadsheet."""
    place = next(i for i, row in enumerate(rows) if (row["outlet_id"], row["segment"]) == (outlet_id, segment))
    rows.insert(place + 1, {**rows[place], "from_m": repr(at)})
    rows[place]["to_m"] = repr(at)


def test_edits_outlive_later_edits(run):
    """Every retime keeps what was edited before it, and the end does not depend on how often one computed between."""
    edits = [EDITS[0], EDITS[3], EDITS[14], EDITS[17], EDITS[21]]
    for table, where, cells in edits:
        run.edit(table, where, **cells)
        run.retime()
    stepwise = run.tables()
    row = run.row("segments", outlet_id="A", segment="3")
    assert row["slope"] == "0.005"
    assert run.row("outlets", outlet_id="A")["curve_number"] == "80"
    run.retime()
    assert run.tables() == stepwise


def test_a_spreadsheet_left_open_over_a_retime(run):
    """Its computed cells are those of the first run: they count as computed, not as given."""
    rows, shares, outlets = run.read("segments"), run.read("cover_shares"), run.read("outlets")
    rows[3]["bottom_elevation_m"] = "1006.5"
    shares[2]["soil_group"] = "D"
    run.save("segments", rows)
    run.save("cover_shares", shares)
    run.retime()
    once = run.tables()
    run.save("segments", rows)
    run.save("outlets", outlets)
    run.retime()
    assert run.tables() == once
    rows[4]["slope"] = "0.01"
    run.save("segments", rows)
    run.retime()
    assert run.row("segments", outlet_id="A", segment="4")["slope"] != rows[3]["slope"]
    assert run.row("segments", outlet_id="A", segment="5")["slope"] == "0.01"


IMPOSSIBLE = [
    ("segments", {"from_m": "340"}, "from_m", "a gap"),
    ("segments", {"from_m": "320"}, "from_m", "overlaps"),
    ("segments", {"to_m": "300"}, "to_m", "is not beyond"),
    ("segments", {"to_m": ""}, "to_m", "not a finite number"),
    ("segments", {"regime": "torrent"}, "regime", "'torrent' is unknown"),
    ("segments", {"regime": ""}, "regime", "is unknown"),
    ("segments", {"slope": "steep"}, "slope", "'steep' is not a finite number"),
    ("segments", {"slope": "nan"}, "slope", "not a finite number"),
    ("segments", {"slope": "inf"}, "slope", "not a finite number"),
    ("segments", {"slope": "-0.01"}, "slope", "out of range"),
    ("segments", {"slope": "0"}, "slope", "out of range"),
    ("segments", {"roughness": "0"}, "roughness", "out of range"),
    ("segments", {"hydraulic_radius_m": "-1"}, "hydraulic_radius_m", "out of range"),
    ("segments", {"top_elevation_m": "1e9"}, "top_elevation_m", "out of range"),
    ("segments", {"regime": "shallow", "cover": "heath"}, "cover", "'heath' is no class of the scheme"),
    ("segments", {"velocity_mps": "2"}, "velocity_mps", "not to be edited"),
    ("segments", {"area_km2": "2"}, "area_km2", "not to be edited"),
    ("segments", {"edited": "true"}, "edited", "not to be edited"),
    ("segments", {"outlet_id": "Z"}, "outlet_id", "'Z' is no outlet"),
    ("outlets", {"outlet_id": "Z"}, "outlet_id", "'Z' is no outlet"),
    ("outlets", {"peak_10yr_m3s": "9"}, "peak_10yr_m3s", "not to be edited"),
    ("outlets", {"name": "Mill Lane"}, "name", "not to be edited"),
    ("outlets", {"area_km2": "0"}, "area_km2", "out of range"),
    ("outlets", {"area_km2": "big"}, "area_km2", "not a finite number"),
    ("outlets", {"curve_number": "101"}, "curve_number", "out of range"),
    ("outlets", {"tc_h": "-1"}, "tc_h", "out of range"),
    ("outlets", {"tc_h": "1e-9"}, "tc_h", "out of range"),
    ("cover_shares", {"area_km2": "-1"}, "area_km2", "out of range"),
    ("cover_shares", {"area_km2": ""}, "area_km2", "not a finite number"),
    ("cover_shares", {"curve_number": "0"}, "curve_number", "out of range"),
    ("cover_shares", {"impervious_pct": "101"}, "impervious_pct", "out of range"),
    ("cover_shares", {"soil_group": "E"}, "soil_group", "'E' is no soil group"),
    ("cover_shares", {"soil_group": "any"}, "soil_group", "depends on the group"),
    ("cover_shares", {"cover": ""}, "cover", "empty"),
    ("cover_shares", {"outlet_id": ""}, "outlet_id", "'' is no outlet"),
]


@pytest.mark.parametrize(("table", "cells", "column", "words"), IMPOSSIBLE, ids=lambda value: str(value)[:40])
def test_an_impossible_edit_is_refused_with_its_place(run, table, cells, column, words):
    where = {"segments": {"segment": "3"}, "outlets": {}, "cover_shares": {"cover": "71"}}[table]
    line = {"segments": 4, "outlets": 2, "cover_shares": 3}[table]
    run.edit(table, {"outlet_id": "A", **where}, **cells)
    assert any(found.startswith(f"{table}.csv: row {line}, {column}: ") and words in found for found in rejected(run))


class TestRefused:
    def test_everything_at_once(self, run):
        run.edit("segments", {"outlet_id": "A", "segment": "3"}, slope="steep", regime="torrent")
        run.edit("outlets", {"outlet_id": "B"}, tc_h="soon")
        run.edit("cover_shares", {"outlet_id": "A", "cover": "82"}, curve_number="nan")
        files = [line.split(":")[0] for line in rejected(run)]
        assert sorted(files) == ["cover_shares.csv", "outlets.csv", "segments.csv", "segments.csv"]

    @pytest.mark.parametrize("table", ["outlets", "segments", "cover_shares"])
    def test_a_deleted_outlet(self, run, table):
        run.save(table, [row for row in run.read(table) if row["outlet_id"] != "B"])
        (line,) = rejected(run)
        assert line.startswith(f"{table}.csv: row 1, outlet_id: outlet 'B' ")

    def test_an_outlet_that_stands_twice(self, run):
        run.save("outlets", [*run.read("outlets"), run.read("outlets")[0]])
        assert "stands more than once" in rejected(run)[0]

    def test_a_path_that_does_not_reach_the_outlet(self, run):
        run.save("segments", [row for row in run.read("segments") if (row["outlet_id"], row["segment"]) != ("A", "5")])
        (line,) = rejected(run)
        assert line.startswith("segments.csv: row 5, to_m: the path ends at 1060.71, not at 665.711")

    def test_a_path_that_runs_past_the_outlet(self, run):
        run.edit("segments", {"outlet_id": "A", "segment": "5"}, to_m="2000")
        assert "the path ends at" in rejected(run)[0]

    def test_a_failed_outlet_cannot_be_edited(self, run):
        run.edit("outlets", {"outlet_id": "007"}, tc_h="1")
        (line,) = rejected(run)
        assert line.startswith("outlets.csv: row 5, outlet_id: the outlet failed")

    def test_an_id_that_a_spreadsheet_took_for_a_number(self, run):
        run.edit("outlets", {"outlet_id": "007"}, outlet_id="7")
        assert any("ids are text" in line for line in rejected(run))

    @pytest.mark.parametrize("change", ["missing", "renamed", "twice", "semicolons", "empty", "ragged", "binary"])
    def test_a_table_that_is_none(self, run, change):
        path = run.folder / "segments.csv"
        text = path.read_text(encoding="utf-8")
        header = text.splitlines()[0]
        if change == "missing":
            rows = [{k: v for k, v in row.items() if k != "slope"} for row in run.read("segments")]
            run.save("segments", rows)
        else:
            path.write_bytes({
                "renamed": text.replace(",slope,", ",gradient,", 1),
                "twice": text.replace(",slope,", ",roughness,", 1),
                "semicolons": text.replace(",", ";"),
                "empty": "",
                "ragged": text.replace("A,1,", "A,1,x,", 1),
                "binary": "\udcff\udcfe" + header,
            }[change].encode("utf-8", "surrogateescape"))  # fmt: skip
        (line,) = rejected(run)
        place = {"ragged": "row 2, cells", "binary": "file"}.get(change, "header")
        assert line.startswith(f"segments.csv: {place}: ")

    @pytest.mark.parametrize("name", ["outlets.csv", "segments.csv", "cover_shares.csv"])
    def test_a_missing_table(self, run, name):
        (run.folder / name).unlink()
        (line,) = rejected(run)
        assert line.startswith(f"{name}: file: does not exist: ")

    @pytest.mark.parametrize("content", [None, "", "[1]", "{}", '{"format": 1}', '{"format": 1, "project": 3}'])
    def test_a_folder_without_a_sound_manifest(self, run, content):
        path = run.folder / "run.json"
        path.unlink()
        if content is not None:
            path.write_text(content, encoding="utf-8")
        (line,) = rejected(run)
        assert "run.json" in line

    def test_a_manifest_of_another_version(self, run):
        path = run.folder / "run.json"
        path.write_text(json.dumps({**json.loads(path.read_text(encoding="utf-8")), "format": 0}), encoding="utf-8")
        assert "another version" in rejected(run)[0]

    def test_a_folder_that_is_not_there(self, tmp_path):
        with pytest.raises(InputRejected, match="does not exist"):
            pipeline.retime(tmp_path / "deep" / "nowhere")
        assert list(tmp_path.iterdir()) == []


def test_layers_show_the_edited_segments_and_come_back(whole):
    import geopandas as gpd

    before, original, rows = whole.files(), whole.read("segments"), whole.read("segments")
    split(rows, "A", "5", 800.0)
    whole.save("segments", rows)
    whole.retime()
    layer = gpd.read_file(whole.folder / "basins.gpkg", layer="segments")
    pieces = layer[(layer.outlet_id == "A") & (layer.from_m >= 660)]
    assert pieces.edited.tolist() == [True, True]
    assert pieces.length.tolist() == pytest.approx([800.0 - 665.7106800079346, 1060.7106800079346 - 800.0], rel=1e-3)
    whole.save("segments", original)
    whole.retime()
    assert whole.files() == before
