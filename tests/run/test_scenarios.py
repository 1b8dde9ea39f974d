"""Scenarios: what differs is computed again and nothing else, edits reach each, what is no scenario is refused."""

import csv
import io
import itertools
import json
import shutil

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from projects import ORIGIN, make_project, numbers, read_table, transform_of, v_valley, walled, write_raster

from basinwright import pipeline
from basinwright.carrying import _SegmentCarrier
from basinwright.editing import Edited, as_first, by_outlet
from basinwright.errors import InputRejected
from basinwright.pipeline import manifest
from basinwright.schemes import load_scheme
from basinwright.timing import shallow_coefficients_mps

TERRAIN = ("elevation", "routing", "basins", "paths")
EDITABLE = ("outlets", "segments", "cover_shares")

SCENARIOS = """
[[scenario]]
name = "same"
cover = { raster = "copy.tif" }

[[scenario]]
name = "wetter"
storm = { depth_factor = 1.25 }

[[scenario]]
name = "built"
cover = { raster = "built.tif" }
"""


def valley(folder, **more):
    """A valley of grass with a wood at its head: A lies below B."""
    elevation = walled(v_valley(70, 41, 0.05, 0.02) + np.random.default_rng(1).uniform(0.0, 0.02, (70, 41)))
    cover = np.full(elevation.shape, 71)
    cover[:30] = 41
    file = make_project(folder, elevation, {"A": (72, 23), "B": (48, 23)}, cover=cover, **more)
    shutil.copy(folder / "cover.tif", folder / "copy.tif")
    built = cover.copy()
    built[22:60] = 23  # from within the wood into the grass
    put_cover(folder / "built.tif", built)
    return file, cover


def put_cover(path, classes):
    write_raster(path, np.asarray(classes, dtype=np.uint8), transform_of(10.0, ORIGIN), "EPSG:32614", nodata=0)


def add(file, text):
    with file.open("a", encoding="utf-8") as stream:
        stream.write(text)
    return file


@pytest.fixture(scope="module")
def finished(tmp_path_factory):
    folder = tmp_path_factory.mktemp("scenarios")
    file, _ = valley(folder)
    return pipeline.run(add(file, SCENARIOS), summary_only=True).folder


@pytest.fixture
def project(finished, tmp_path):
    """A copy of the project with its run."""
    return shutil.copytree(finished.parent, tmp_path / "county") / "project.toml"


def runs_of(stages):
    return {stage["stage"]: stage["runs"] for stage in stages}


def about(folder):
    return json.loads((folder / "run.json").read_text(encoding="utf-8"))


def tables_of(folder):
    return {path.relative_to(folder).as_posix(): path.read_bytes() for path in sorted(folder.rglob("*.csv"))}


def edit(folder, table, where, **cells):
    rows = read_table(folder, table)
    chosen = [row for row in rows if where.items() <= row.items()]
    assert chosen
    for row in chosen:
        assert cells.keys() <= row.keys()
        row.update(cells)
    save(folder, table, rows)


def save(folder, table, rows):
    text = io.StringIO(newline="")
    writer = csv.DictWriter(text, list(rows[0]), lineterminator="\r\n")
    writer.writeheader()
    writer.writerows(rows)
    (folder / f"{table}.csv").write_text(text.getvalue(), encoding="utf-8", newline="")


def of(rows, outlet_id):
    return [row for row in rows if row["outlet_id"] == outlet_id]


# What is computed


def test_a_scenario_equal_to_the_base_changes_nothing_to_the_last_bit(finished):
    same = finished / "scenarios" / "same"
    for path in same.glob("*.csv"):
        assert path.read_bytes() == (finished / path.name).read_bytes(), path.name
    rows = [row for row in read_table(finished, "scenarios") if row["scenario"] == "same"]
    assert len(rows) == 2 * 3
    for column in ("runoff_change_pct", "peak_change_pct", "peak_time_change_h", "tc_change_h"):
        assert {row[column] for row in rows} == {"0.0"}


