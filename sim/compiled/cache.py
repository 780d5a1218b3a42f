"""Compilation of the kernels, kept on disk in a folder named by a digest of all kernel sources.

numba looks only at the file of a cached function, so an edit in another kernel file would leave a stale kernel
running; the digest in the folder's name rules that out.
"""

from __future__ import annotations

import hashlib
import os
import sys
from collections.abc import Callable
from functools import cache
from importlib.metadata import version
from pathlib import Path
from typing import Any


@cache
def kernel_digest() -> str:
    """A digest of every kernel source and of the versions that compile them."""
    digest = hashlib.sha256(f"{version('numba')} {version('numpy')} {sys.version}".encode())
    for source in sorted(Path(__file__).parent.glob("*.py")):
        digest.update(source.read_bytes())
    return digest.hexdigest()[:16]


def cache_folder() -> Path:
    """Where compiled kernels are kept: below $BRIMLINE_CACHE_DIR, or the user's own cache folder."""
    own = os.environ.get("BRIMLINE_CACHE_DIR")
    if own:
        return Path(own) / f"kernels-{kernel_digest()}"
    base = os.environ.get("LOCALAPPDATA" if sys.platform == "win32" else "XDG_CACHE_HOME")
    return Path(base or Path.home() / ".cache") / "brimline" / f"kernels-{kernel_digest()}"


@cache
def folder_is_writable() -> bool:
    """Whether kernels can be kept at all."""
    try:
        folder = cache_folder()
        folder.mkdir(parents=True, exist_ok=True)
        probe = folder / f"probe-{os.getpid()}"
        probe.touch()
        probe.unlink()
    except (OSError, RuntimeError):
        return False
    return True


def compiled(function: Callable[..., Any]) -> Any:
    """numba's compilation of a kernel, without the interpreter's lock, cached where a folder can be written."""
    import numba

    if not folder_is_writable():
        return numba.njit(nogil=True)(function)
    before, numba.config.CACHE_DIR = numba.config.CACHE_DIR, str(cache_folder())
    try:
        return numba.njit(nogil=True, cache=True)(function)
    finally:
        numba.config.CACHE_DIR = before


def is_kept() -> bool:
    """Whether an earlier run has left compiled kernels."""
    return folder_is_writable() and any(cache_folder().rglob("*.nbi"))
