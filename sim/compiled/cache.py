"""Compilation of the engine's kernels, kept on disk as `sim.kernel_cache` says."""

from __future__ import annotations

from collections.abc import Callable
from functools import cache
from pathlib import Path
from typing import Any

from sim.kernel_cache import are_kept, compile_into, digest_of, folder_for, is_writable


@cache
def kernel_digest() -> str:
    """A digest of every kernel source of the engine and of the versions that compile them."""
    return digest_of(Path(__file__).parent)


def cache_folder() -> Path:
    """Where the engine's compiled kernels are kept."""
    return folder_for(kernel_digest())


@cache
def folder_is_writable() -> bool:
    """Whether kernels can be kept at all."""
    return is_writable(cache_folder())


def compiled(function: Callable[..., Any]) -> Any:
    """numba's compilation of a kernel, without the interpreter's lock, cached where a folder can be written."""
    return compile_into(cache_folder() if folder_is_writable() else None, function)


def is_kept() -> bool:
    """Whether an earlier run has left compiled kernels."""
    return are_kept(Path(__file__).parent)