def test_only_what_depends_on_the_difference_runs_again(finished):
    base, scenarios = about(finished), {entry["name"]: entry for entry in about(finished)["scenarios"]}
    assert set(runs_of(base["stages"]).values()) == {1}
    for entry in scenarios.values():
        runs = runs_of(entry["stages"])
        assert [runs[stage] for stage in TERRAIN] == [0, 0, 0, 0], "terrain, outlets and paths are those of the base"
    assert {stage for stage, runs in runs_of(scenarios["wetter"]["stages"]).items() if runs} == {"hydrology"}
    keys = [{stage["stage"]: stage["key"] for stage in entry["stages"]} for entry in (base, scenarios["built"])]
    assert {stage for stage in keys[0] if keys[0][stage] != keys[1][stage]} == {
        "cover", "tables", "time_area", "hydrology",
    }  # fmt: skip
    outlets, built = read_table(finished, "outlets"), read_table(finished / "scenarios" / "built", "outlets")
    for name in ("x", "y", "area_km2", "path_length_m", "relief_m", "downstream_outlet_id"):
        assert [row[name] for row in outlets] == [row[name] for row in built]


def test_segments_are_cut_where_the_cover_changed(finished):
    base, built = (of(read_table(folder, "segments"), "A") for folder in (finished, finished / "scenarios" / "built"))
    assert {row["cover"] for row in built} == {"41", "23", "71"} or {row["cover"] for row in built} == {"41", "23"}
    assert {row["to_m"] for row in built} != {row["to_m"] for row in base}
    assert base[-1]["to_m"] == built[-1]["to_m"]


def test_a_depth_factor_scales_the_storms_and_not_the_two_year_depth_of_sheet_flow(finished):
    base, wet = read_table(finished, "outlets"), read_table(finished / "scenarios" / "wetter", "outlets")
    for period in ("2", "10", "100"):
        depth, runoff = (numbers(wet, f"{what}_{period}yr_mm") for what in ("depth", "runoff"))
        assert depth == pytest.approx(1.25 * numbers(base, f"depth_{period}yr_mm"), rel=1e-15)
        retention = 25.4 * (1000.0 / numbers(wet, "curve_number_used") - 10.0)
        if period == "100":  # the curve number used is that of the deepest storm: NEH 630 ch. 10 eq. 10-11
            assert runoff == pytest.approx((depth - 0.2 * retention) ** 2 / (depth + 0.8 * retention), rel=1e-9)
    assert [row["tc_h"] for row in wet] == [row["tc_h"] for row in base]
    assert (numbers(read_table(finished, "scenarios"), "peak_change_pct")[6:12] > 25.0).all()


def test_the_comparison_is_that_of_the_tables(finished):
    rows = read_table(finished, "scenarios")
    assert [row["scenario"] for row in rows] == ["same"] * 6 + ["wetter"] * 6 + ["built"] * 6
    outlets = {row["outlet_id"]: row for row in read_table(finished, "outlets")}
    for row in rows[12:]:
        (built,) = of(read_table(finished / "scenarios" / "built", "outlets"), row["outlet_id"])
        before, period = outlets[row["outlet_id"]], f"{float(row['return_period_yr']):g}"
        for stem, column in (("peak", f"peak_{period}yr_m3s"), ("runoff", f"runoff_{period}yr_mm")):
            old, new = float(before[column]), float(built[column])
            name = column.replace(f"_{period}yr", "")
            assert (row[f"base_{name}"], row[name]) == (before[column], built[column])
            assert float(row[f"{stem}_change_pct"]) == pytest.approx(100.0 * (new / old - 1.0))
        assert float(row["tc_change_h"]) == pytest.approx(float(built["tc_h"]) - float(before["tc_h"]))


