"""What is built is what is installed: wheel and source distribution carry everything, and the wheel runs alone."""

import os
import re
import shutil
import subprocess
import sys
import tarfile
import zipfile
from pathlib import Path

import pytest
import yaml
from projects import make_project, v_valley, walled

ROOT = Path(__file__).parents[2]


@pytest.fixture(scope="module")
def dist(tmp_path_factory):
    """Build both from a copy of what git tracks, without network."""
    if not (ROOT / ".git").exists():
        pytest.skip("not a clone")
    source = tmp_path_factory.mktemp("source")
    listed = subprocess.run(["git", "ls-files", "-z"], cwd=ROOT, capture_output=True, check=True).stdout.decode()
    for name in filter(None, listed.split("\0")):
        if (ROOT / name).is_file():
            (source / name).parent.mkdir(parents=True, exist_ok=True)
            shutil.copyfile(ROOT / name, source / name)
    out = tmp_path_factory.mktemp("dist")
    command = [sys.executable, "-m", "build", "--no-isolation", "--outdir", str(out), str(source)]
    done = subprocess.run(command, capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stdout[-2000:] + done.stderr[-2000:]
    return out


def test_both_carry_licence_citation_types_tables_and_sample(dist):
    (wheel,), (source,) = dist.glob("*.whl"), dist.glob("*.tar.gz")
    with zipfile.ZipFile(wheel) as archive:
        inside = set(archive.namelist())
        metadata = archive.read(next(name for name in inside if name.endswith("METADATA"))).decode()
    tracked = {path.relative_to(ROOT / "src").as_posix() for path in (ROOT / "src").rglob("*")
               if path.is_file() and path.suffix not in (".pyc", ".nbi", ".nbc")}  # fmt: skip
    assert {name for name in tracked if "__pycache__" not in name} <= inside
    assert any(name.endswith("licenses/LICENSE") for name in inside)
    assert {f"basinwright/sample_data/{name}" for name in ("project.toml", "dem.tif", "outlets.gpkg")} <= inside
    assert "License-Expression: GPL-3.0-or-later" in metadata
    assert "Requires-Python: >=3.11" in metadata
    assert wheel.name.endswith("-py3-none-any.whl"), "no compiler"
    with tarfile.open(source) as archive:
        names = {name.partition("/")[2] for name in archive.getnames()}
    assert {"LICENSE", "CITATION.cff", "README.md", "pyproject.toml", "src/basinwright/py.typed",
            "sample_data/project.toml"} <= names  # fmt: skip


def test_the_wheel_runs_by_itself(dist, tmp_path):
    """On a terrain so small that nothing is compiled; .ci/packages runs the sample, in bare environments."""
    site = tmp_path / "site"
    with zipfile.ZipFile(next(dist.glob("*.whl"))) as archive:
        archive.extractall(site)
    # Ours from the wheel alone, the libraries from this environment; nothing of the clone is on the path.
    environment = {key: value for key, value in os.environ.items() if key != "PYTHONPATH"}
    environment |= {"PYTHONPATH": str(site), "NUMBA_DISABLE_JIT": "1"}

    def run(*arguments):
        command = [sys.executable, *arguments]
        done = subprocess.run(command, cwd=tmp_path, env=environment, capture_output=True, text=True, check=False)
        assert done.returncode == 0, done.stderr[-2000:]
        return done.stdout

    where = run("-c", "import basinwright; print(basinwright.__file__)").strip()
    assert where.startswith(str(site))
    run("-c", "from basinwright.pipeline import copy_sample; from pathlib import Path; copy_sample(Path('demo'))")
    assert "ready to run" in run("-m", "basinwright", "check", "demo/project.toml")
    file = make_project(tmp_path / "valley", walled(v_valley(12, 9, 0.05, 0.02)), {"A": (10, 7)})
    assert "1 outlets: 0 ok, 1 flagged, 0 failed." in run("-m", "basinwright", "run", str(file))
    assert "gives" in run("-m", "basinwright", "explain", "valley/out", "A", "lag_h")


def test_the_citation_says_what_the_package_says():
    citation = yaml.safe_load((ROOT / "CITATION.cff").read_text(encoding="utf-8"))
    project = (ROOT / "pyproject.toml").read_text(encoding="utf-8")
    assert citation["version"] == re.search(r'^version = "(.*)"$', project, re.MULTILINE)[1]
    assert citation["license"] == re.search(r'^license = "(.*)"$', project, re.MULTILINE)[1]
    assert (citation["cff-version"], citation["type"]) == ("1.2.0", "software")
    assert citation["authors"]
    assert {"message", "title"} <= set(citation)
