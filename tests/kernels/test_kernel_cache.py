"""Where the machine code of the kernels is kept."""

import os
import subprocess
import sys
from pathlib import Path

SCRIPT = "import sys, basinwright.kernels, os; assert 'numba' not in sys.modules; print(os.environ['NUMBA_CACHE_DIR'])"


def cache_folder(**environment):
    env = {name: value for name, value in os.environ.items() if name != "NUMBA_CACHE_DIR"} | environment
    done = subprocess.run([sys.executable, "-c", SCRIPT], env=env, check=True, capture_output=True, text=True)
    return Path(done.stdout.strip())


def test_cache_is_keyed_by_the_source_in_the_users_cache_folder(tmp_path):
    from basinwright.kernels import source_hash

    folder = cache_folder(XDG_CACHE_HOME=str(tmp_path), LOCALAPPDATA=str(tmp_path), HOME=str(tmp_path))
    assert folder.is_relative_to(tmp_path)
    assert folder.name.endswith(source_hash())


def test_a_folder_named_by_the_user_stands(tmp_path):
    assert cache_folder(NUMBA_CACHE_DIR=str(tmp_path / "mine")) == tmp_path / "mine"


def test_without_a_writable_cache_folder_a_temporary_one_is_used(tmp_path):
    blocked = tmp_path / "file"
    blocked.touch()
    folder = cache_folder(XDG_CACHE_HOME=str(blocked), LOCALAPPDATA=str(blocked), HOME=str(blocked))
    assert folder.name.startswith("basinwright-kernels-")
    assert not folder.exists()  # gone with the process
