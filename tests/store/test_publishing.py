"""A run appears whole or not at all: crashes at every step, resumption, folders of others, two runs at once."""

import json
import os
import random
import re
import resource
import shutil
import signal
import sys
import time
from pathlib import Path

import numpy as np
import pytest
from projects import make_project, read_table, v_valley

from basinwright import pipeline
from basinwright.errors import InputRejected, PublishError
from basinwright.store import RunFolder, code_version

TIMES = ("finished", "host", "seconds", "peak_memory_mb", "runs")


def files_of(folder):
    """The bytes of every file of a run but its store; the manifest without times."""
    files = {
        path.relative_to(folder).as_posix(): path.read_bytes()
        for path in sorted(folder.rglob("*"))
        if path.is_file() and ".store" not in path.parts
    }
    if "run.json" in files:
        files["run.json"] = without_times(json.loads(files["run.json"]))
    return files


def without_times(value):
    """Leave out times, and where the inputs lie."""
    if isinstance(value, dict):
        kept = {key: without_times(entry) for key, entry in value.items() if key not in TIMES}
        return kept | {"path": Path(kept["path"]).name} if "path" in kept else kept
    return [without_times(entry) for entry in value] if isinstance(value, list) else value


def set_depth(file, depth):
    """Give the 100-year storm another depth."""
    text = file.read_text(encoding="utf-8")
    start = text.index('"100": ') if '"100": ' in text else text.index('"100" = ') + len('"100" = ')
    end = text.index('"', start + 1) + 1
    file.write_text(text[:start] + f'"{depth}"' + text[end:], encoding="utf-8")


@pytest.fixture(scope="module")
def county(tmp_path_factory):
    """A finished run, and what it becomes with a deeper storm, and after an edit."""
    code_version()  # kept by this process and its forks, whatever happens to the source meanwhile
    folder = tmp_path_factory.mktemp("county")
    rough = np.random.default_rng(3).uniform(0.0, 0.02, (40, 31))
    file = make_project(folder, v_valley(40, 31, 0.05, 0.02) + rough, {"A": (39, 15), "B": (20, 15)})
    pipeline.run(file, summary_only=True)
    return folder


@pytest.fixture(scope="module")
def whole(county, tmp_path_factory):
    """The files of a run with layers, rasters and report."""
    out = tmp_path_factory.mktemp("whole") / "out"
    return files_of(pipeline.run(county / "project.toml", out=out).folder)


@pytest.fixture
def project(county, tmp_path):
    """A copy of the county."""
    return Path(shutil.copytree(county, tmp_path / "county")) / "project.toml"


def in_a_fork(work, *, at_step=None, after_s=None):
    """Do some work in a forked process that dies at a step of the file system or after a time; return its status."""
    sys.stdout.flush()
    child = os.fork()
    if child == 0:
        try:
            if at_step is not None:
                sys.addaudithook(dying_at(at_step))
            work()
        except BaseException:
            os._exit(1)
        os._exit(0)
    if after_s is not None:
        time.sleep(after_s)
        os.kill(child, signal.SIGKILL)
    return os.waitpid(child, 0)[1]


STEPS = {"os.rename", "os.remove", "os.mkdir", "os.rmdir", "os.link", "shutil.rmtree"}


def dying_at(step):
    """Return an audit hook that ends the process at once before a step that changes files is done."""
    left = [step]

    def hook(event, arguments):
        writes = event == "open" and isinstance(arguments[1], str) and set(arguments[1]) & set("wxa+")
        if event in STEPS or writes:
            left[0] -= 1
            if left[0] < 0:
                os.kill(os.getpid(), signal.SIGKILL)

    return hook


def count_steps(work):
    """Count the steps that the work takes, in a fork."""
    read, write = os.pipe()
    child = os.fork()
    if child == 0:
        count = [0]

        def hook(event, arguments):
            if event in STEPS or (
                event == "open" and isinstance(arguments[1], str) and set(arguments[1]) & set("wxa+")
            ):
                count[0] += 1

        sys.addaudithook(hook)
        work()
        os.write(write, str(count[0]).encode())
        os._exit(0)
    os.waitpid(child, 0)
    os.close(write)
    with os.fdopen(read) as stream:
        return int(stream.read())


