"""Compilation of kernels, kept on disk in a folder named by a digest of all kernel sources of one package.

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

Kernel = Callable[..., Any]


def digest_of(sources: Path) -> str:
    """A digest of every source in the folder `sources` and of the versions that compile them."""
    digest = hashlib.sha256(f"{version('numba')} {version('numpy')} {sys.version}".encode())
    for source in sorted(sources.glob("*.py")):
        digest.update(source.read_bytes())
    return digest.hexdigest()[:16]


def folder_for(digest: str) -> Path:
    """Where compiled kernels are kept: below $BRIMLINE_CACHE_DIR, or the user's own cache folder."""
    own = os.environ.get("BRIMLINE_CACHE_DIR")
    if own:
        return Path(own) / f"kernels-{digest}"
    base = os.environ.get("LOCALAPPDATA" if sys.platform == "win32" else "XDG_CACHE_HOME")
    return Path(base or Path.home() / ".cache") / "brimline" / f"kernels-{digest}"


PROBE_BYTES = 2**20  # about what the kernels take


def is_writable(folder: Path) -> bool:
    """Whether files can be kept in `folder`, which is made if need be."""
    try:
        folder.mkdir(parents=True, exist_ok=True)
        probe = folder / f"probe-{os.getpid()}"
        probe.write_bytes(bytes(PROBE_BYTES))  # an empty file can be made on a full disk
        probe.unlink()
    except (OSError, RuntimeError):
        return False
    return True


def are_kept(sources: Path) -> bool:
    """Whether an earlier run has left compiled kernels of the folder `sources`."""
    folder = folder_for(digest_of(sources))
    return is_writable(folder) and any(folder.rglob("*.nbi"))


def compile_into(folder: Path | None, function: Kernel) -> Any:
    """numba's compilation of a kernel, without the interpreter's lock; kept in `folder` unless that is None."""
    import numba

    if folder is None:
        return numba.njit(nogil=True)(function)
    before, numba.config.CACHE_DIR = numba.config.CACHE_DIR, str(folder)
    try:
        return numba.njit(nogil=True, cache=True)(function)
    finally:
        numba.config.CACHE_DIR = before


def compiler_for(sources: Path) -> Callable[[Kernel], Any]:
    """A decorator that compiles the kernels of the folder `sources`, cached where a folder can be written."""

    @cache
    def folder() -> Path | None:
        place = folder_for(digest_of(sources))
        return place if is_writable(place) else None

    return lambda function: compile_into(folder(), function)
