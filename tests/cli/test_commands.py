"""The command line: words, exit statuses, and what it leaves alone."""

import importlib.metadata
import os
import shutil
import signal
import subprocess
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from projects import make_project, v_valley

from basinwright import catalogue, cli, pipeline, published
from basinwright.registry import methods

PROGRAM = [sys.executable, "-m", "basinwright"]


@pytest.fixture
def command(monkeypatch, capsys):
    """Give a function that runs a command line; it returns exit status, standard output and standard error."""

    def run(*arguments):
        monkeypatch.setattr(sys, "argv", ["basinwright", *map(str, arguments)])
        with pytest.raises(SystemExit) as left:
            cli.main()
        said = capsys.readouterr()
        return left.value.code or 0, said.out, said.err

    return run


def project(folder, **overrides):
    return make_project(folder, v_valley(30, 21, 0.05, 0.02), {"A": (29, 10)}, overrides=overrides)


class TestHelp:
    def test_imports_nothing_heavy(self):
        code = (
            "import sys; sys.argv[1:] = ['--help']\n"
            "from basinwright import cli\n"
            "try: cli.main()\n"
            "except SystemExit as left: print('LEFT', left.code)\n"
            "print(*sys.modules, sep='\\n')"
        )
        output = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True).stdout
        assert "LEFT 0" in output or "LEFT None" in output
        loaded = {line.split(".")[0] for line in output.splitlines()}
        heavy = {"numpy", "numba", "scipy", "pandas", "rasterio", "fiona", "pyogrio", "geopandas", "shapely", "pyproj",
                 "pydantic", "matplotlib", "pysheds"}  # fmt: skip
        assert not loaded & heavy

    def test_lists_every_command(self, command):
        status, out, _ = command("--help")
        assert status == 0
        for name in ("demo", "start", "check", "run", "retime", "methods", "report"):
            assert name in out

    def test_is_what_no_argument_gives(self, command):
        assert command()[1] == command("--help")[1]

    def test_of_run_names_its_options(self, command):
        _, out, _ = command("run", "--help")
        for option in ("--out", "--jobs", "--resume", "--overwrite", "--summary-only", "--also-at"):
            assert option in out

    def test_version(self, command):
        assert command("--version")[:2] == (0, importlib.metadata.version("basinwright") + "\n")


class TestWrongCommandLine:
    @pytest.mark.parametrize(
        "arguments",
        [
            ("run",), ("run", "a.toml", "--fast"), ("sprint",), ("run", "a.toml", "--jobs", "0"), ("methods", "--all"),
            ("run", "a.toml", "--jobs", "many"), ("run", "a.toml", "b.toml"), ("retime",), ("run", "a.toml", "--out"),
        ],
    )  # fmt: skip
    def test_exit_2_in_one_line(self, command, arguments):
        status, out, err = command(*arguments)
        assert (status, out) == (2, "")
        assert err.startswith("command line: ")
        assert err.count("\n") == 1

    def test_cells_that_are_not_coarser(self, command, tmp_path):
        status, _, err = command("run", project(tmp_path), "--also-at", "10 m")
        assert status == 2
        assert "command line: --also-at '10 m': is not coarser" in err
        assert not (tmp_path / "out").exists()


class TestStatus:
    def test_of_check(self, command, tmp_path):
        status, out, err = command("check", project(tmp_path))
        assert (status, err) == (0, "")
        assert "ready to run" in out
        assert "30 x 21 cells of 10 m" in out
        assert not (tmp_path / "out").exists()

    def test_0_of_run_and_retime(self, command, tmp_path):
        status, out, _ = command("run", project(tmp_path), "--summary-only", "--jobs", "1")
        assert status == 0
        assert "1 outlets: " in out
        assert str(tmp_path / "out") in out.replace("\n", "")
        assert command("retime", tmp_path / "out")[0] == 0

    def test_1_of_run_and_retime(self, command, tmp_path):
        file = make_project(tmp_path, v_valley(30, 21, 0.05, 0.02), {"A": (29, 10), "far": (500, 500)})
        assert command("run", file, "--summary-only")[0] == 1
        assert command("retime", tmp_path / "out")[0] == 1

    def test_2_of_retime(self, command, tmp_path):
        status, _, err = command("retime", tmp_path / "nowhere")
        assert status == 2
        assert "run.json: does not exist: name the folder of a finished run" in err

    def test_70_is_said_in_words_and_traced_on_request(self, command, tmp_path, monkeypatch):
        def broken(*_, **__):
            raise ZeroDivisionError("a fault")

        monkeypatch.setattr(pipeline, "run", broken)
        status, _, err = command("run", "a.toml")
        assert status == 70
        assert "ZeroDivisionError: a fault" in err
        assert "Traceback" not in err
        monkeypatch.setattr(sys, "argv", ["basinwright", "run", "a.toml", "--debug"])
        with pytest.raises(ZeroDivisionError):
            cli.main()

    def test_130_when_interrupted(self, command, tmp_path, monkeypatch):
        def interrupted(*_, **__):
            raise KeyboardInterrupt

        monkeypatch.setattr(pipeline, "run", interrupted)
        status, _, err = command("run", "a.toml")
        assert status == 130
        assert err == "Interrupted. Nothing was replaced; basinwright run ... --resume continues.\n"