@settings(max_examples=3)
@given(seed=st.integers(0, 1_000_000))
def test_hardening_land_cover_never_lowers_a_curve_number_or_a_peak(tmp_path_factory, seed):
    """Chains of scenarios, each with more of the land harder than the one before: more runoff, smoother, faster."""
    folder = tmp_path_factory.mktemp("harder")
    random = np.random.default_rng(seed)
    file, cover = valley(folder)
    steps = [41, 81, 21, 22, 23, 24]
    classes = [load_scheme("nlcd").find(str(code)) for code in steps]
    speed = shallow_coefficients_mps()
    for softer, harder in itertools.pairwise(classes):  # else this test would ask for what the tables do not say
        assert all(softer.curve_number_on(group) <= harder.curve_number_on(group) for group in "ABCD")
        assert softer.sheet_n >= harder.sheet_n
        assert speed[softer.shallow] <= speed[harder.shallow]
    place = np.where(cover == 41, 0, 1)
    put_cover(folder / "cover.tif", np.array(steps)[place])
    for number in range(3):
        place = np.minimum(place + random.integers(0, 3, place.shape) * (random.random(place.shape) < 0.5), 5)
        put_cover(folder / f"{number}.tif", np.array(steps)[place])
        add(file, f'[[scenario]]\nname = "{number}"\ncover = {{ raster = "{number}.tif" }}\n')
    out = pipeline.run(file, summary_only=True).folder
    chain = [read_table(place, "outlets") for place in (out, *(out / "scenarios" / f"{n}" for n in range(3)))]
    for softer, harder in itertools.pairwise(chain):
        for column in ("curve_number", "runoff_2yr_mm", "runoff_100yr_mm", "peak_2yr_m3s", "peak_100yr_m3s"):
            assert (numbers(harder, column) >= numbers(softer, column)).all(), column


def test_a_scenario_that_fails_at_an_outlet_leaves_the_base_complete(tmp_path):
    file, cover = valley(tmp_path)
    cover = cover.copy()
    cover[52:] = 0  # nothing known of the land above A and below B
    put_cover(tmp_path / "half.tif", cover)
    outcome = pipeline.run(add(file, '[[scenario]]\nname = "half"\ncover = { raster = "half.tif" }\n'))
    assert outcome.failed == 1
    assert about(outcome.folder)["exit_status"] == 1
    assert [row["status"] for row in read_table(outcome.folder, "outlets")] != ["failed"] * 2
    rows = of(read_table(outcome.folder, "scenarios"), "A")
    assert {row["peak_m3s"] for row in rows} == {""}
    assert {row["peak_change_pct"] for row in rows} == {""}
    assert all(row["base_peak_m3s"] for row in rows)
    pipeline.retime(outcome.folder)
    assert "Scenarios" in (outcome.folder / "report" / "index.html").read_text(encoding="utf-8")


def test_over_capacity_is_told_by_scenario(tmp_path):
    file, _ = valley(
        tmp_path, columns={"capacity_m3s": {"A": "1.2"}}, overrides={"outlets": {"capacity": "capacity_m3s"}}
    )
    outcome = pipeline.run(add(file, SCENARIOS), summary_only=True)
    rows = of(read_table(outcome.folder, "scenarios"), "A")
    for row in rows:
        over = tuple(float(row[name]) > 1.2 for name in ("base_peak_m3s", "peak_m3s"))
        told = {(False, False): "neither", (True, True): "both", (False, True): "scenario"}[over]
        assert row["over_capacity"] == told
    assert {row["over_capacity"] for row in rows} == {"neither", "both", "scenario"}
    assert {row["over_capacity"] for row in of(read_table(outcome.folder, "scenarios"), "B")} == {""}


def test_no_verdict_where_peaks_fall_in_the_scenario_alone(tmp_path):
    """A 2-year depth that the outlet layer supplies, under the 10-year depth of the base and over the scenario's."""
    supplied = {"capacity_m3s": {"A": "1.2"}, "depth_2yr_mm": {"A": "100"}}
    file, _ = valley(tmp_path, columns=supplied, overrides={"outlets": {"capacity": "capacity_m3s"}})
    drier = '[[scenario]]\nname = "drier"\nstorm = { depths = { "2" = "60 mm", "10" = "90 mm", "100" = "95 mm" } }\n'
    outcome = pipeline.run(add(file, drier), summary_only=True)
    (row,) = of(read_table(outcome.folder / "scenarios" / "drier", "outlets"), "A")
    assert "PEAKS_FALL" in row["flags"]
    assert row["exceeded_at_yr"] == "unknown"
    assert {row["over_capacity"] for row in of(read_table(outcome.folder, "scenarios"), "A")} == {"unknown"}


# Edits


def test_retime_of_an_unedited_run_gives_the_same_bytes(project):
    before = tables_of(project.parent / "out")
    pipeline.retime(project.parent / "out")
    assert tables_of(project.parent / "out") == before


