"""What a machine says of itself, whether it may help, and how it runs one task."""

from __future__ import annotations

import hashlib
import json
import pickle
import platform
import time
import traceback
from collections.abc import Mapping
from functools import cache
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

from sim import __version__
from sim.provenance import fingerprint

MUST_AGREE = ("numpy", "scipy", "numba", "simpy", "distributed")


@cache
def bits() -> str:
    """The machine's floating-point fingerprint as text, as stores keep it."""
    return json.dumps(fingerprint(), sort_keys=True)


@cache
def program() -> str:
    """The program's version and a digest of every source that a run depends on."""
    folder, digest = Path(__file__).resolve().parent.parent, hashlib.sha256()
    for source in sorted(folder.rglob("*.py")):
        digest.update(f"{source.relative_to(folder).as_posix()}\0".encode())
        digest.update(source.read_bytes().replace(b"\r\n", b"\n"))
    return f"{__version__} ({digest.hexdigest()[:8]})"


@cache
def hello() -> dict[str, Any]:
    """`versions` that must agree, by name, and the `bits`."""
    python = ".".join(platform.python_version_tuple()[:2])
    return {
        "versions": {"brimline": program(), "python": python} | {name: _version(name) for name in MUST_AGREE},
        "bits": bits(),
    }


def _version(package: str) -> str:
    try:
        return version(package)
    except PackageNotFoundError:
        return "none"


def differences(there: Mapping[str, str], here: Mapping[str, str]) -> str:
    """What differs between the versions of a machine and ours, in words; empty where nothing does."""
    return ", ".join(
        f"{name} {there.get(name, 'none')} there and {here[name]} here"
        for name in here
        if there.get(name, "none") != here[name]
    )


def answer(payload: bytes) -> bytes:
    """Runs a pickled (key, function, arguments): a pickled (key, status, value, bits, seconds), whatever goes wrong.

    status: `done`, and the value; or `failed`, and the traceback. Nothing is left for dask to see: an exception that
    it could not carry would be lost on the way.
    """
    key, started = None, time.perf_counter()
    try:
        key, function, arguments = pickle.loads(payload)
        value = function(*arguments)
        return pickle.dumps((key, "done", value, bits(), time.perf_counter() - started))
    except BaseException:  # SystemExit too: the thread is dask's
        return pickle.dumps((key, "failed", traceback.format_exc(), bits(), time.perf_counter() - started))