def test_a_real_interruption(tmp_path):
    """SIGINT in the middle of a run of another process: 130, nothing in place, and the run can go on."""
    file = project(tmp_path)
    with subprocess.Popen([*PROGRAM, "run", file, "--summary-only"], stderr=subprocess.PIPE, text=True) as process:
        for line in process.stderr:
            if "Conditioning" in line:
                break
        process.send_signal(signal.SIGINT)
        err = process.stderr.read()
        assert process.wait() == 130
    assert "Interrupted" in err
    assert "Traceback" not in err
    assert not (tmp_path / "out").exists()
    pipeline.run(file, resume=True, summary_only=True)
    assert (tmp_path / "out" / "run.json").is_file()


def test_a_reader_that_leaves_early_is_no_fault():
    line = f"{sys.executable} -m basinwright methods | head -1"
    done = subprocess.run(["bash", "-c", line], capture_output=True, text=True, check=True)
    assert done.stdout == "Timing methods (timing.adopt)\n"
    assert "Traceback" not in done.stderr
    assert "fault of basinwright" not in done.stderr


class TestStart:
    def test_what_it_writes_lacks_nothing_but_the_inputs(self, command, tmp_path):
        """Every line of `check` names a placeholder; filled in, the file is ready to run."""
        folder = tmp_path / "new" / "county"
        assert command("start", folder)[0] == 0
        file = folder / "project.toml"
        text = file.read_text(encoding="utf-8")
        placeholders = [part.split(">")[0] for part in text.split('"<')[1:]]
        status, _, err = command("check", file)
        assert status == 2
        lines = err.splitlines()
        assert len(lines) == len(placeholders)
        assert all(any(f"<{name}>" in line for name in placeholders) for line in lines), lines

        make_project(folder / "made", v_valley(30, 21, 0.05, 0.02), {"A": (29, 10)})
        for name, given in (
            ("dem.tif", "made/dem.tif"), ("landcover.tif", "made/cover.tif"), ("soils.tif", "made/soils.tif"),
            ("outlets.gpkg", "made/outlets.csv"),
        ):  # fmt: skip
            text = text.replace(f"<{name}>", given)
        soils = folder / "made" / "soils.tif"
        shutil.copy(folder / "made" / "cover.tif", soils)
        import rasterio

        with rasterio.open(soils, "r+") as raster:
            raster.write(np.full(raster.shape, 2, np.uint8), 1)
        for placeholder in placeholders:
            text = text.replace(f"<{placeholder}>", placeholder)
        text = text.replace("[cover]", 'crs = "EPSG:32614"\n\n[cover]', 1)
        file.write_text(text, encoding="utf-8")
        status, out, err = command("check", file)
        assert (status, err) == (0, "")
        assert "ready to run" in out

    def test_leaves_a_project_alone(self, command, tmp_path):
        (tmp_path / "project.toml").write_text("mine")
        status, _, err = command("start", tmp_path)
        assert status == 2
        assert "exists already" in err
        assert (tmp_path / "project.toml").read_text() == "mine"

    def test_where_no_folder_can_be(self, command, tmp_path):
        (tmp_path / "file").write_text("mine")
        status, _, err = command("start", tmp_path / "file" / "county")
        assert status == 2
        assert "cannot be written" in err


