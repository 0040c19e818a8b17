"""The one decorator of every kernel: flags, error model and the folder that holds the compiled code.

numba's cache watches a function's own file only: after renumbering an operation elsewhere it would silently
run old code. So the folder is named by a hash of all sources that a kernel can see, of numba and of the
processor.
"""

from __future__ import annotations

import hashlib
import os
import tempfile
from functools import cache
from pathlib import Path

import llvmlite.binding
import numba

COMPILED = not numba.config.DISABLE_JIT

# Contraction (a fused multiply-add) and no signed zeros are safe. Left out on purpose: 'nnan' and 'ninf',
# since NaN and infinity must get through; 'reassoc', since it would change the order of sums.
_FLAGS = {"contract", "nsz"}


def jit(function):
    """Compile on first use, to run without the GIL; with numpy's division, since numba's is no vector loop."""
    if not COMPILED:
        return function
    # The folder is read when the cache is made, inside this call; other users of numba must not see ours.
    before, numba.config.CACHE_DIR = numba.config.CACHE_DIR, str(cache_folder())
    try:
        return numba.njit(error_model="numpy", fastmath=_FLAGS, nogil=True, cache=True)(function)
    finally:
        numba.config.CACHE_DIR = before


def _load_without_blas():
    """Import the part of numba that would load all of scipy's linear algebra only to know whether scipy is there:
    it is, being required, and whoever needs it later loads it then. A tenth of a process's start."""
    from numba.np import linalg

    ensure, linalg.ensure_blas = linalg.ensure_blas, lambda: None
    try:
        import numba.np.arraymath  # noqa: F401
    finally:
        linalg.ensure_blas = ensure


if COMPILED:
    _load_without_blas()


def is_cold(entry: str) -> bool:
    """Whether the kernel named `entry` has still to be compiled for this machine."""
    return COMPILED and not any(cache_folder().rglob(f"*.{entry}-*.nbi"))


@cache
def cache_folder() -> Path:
    """The folder of this version's kernels: under NUMBA_CACHE_DIR, else the user's cache directory, else a
    temporary folder of the user's own."""
    name = f"kernels-{_fingerprint()}"
    base = numba.config.CACHE_DIR or os.environ.get("XDG_CACHE_HOME") or os.path.expanduser("~/.cache")
    for parent in (Path(base, "mcx"), Path(tempfile.gettempdir(), f"mcx-{_user()}")):
        if _is_ours(parent / name):
            return parent / name
    return Path(tempfile.mkdtemp(prefix="mcx-"))


def _is_ours(folder: Path) -> bool:
    """Whether the folder can be made and written to, and is the user's own: what is read from it is run."""
    try:
        folder.mkdir(mode=0o700, parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            return not hasattr(os, "getuid") or folder.stat().st_uid == os.getuid()
    except OSError:
        return False


def _user() -> str:
    return str(os.getuid()) if hasattr(os, "getuid") else "user"


def _fingerprint() -> str:
    here = Path(__file__).parent
    digest = hashlib.sha256()
    for source in (*sorted(here.glob("*.py")), here.parent / "tape" / "ops.py"):
        digest.update(source.read_bytes())
    processor = llvmlite.binding.get_host_cpu_name(), llvmlite.binding.get_host_cpu_features().flatten()
    digest.update(repr((numba.__version__, llvmlite.__version__, *processor)).encode())
    return digest.hexdigest()[:16]