def test_a_roughness_reaches_every_scenario(project):
    out = project.parent / "out"
    last = of(read_table(out, "segments"), "A")[-1]
    assert last["regime"] == "channel"
    edit(out, "segments", {"outlet_id": "A", "segment": last["segment"]}, roughness="0.09")
    pipeline.retime(out)
    places = (out, *(out / "scenarios" / name for name in ("same", "wetter", "built")))
    base, *others = (of(read_table(place, "segments"), "A") for place in places)
    assert others[0] == others[1] == base
    rough = [row for row in others[2] if row["roughness"] == "0.09"]
    assert [row["from_m"] for row in rough[:1]] == [last["from_m"]]
    assert rough[-1] == others[2][-1]
    assert {row["edited"] for row in rough} == {"true"}
    assert [row["to_m"] for row in others[2] if row not in rough][-1] == last["from_m"], "cut where the base is"


def test_a_channel_start_moved_by_hand_moves_in_a_scenario_that_is_cut_elsewhere(project):
    out = project.parent / "out"
    rows = of(read_table(out, "segments"), "A")
    channel = next(i for i, row in enumerate(rows) if row["regime"] == "channel")
    start = float(rows[channel]["from_m"]) + 45.0
    edit(out, "segments", {"outlet_id": "A", "segment": rows[channel - 1]["segment"]}, to_m=f"{start}")
    edit(out, "segments", {"outlet_id": "A", "segment": rows[channel]["segment"]}, from_m=f"{start}")
    pipeline.retime(out)
    for place in (out, out / "scenarios" / "built"):
        rows = of(read_table(place, "segments"), "A")
        begins = next(row for row in rows if row["regime"] == "channel")
        assert float(begins["from_m"]) == start
        ends = [float(row["to_m"]) for row in rows]
        assert [float(row["from_m"]) for row in rows] == [0.0, *ends[:-1]], "no gap, no overlap"
    (base,), (built,) = (of(read_table(place, "outlets"), "A") for place in (out, out / "scenarios" / "built"))
    assert float(built["channel_length_m"]) == float(base["channel_length_m"])


def test_supplied_values_stand_in_every_scenario_and_are_named(project):
    out = project.parent / "out"
    edit(out, "outlets", {"outlet_id": "B"}, curve_number="77.5", tc_h="0.8", area_km2="0.2")
    pipeline.retime(out)
    for name in ("same", "wetter", "built"):
        (row,) = of(read_table(out / "scenarios" / name, "outlets"), "B")
        assert (row["curve_number"], row["tc_h"], row["area_km2"]) == ("77.5", "0.8", "0.2")
        assert "OVERRIDE" in row["flags"]
    rows = read_table(out, "scenarios")
    assert {row["stands"] for row in of(rows, "B")} == {"curve_number tc_h"}
    assert {row["stands"] for row in of(rows, "A")} == {""}


def test_a_curve_number_of_a_class_reaches_it_in_a_scenario_of_other_areas(project):
    out = project.parent / "out"
    edit(out, "cover_shares", {"outlet_id": "A", "cover": "71"}, curve_number="66")
    pipeline.retime(out)
    shares = of(read_table(out / "scenarios" / "built", "cover_shares"), "A")
    assert {row["cover"]: float(row["curve_number"]) for row in shares}["71"] == 66.0
    assert "EDIT_LEFT_OUT" not in {row["flag"] for row in read_table(out / "scenarios" / "built", "flags")}


def test_edited_areas_of_cover_are_left_out_of_other_cover_and_say_so(project):
    out = project.parent / "out"
    shares = of(read_table(out, "cover_shares"), "A")
    move = 0.01
    for row, area in zip(shares, (move, -move), strict=True):
        edit(
            out, "cover_shares", {"outlet_id": "A", "cover": row["cover"]}, area_km2=repr(float(row["area_km2"]) + area)
        )
    pipeline.retime(out)
    flags = {name: {row["flag"] for row in of(read_table(out / "scenarios" / name, "flags"), "A")}
             for name in ("wetter", "built")}  # fmt: skip
    assert "EDIT_LEFT_OUT" in flags["built"]
    assert "EDIT_LEFT_OUT" not in flags["wetter"], "the land cover of the base"
    assert of(read_table(out / "scenarios" / "wetter", "cover_shares"), "A") == of(read_table(out, "cover_shares"), "A")