def around(folder):
    return sorted(path.name for path in folder.parent.iterdir() if path.name.startswith(f".{folder.name}"))


class TestCrash:
    """A process that dies at any step, or moment, leaves the old run or the new one, or what the next command mends."""

    def check(self, work, mend, final, before, after, reset, steps, kills=0, seconds=1.0):
        """Let the work die at steps and at random moments; see what stands, and that mending gives the new run."""
        generator = random.Random(7)
        deaths = [{"at_step": step} for step in steps] + [
            {"after_s": generator.uniform(0.0, seconds)} for _ in range(kills)
        ]
        seen = set()
        for death in deaths:
            reset()
            in_a_fork(work, **death)
            standing = files_of(final) if final.exists() else None
            seen.add("none" if standing is None else "old" if standing == before else "new")
            assert standing in (None, before, after), death
            mend()
            assert files_of(final) == after, death
            assert around(final) == [], death
        return seen

    def test_retime(self, project):
        final = project.parent / "out"
        roughness = read_table(final, "segments")[1]["roughness"].encode()
        table = final / "segments.csv"
        table.write_bytes(table.read_bytes().replace(roughness, b"0.4", 1))
        (final / "note.txt").write_text("a person's")
        start = project.parent / "start"
        shutil.copytree(final, start)
        before = files_of(final)
        pipeline.retime(final)
        after = files_of(final)
        assert after != before

        def reset():
            shutil.rmtree(final, ignore_errors=True)
            shutil.copytree(start, final)

        def work():
            pipeline.retime(final)

        reset()
        total = count_steps(work)
        steps = sorted({*range(0, total, max(1, total // 5)), *range(total - 8, total)})
        seen = self.check(work, work, final, before, after, reset, steps)
        assert {"old", "new"} <= seen

    def test_run_that_replaces_another(self, project):
        final = project.parent / "out"
        start = project.parent / "start"
        shutil.copytree(final, start)
        before = files_of(final)
        set_depth(project, "9 in")

        def work():
            pipeline.run(project, overwrite=True, summary_only=True)

        def mend():
            pipeline.run(project, resume=True, summary_only=True)

        def reset():
            for path in project.parent.glob(".out.*"):
                shutil.rmtree(path) if path.is_dir() else path.unlink()
            shutil.rmtree(final, ignore_errors=True)
            shutil.copytree(start, final)

        started = time.monotonic()
        work()
        seconds = time.monotonic() - started
        after = files_of(final)
        reset()
        total = count_steps(work)
        reset()
        steps = sorted({*range(0, total, max(1, total // 4)), *range(total - 6, total)})
        seen = self.check(work, mend, final, before, after, reset, steps, kills=10, seconds=seconds)
        assert {"old", "new"} <= seen

    def test_first_run(self, project):
        final = project.parent / "out"
        after = files_of(final)
        shutil.rmtree(final)

        def work():
            pipeline.run(project, summary_only=True)

        def mend():
            pipeline.run(project, resume=True, summary_only=True)

        def reset():
            shutil.rmtree(final, ignore_errors=True)

        total = count_steps(work)
        seen = self.check(work, mend, final, None, after, reset, range(0, total, max(1, total // 6)), kills=6)
        assert "none" in seen

    def test_a_run_with_everything(self, project):
        """Layers, rasters, report, a scenario and a coarser cell size, killed at random moments."""
        with project.open("a", encoding="utf-8") as stream:
            stream.write('[[scenario]]\nname = "wet"\nrunoff = { moisture = "III" }\n')
        final = project.parent / "out"
        shutil.rmtree(final)

        def work():
            pipeline.run(project, also_at=["20 m"])

        def mend():
            pipeline.run(project, also_at=["20 m"], resume=True)

        def reset():
            shutil.rmtree(final, ignore_errors=True)

        work()
        reset()
        started = time.monotonic()
        work()
        seconds = time.monotonic() - started
        after = files_of(final)
        self.check(work, mend, final, None, after, reset, [], kills=4, seconds=seconds)

    @pytest.mark.parametrize("complete", [True, False])
    def test_between_the_two_renames(self, project, complete):
        """The old run has stepped aside and the new one is not in place: the new one if it is whole, else the old."""
        folder = RunFolder(project.parent / "out")
        old = files_of(folder.final)
        shutil.copytree(folder.final, folder.partial)
        (folder.partial / "outlets.csv").write_text("new")
        if not complete:
            (folder.partial / "run.json").unlink()
        folder.final.rename(folder.previous)
        with folder.locked():
            pass
        assert ((folder.final / "outlets.csv").read_text() == "new") == complete
        assert complete or files_of(folder.final) == old
        assert not folder.previous.exists()


class TestFullDisk:
    """A disk that takes no more: nothing is put in place, the words say what to do, and the run goes on afterwards."""

    @pytest.mark.parametrize("most_bytes", [1_000, 9_000, 30_000, 150_000])
    def test_run(self, project, whole, most_bytes):
        final, said = project.parent / "out", project.parent / "said"
        before = files_of(final)

        def work():
            resource.setrlimit(resource.RLIMIT_FSIZE, (most_bytes, most_bytes))
            try:
                pipeline.run(project, overwrite=True)
            except PublishError as error:
                said.write_text(str(error))

        assert in_a_fork(work) == 0
        what = r"out: folder: cannot be written \(File too large; [\d,]+ MB free\): make room, then .*--resume"
        assert re.search(what, said.read_text())
        assert files_of(final) == before
        pipeline.run(project, resume=True)
        assert files_of(final) == whole

    def test_retime_leaves_nothing_behind(self, project):
        final = project.parent / "out"
        before = files_of(final)

        def work():
            resource.setrlimit(resource.RLIMIT_FSIZE, (1_000, 1_000))
            with pytest.raises(PublishError, match="File too large"):
                pipeline.retime(final)

        assert in_a_fork(work) == 0
        assert files_of(final) == before
        assert around(final) == []

    def test_what_is_no_matter_of_the_disk_is_not_told_as_one(self, project, monkeypatch):
        from basinwright.outputs import writing

        def failing(*_):
            raise ZeroDivisionError

        monkeypatch.setattr(writing, "write_tables", failing)
        with pytest.raises(ZeroDivisionError):
            pipeline.run(project, overwrite=True, summary_only=True)


class TestResume:
    def runs(self, folder):
        return {stage["stage"] for stage in json.loads((folder / "run.json").read_text())["stages"] if stage["runs"]}

    def test_nothing_is_done_twice(self, project):
        before = files_of(project.parent / "out")
        os.utime(project.parent / "dem.tif")
        pipeline.run(project, resume=True, summary_only=True)
        assert self.runs(project.parent / "out") == {"hydrology"}
        assert files_of(project.parent / "out") == before

    def test_another_storm_needs_no_terrain(self, project):
        set_depth(project, "9 in")
        pipeline.run(project, resume=True, summary_only=True)
        assert self.runs(project.parent / "out") == {"tables", "hydrology"}
        resumed = files_of(project.parent / "out")
        pipeline.run(project, overwrite=True, summary_only=True)
        assert files_of(project.parent / "out") == resumed

    def test_other_land_cover_needs_no_routing(self, project):
        text = project.read_text().replace('"nlcd"', '"nlcd_arid"')
        project.write_text(text)
        pipeline.run(project, resume=True, summary_only=True)
        assert {"cover", "tables", "hydrology"} <= self.runs(project.parent / "out")
        assert not self.runs(project.parent / "out") & {"elevation", "routing", "basins", "paths"}

    def test_other_terrain_needs_everything(self, project):
        everything = {stage["stage"] for stage in json.loads((project.parent / "out/run.json").read_text())["stages"]}
        rough = np.random.default_rng(4).uniform(0.0, 0.02, (40, 31))
        make_project(project.parent, v_valley(40, 31, 0.05, 0.02) + rough, {"A": (39, 15), "B": (20, 15)})
        pipeline.run(project, resume=True, summary_only=True)
        assert self.runs(project.parent / "out") == everything

    def test_after_an_interruption(self, project, monkeypatch):
        from basinwright.pipeline import terrain_half

        final = project.parent / "out"
        after = files_of(final)
        shutil.rmtree(final)

        def interrupted(*_):
            raise KeyboardInterrupt

        with monkeypatch.context() as patch:
            patch.setattr(terrain_half, "_paths", interrupted)
            with pytest.raises(KeyboardInterrupt):
                pipeline.run(project, summary_only=True)
        assert not final.exists()
        pipeline.run(project, resume=True, summary_only=True)
        assert files_of(final) == after
        assert not self.runs(final) & {"elevation", "routing", "cover", "basins"}
        assert around(final) == []

    def test_without_resume_nothing_is_taken_over(self, project):
        pipeline.run(project, overwrite=True, summary_only=True)
        assert "routing" in self.runs(project.parent / "out")


class TestFolder:
    def test_a_second_run_is_refused(self, project):
        final = project.parent / "out"
        before = files_of(final)
        with RunFolder(final).locked():
            for work in (
                lambda: pipeline.run(project, overwrite=True),
                lambda: pipeline.run(project, resume=True),
                lambda: pipeline.retime(final),
            ):
                with pytest.raises(InputRejected, match="another run is writing this folder"):
                    work()
        assert files_of(final) == before
        pipeline.retime(final)

    def test_what_others_put_there_survives(self, project):
        final = project.parent / "out"
        (final / "review notes.txt").write_text("mine")
        (final / "photos").mkdir()
        (final / "photos" / "culvert.jpg").write_text("mine")
        pipeline.run(project, overwrite=True, summary_only=True)
        pipeline.retime(final)
        pipeline.run(project, resume=True, summary_only=True)
        assert (final / "review notes.txt").read_text() == "mine"
        assert (final / "photos" / "culvert.jpg").read_text() == "mine"
        assert around(final) == []

    def test_what_others_put_there_under_a_name_that_is_ours_now(self, project):
        final = project.parent / "out"
        (final / "hydrographs.csv").write_text("mine")
        pipeline.run(project, overwrite=True)
        assert (final / "hydrographs.csv.kept").read_text() == "mine"
        assert (final / "hydrographs.csv").read_text().startswith("outlet_id,")

    def test_overwrite_leaves_nothing_of_the_run_before(self, project):
        final = project.parent / "out"
        pipeline.run(project, overwrite=True)
        assert (final / "terrain").is_dir()
        pipeline.run(project, overwrite=True, summary_only=True)
        assert not (final / "terrain").exists()
        assert not (final / "hydrographs.csv").exists()

    def test_an_empty_folder_is_taken(self, project):
        (project.parent / "other").mkdir()
        pipeline.run(project, out=project.parent / "other", summary_only=True)
        assert (project.parent / "other" / "run.json").is_file()
        assert around(project.parent / "other") == []

    def test_folders_on_the_way_are_made(self, project):
        pipeline.run(project, out=project.parent / "a" / "b" / "c", summary_only=True)
        assert (project.parent / "a" / "b" / "c" / "run.json").is_file()

    def test_a_link_stays_a_link(self, project):
        final, link = project.parent / "out", project.parent / "latest"
        link.symlink_to(final)
        pipeline.retime(link)
        pipeline.run(project, out=link, overwrite=True, summary_only=True)
        assert link.is_symlink()
        assert files_of(link) == files_of(final)

    @pytest.mark.parametrize("fails", [1, 2])
    def test_a_rename_that_fails_leaves_the_run_as_it_was(self, project, monkeypatch, fails):
        final = project.parent / "out"
        before, rename, calls = files_of(final), Path.rename, []

        def failing(path, target):
            if Path(target).name in ("out", ".out.previous"):
                calls.append(target)
                if len(calls) == fails:
                    raise OSError(28, "No space left on device")
            return rename(path, target)

        monkeypatch.setattr(Path, "rename", failing)
        with pytest.raises(PublishError, match="could not be put in place"):
            pipeline.run(project, overwrite=True, summary_only=True)
        monkeypatch.undo()
        assert files_of(final) == before
        pipeline.run(project, resume=True, summary_only=True)
        assert files_of(final) == before
        assert around(final) == []

    def test_a_disk_that_does_not_flush_leaves_the_run_as_it_was(self, project, monkeypatch):
        final = project.parent / "out"
        before = files_of(final)

        def failing(_):
            raise OSError(5, "Input/output error")

        monkeypatch.setattr(os, "fsync", failing)
        with pytest.raises(PublishError):
            pipeline.retime(final)
        monkeypatch.undo()
        assert files_of(final) == before
