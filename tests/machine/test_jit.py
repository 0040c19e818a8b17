"""Where compiled kernels are kept: by source, out of harm's way, and announced."""

from __future__ import annotations

import os
import shutil
import subprocess
import sys
from pathlib import Path

import pytest

import mcx
from mcx.machine.jit import COMPILED, cache_folder, is_cold

SHOW = "from mcx.machine.jit import cache_folder; print(cache_folder())"


def folder_of(package: Path, **environment: str) -> Path:
    """The cache folder that a fresh process of a copy of the package takes."""
    done = subprocess.run([sys.executable, "-c", SHOW], capture_output=True, text=True, check=True, cwd=package,
                          env={**os.environ, **environment})  # fmt: skip
    return Path(done.stdout.strip())


@pytest.fixture
def package(tmp_path: Path) -> Path:
    """A folder with a copy of the package in it."""
    shutil.copytree(Path(mcx.__file__).parent, tmp_path / "copy" / "mcx", ignore=shutil.ignore_patterns("__pycache__"))
    return tmp_path / "copy"


@pytest.mark.parametrize("source", ["tape/ops.py", "machine/forms.py", "machine/special.py"])
def test_a_changed_source_has_a_folder_of_its_own(package: Path, source: str, tmp_path: Path):
    """Renumbering an operation, or touching any kernel, cannot find code compiled before."""
    before = folder_of(package, NUMBA_CACHE_DIR=str(tmp_path))
    assert folder_of(package, NUMBA_CACHE_DIR=str(tmp_path)) == before
    assert before.is_relative_to(tmp_path)
    path = package / "mcx" / source
    path.write_text(path.read_text() + "\n# another version\n")
    assert folder_of(package, NUMBA_CACHE_DIR=str(tmp_path)) != before


def test_the_users_cache_directory(package: Path, tmp_path: Path):
    """Without NUMBA_CACHE_DIR kernels are kept under XDG_CACHE_HOME, else under ~/.cache."""
    there = {"NUMBA_CACHE_DIR": "", "XDG_CACHE_HOME": str(tmp_path / "xdg"), "HOME": str(tmp_path / "home")}
    assert folder_of(package, **there).is_relative_to(tmp_path / "xdg" / "mcx")
    there["XDG_CACHE_HOME"] = ""
    assert folder_of(package, **there).is_relative_to(tmp_path / "home" / ".cache" / "mcx")


def test_a_place_that_cannot_be_written_to(package: Path, tmp_path: Path):
    """Where the cache cannot be made, a temporary folder of the user's own serves."""
    there = {"NUMBA_CACHE_DIR": os.devnull, "TMPDIR": str(tmp_path)}
    folder = folder_of(package, **there)
    assert folder.is_relative_to(tmp_path) and folder == folder_of(package, **there)
    assert not hasattr(os, "getuid") or folder.stat().st_mode & 0o077 == 0


@pytest.mark.skipif(not COMPILED, reason="nothing is compiled")
def test_a_kernel_is_cold_until_it_is_compiled():
    """What no run has compiled is cold, what one has is not."""
    from made_programs import SEED, asian

    from mcx.machine.run import run

    run(asian(2), seed=SEED, paths=64)
    assert not is_cold("sweep") and is_cold("sweep_of_another_day")
    assert any(cache_folder().rglob("*.sweep-*.nbi"))


@pytest.mark.skipif(not COMPILED, reason="nothing is compiled")
def test_numba_finds_linear_algebra_when_somebody_needs_it():
    """Loading the kernels loads none of scipy's, and numba's products of matrices work all the same afterwards."""
    script = """
import sys
import numpy as np
import mcx.machine.blocks
assert "scipy.linalg" not in sys.modules
import numba
a = np.arange(6.0).reshape(2, 3)
assert np.array_equal(numba.njit(lambda a, b: a @ b)(a, a.T), a @ a.T)
"""
    subprocess.run([sys.executable, "-c", script], check=True, cwd=Path(mcx.__file__).parent.parent)