def test_edits_of_a_scenario_s_own_tables_are_refused(project):
    out = project.parent / "out"
    edit(out / "scenarios" / "built", "segments", {"outlet_id": "A", "segment": "1"}, note="mine")
    before = tables_of(out)
    with pytest.raises(InputRejected, match=r"scenarios/built/segments\.csv: file: was edited.*reaches every scenario"):
        pipeline.retime(out)
    assert tables_of(out) == before


def test_resume_keeps_edits_as_if_they_had_been_made_after_it(project):
    """Edit, then another storm and `run --resume`: the bytes of the other storm run first and edited then."""
    out, other = project.parent / "out", project.parent / "other"
    text = project.read_text(encoding="utf-8").replace('"7.2 in"', '"8 in"').replace("1.25", "1.3")

    def by_hand(folder):
        rows = of(read_table(folder, "segments"), "A")
        edit(folder, "segments", {"outlet_id": "A", "segment": rows[-1]["segment"]}, roughness="0.06", note="seen")
        edit(folder, "outlets", {"outlet_id": "B"}, tc_h="0.7")
        edit(folder, "cover_shares", {"outlet_id": "A", "cover": "41"}, curve_number="60")

    by_hand(out)
    pipeline.retime(out)
    project.write_text(text, encoding="utf-8")
    pipeline.run(project, resume=True, summary_only=True)
    pipeline.run(project, out=other, summary_only=True)
    assert tables_of(other) != tables_of(out)
    by_hand(other)
    pipeline.retime(other)
    assert tables_of(out) == tables_of(other)
    pipeline.retime(out)
    assert tables_of(out) == tables_of(other)


def test_resume_onto_another_terrain_refuses_to_lose_edits(project):
    out = project.parent / "out"
    edit(out, "outlets", {"outlet_id": "A"}, tc_h="0.7")
    before = tables_of(out)
    lower = walled(v_valley(70, 41, 0.05, 0.03))
    write_raster(project.parent / "dem.tif", lower[:, ::-1].copy(), transform_of(10.0, ORIGIN), "EPSG:32614")
    with pytest.raises(InputRejected, match="holds a person's edits of outlet 'A'"):
        pipeline.run(project, resume=True, summary_only=True)
    assert tables_of(out) == before


@settings(max_examples=25)
@given(data=st.data())
def test_edits_carried_onto_the_base_itself_are_the_edits(finished, data):
    """The general way of laying edits onto segments, tried where its answer is known: on the segments of the base."""
    about_run = manifest.read(finished)
    record, scheme = manifest.record(about_run), load_scheme("nlcd")
    onto = as_first(record, "si", scheme)
    first = of(by_rows(onto["segments"]), "A")
    rows = [dict(row) for row in first]
    held = set()
    for _ in range(data.draw(st.integers(1, 3))):
        i = data.draw(st.integers(0, len(rows) - 1))
        what = data.draw(st.sampled_from(["slope", "roughness", "regime", "cover", "move", "elevation", "note"]))
        if what in ("slope", "roughness"):
            rows[i][what] = "0.05"
            held.add(("segments", "A", rows[i]["segment"], what))
        elif what == "elevation":
            rows[i]["bottom_elevation_m"] = repr(float(rows[i]["bottom_elevation_m"]) - 0.01)
        elif what == "move" and i + 1 < len(rows):
            middle = 0.5 * (float(rows[i + 1]["from_m"]) + float(rows[i + 1]["to_m"]))
            rows[i]["to_m"] = rows[i + 1]["from_m"] = repr(middle)
        elif what == "regime":
            rows[i]["regime"] = "shallow"
        elif what == "cover":
            rows[i]["cover"] = "90"
        elif what == "note":
            rows[i]["note"] = "seen"
    now = dict(onto)
    now["segments"] = type(onto["segments"])(
        [*rows, *of(by_rows(onto["segments"]), "B")], columns=onto["segments"].columns, dtype=object
    )
    carrier = _SegmentCarrier(Edited(now, held), record, "si")
    got = carrier._laid("A", rows, first, [dict(row) for row in first])
    for name in ("from_m", "to_m", "regime", "cover", "slope", "note", "top_elevation_m", "bottom_elevation_m"):
        assert [row[name] for row in got] == [row[name] for row in rows], name
    assert {(key, stem) for _, _, key, stem in carrier.held} == {(key, stem) for _, _, key, stem in held}


