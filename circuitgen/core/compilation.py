"""How kernels are compiled and where the machine code is kept.

The cache folder's name is a hash of every kernel source, of the package version and
of the compiler's version, so that machine code of an older release is never found.
"""

from __future__ import annotations

import hashlib
import os
import sys
import tempfile
from pathlib import Path

import numba

from circuitgen import __version__

_PACKAGE = Path(__file__).resolve().parent.parent


def _sources_hash() -> str:
    digest = hashlib.sha256()
    for part in (__version__, numba.__version__, sys.version):
        digest.update(part.encode())
    sources = [*_PACKAGE.rglob("*kernels.py"), _PACKAGE / "core" / "draws.py"]
    for source in sorted(sources):
        digest.update(source.read_bytes())
    return digest.hexdigest()[:16]


def _writable(folder: Path) -> bool:
    try:
        folder.mkdir(parents=True, exist_ok=True)
        with tempfile.TemporaryFile(dir=folder):
            return True
    except OSError:
        return False


def _choose_cache() -> Path | None:
    """Return a writable folder for machine code, or None to do without a cache."""
    if numba.config.DISABLE_JIT:
        return None
    home = os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache"
    folder = Path(home) / "circuitgen" / f"kernels-{_sources_hash()}"
    return folder if _writable(folder) else None


CACHE_FOLDER = _choose_cache()
if CACHE_FOLDER is not None:
    numba.config.CACHE_DIR = str(CACHE_FOLDER)


def kernel(function):
    """Compile `function` with the settings that every kernel of the package shares.

    No fast-math (results must not depend on the compiler's mood), the interpreter
    lock released (blocks run on threads), division errors as in numpy.
    """
    return numba.njit(
        cache=CACHE_FOLDER is not None,
        nogil=True,
        fastmath=False,
        error_model="numpy",
    )(function)


def is_compiled(kernel_name: str) -> bool:
    """Tell whether an earlier run left the machine code of a kernel of this release."""
    if CACHE_FOLDER is None:
        return False
    return any(CACHE_FOLDER.rglob(f"*kernels.{kernel_name}-*.nbi"))