class TestDemo:
    @pytest.fixture
    def ran(self, monkeypatch):
        """Keep the demo from running: what it copies is looked at."""
        files = []

        def run(file, **options):
            files.append((file, options))
            raise KeyboardInterrupt

        monkeypatch.setattr(pipeline, "run", run)
        return files

    def test_copies_the_sample_and_runs_it_twice(self, command, tmp_path, ran):
        folder = tmp_path / "demo"
        assert command("demo", folder)[0] == 130
        copied = {path.name: path.read_bytes() for path in folder.iterdir()}
        assert {"project.toml", "dem.tif", "outlets.gpkg", "README.md"} <= copied.keys()
        (folder / "out").mkdir()
        (folder / "notes.txt").write_text("mine")
        assert command("demo", folder)[0] == 130
        assert {path.name: path.read_bytes() for path in folder.iterdir() if path.name in copied} == copied
        assert (folder / "notes.txt").read_text() == "mine"
        assert [file for file, _ in ran] == [folder / "project.toml"] * 2

    def test_its_inputs_are_sound(self, command, tmp_path, ran):
        command("demo", tmp_path / "demo")
        assert command("check", tmp_path / "demo" / "project.toml")[0] == 0
        before = {path.name: path.read_bytes() for path in (tmp_path / "demo").iterdir()}
        assert command("demo", tmp_path / "demo")[0] == 130
        assert {path.name: path.read_bytes() for path in (tmp_path / "demo").iterdir()} == before

    @pytest.mark.parametrize("name", ["thesis.txt", "project.toml", "dem.tif"])
    def test_leaves_what_is_not_the_sample_alone(self, command, tmp_path, ran, name):
        (tmp_path / name).write_text("mine")
        status, _, err = command("demo", tmp_path)
        assert status == 2
        assert "holds " in err
        assert [path.name for path in tmp_path.iterdir()] == [name]
        assert (tmp_path / name).read_text() == "mine"
        assert not ran

    def test_leaves_a_changed_sample_alone(self, command, tmp_path, ran):
        command("demo", tmp_path / "demo")
        file = tmp_path / "demo" / "project.toml"
        changed = file.read_text(encoding="utf-8") + "# mine\n"
        file.write_text(changed, encoding="utf-8")
        status, _, err = command("demo", tmp_path / "demo")
        assert status == 2
        assert "holds another project.toml than the sample's" in err
        assert file.read_text(encoding="utf-8") == changed

    def test_where_no_folder_can_be(self, command, tmp_path, ran):
        (tmp_path / "file").write_text("mine")
        for place in (tmp_path / "file", tmp_path / "file" / "demo"):
            status, _, err = command("demo", place)
            assert status == 2
            assert "cannot be written" in err


class TestMethods:
    def test_prints_all_that_is_registered_with_source_and_range(self, command):
        status, out, _ = command("methods")
        assert status == 0
        for kind in catalogue.HEADINGS:
            assert catalogue.HEADINGS[kind] in out
            for entry in methods(kind).values():
                place = out.index(f"\n{entry.key}: {entry.name}\n")
                block = out[place : out.index("\n\n", place + 1)]
                assert f"source  {entry.source}" in block
                assert "range   " in block
                for name, bounds in entry.valid_range.items():
                    assert f"{name}: {bounds.printed or ''}" in block
        for name in published.names():
            assert f"\n{name}: {published.table(name).title}\n    source  {published.table(name).source}" in out

    def test_every_adopted_method_and_shape_is_among_them(self):
        from basinwright.project import Timing, UnitHydrograph

        assert Timing().adopt in methods("timing")
        assert UnitHydrograph().shape in methods("unit_hydrograph")


def test_edits_are_not_lost_by_resuming(command, tmp_path):
    file = project(tmp_path)
    command("run", file, "--summary-only")
    table = tmp_path / "out" / "segments.csv"
    edited = table.read_bytes().replace(b",sheet,71,", b",sheet,41,", 1)
    assert edited != table.read_bytes()
    table.write_bytes(edited)
    for _ in range(2):
        assert command("run", file, "--resume", "--summary-only")[0] == 0
        assert b",sheet,41," in table.read_bytes()
        assert command("retime", tmp_path / "out")[0] == 0
        assert b",sheet,41," in table.read_bytes()
    assert command("run", file, "--resume", "--overwrite", "--summary-only")[0] == 0
    assert b",sheet,71," in table.read_bytes()


def test_paths_with_spaces_and_letters_of_any_script(command, tmp_path):
    folder = tmp_path / "Žďár nad Sázavou 河"
    assert command("run", project(folder), "--summary-only", "--out", folder / "výsledky 1")[0] == 0
    assert command("retime", folder / "výsledky 1")[0] == 0


def test_from_another_folder(command, tmp_path, monkeypatch):
    project(tmp_path / "county")
    monkeypatch.chdir(tmp_path)
    assert command("run", "county/project.toml", "--summary-only")[0] == 0
    monkeypatch.chdir(tmp_path / "county")
    assert command("retime", "out")[0] == 0
    assert command("run", "project.toml", "--overwrite", "--summary-only")[0] == 0
    assert sorted(path.name for path in Path().iterdir() if path.name.startswith(".")) == []
    assert time.time() - os.stat("out/run.json").st_mtime < 600