def by_rows(frame):
    return [row for rows in by_outlet(frame).values() for row in rows]


# What is refused


@pytest.mark.parametrize(
    ("text", "told"),
    [
        ('name = "x"\nterrain = { stream_area = "1 km2" }', r"scenario\[1\]\.terrain: .*another project"),
        ('name = "x"\noutlets = { id = "a" }', r"scenario\[1\]\.outlets: .*another project"),
        ('name = "x"\nstorms = {}', r"scenario\[1\]\.storms: unknown key: did you mean 'storm'"),
        ('name = "x"', r"scenario\[1\]\.cover: replaces nothing"),
        ('cover = { raster = "copy.tif" }', r"scenario\[1\]\.name: missing"),
        ('name = "../x"\ncover = { raster = "copy.tif" }', r"scenario\[1\]\.name: .*cannot name a folder"),
        ('name = "base"\ncover = { raster = "copy.tif" }', r"scenario\[1\]\.name: .*not base"),
        ('name = "x"\ncover = { raster = "none.tif" }', r"scenario\[1\]\.cover\.raster: 'none.tif' does not exist"),
        ('name = "x"\ncover = { vector = "outlets.csv" }', r"scenario\[1\]\.cover\.field: missing"),
        ('name = "x"\ncover = { rastr = "copy.tif" }', r"scenario\[1\]\.cover\.rastr: unknown key: did you"),
        ('name = "x"\ncover = { scheme = "own.csv" }', r"scenario\[1\]\.cover\.scheme: 'own.csv' does not exist"),
        ('name = "x"\nsoils = { group = "E" }', r"scenario\[1\]\.soils\.group: 'E' is not one of"),
        ('name = "x"\nstorm = { depth_factor = 0.0 }', r"scenario\[1\]\.storm\.depth_factor"),
        ('name = "x"\nstorm = { distribution = "type_iv" }', r"scenario\[1\]\.storm\.distribution: 'type_iv' is"),
        ('name = "x"\nstorm = { depths = { "5" = "4 in" } }', r"scenario\[1\]\.storm\.depths: return periods 5, where"),
        ('name = "x"\nrunoff = { moisture = "IV" }', r"scenario\[1\]\.runoff\.moisture: 'IV' is not one of"),
        ('name = "x"\ncover = 3', r"scenario\[1\]\.cover"),
    ],
)  # fmt: skip
def test_what_is_wrong_is_named_before_computing(project, text, told):
    content = project.read_text(encoding="utf-8")
    project.write_text(content[: content.index("[[scenario]]")] + f"[[scenario]]\n{text}\n", encoding="utf-8")
    with pytest.raises(InputRejected, match=rf"(?m)^project\.toml: {told}") as caught:
        pipeline.check(project)
    assert len(caught.value.problems) <= 2, "said once, and what follows from it"


def test_names_are_unique_whatever_their_case(project):
    add(project, '[[scenario]]\nname = "Built"\ncover = { raster = "copy.tif" }\n')
    with pytest.raises(InputRejected, match=r"scenario\[4\]\.name: 'Built' is also the name of scenario 3"):
        pipeline.check(project)


def test_mapped_impervious_area_goes_with_its_own_cover(project):
    content = project.read_text(encoding="utf-8").replace('scheme = "nlcd"', 'scheme = "nlcd"\nimpervious = "copy.tif"')
    project.write_text(content, encoding="utf-8")
    with pytest.raises(InputRejected, match=r"scenario\[1\]\.cover\.impervious: missing") as caught:
        pipeline.check(project)
    assert len(caught.value.problems) == 2, "the two scenarios of other cover"
    project.write_text(content.replace('.tif" }', '.tif", impervious = "none" }'), encoding="utf-8")
    pipeline.check(project)


def test_a_broken_base_is_told_once(project):
    content = project.read_text(encoding="utf-8").replace('raster = "cover.tif"', 'raster = "gone.tif"')
    project.write_text(content.replace('group = "B"', 'group = "Z"'), encoding="utf-8")
    with pytest.raises(InputRejected) as caught:
        pipeline.check(project)
    assert sorted(problem.field for problem in caught.value.problems) == ["cover.raster", "soils.group"]
