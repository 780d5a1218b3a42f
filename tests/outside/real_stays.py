"""Real lengths of stay in intensive care, fetched when a test wants them and never kept in the project.

They are `icu.pneu`, a random sample of the SIR-3 cohort, in the Debian package r-cran-kmi (GPL 2 or later):
one row a patient and state, with the day since admission on which the row starts and stops. Source named
there: Beyersmann, Gastmeier, Grundmann, Baerwolff, Geffers, Behnke, Rueden & Schumacher, "Use of multistate
models to assess prolongation of intensive care unit stay due to nosocomial infection", Infection Control and
Hospital Epidemiology 27 (2006), 493-499.
"""

from __future__ import annotations

import hashlib
import os
import re
import shutil
import subprocess
import tempfile
from pathlib import Path

import pandas as pd

PACKAGE, VERSION = "r-cran-kmi", "0.5.5-2"
DEB_SHA256 = "776aa25df177969be8b4f3c77d6ec3385a9f02fafe1a1ee090b9c1c1453162b7"
DATA_SHA256 = "d53b3fdadbacc959583be2317edb153bd3f4a8849a5ede2bd1eefcc7410d3da2"
DATA = "usr/lib/R/site-library/kmi/data/icu.pneu.rda"


class Unavailable(Exception):  # noqa: N818
    """The data cannot be had here: no apt, no network, or another version is served."""


def fetch(folder: Path) -> Path:
    """The data file, from `folder` where an earlier run left it, else from the Debian package.

    Raises Unavailable; AssertionError where the right version has wrong content.
    """
    kept = folder / "icu.pneu.rda"
    if not (kept.exists() and sha256(kept) == DATA_SHA256):
        _require_the_version()
        with tempfile.TemporaryDirectory(dir=folder) as private:  # several workers may fetch at once
            os.replace(_unpacked(Path(private)), kept)
    return kept


def sha256(path: Path) -> str:
    """The hash of a file's bytes."""
    return hashlib.sha256(path.read_bytes()).hexdigest()


def _require_the_version() -> None:
    for tool in ("apt-get", "apt-cache", "dpkg"):
        if shutil.which(tool) is None:
            raise Unavailable(f"{tool} is not on this machine")
    served = _served()
    if served is None:
        _call("apt-get", "update", "-q")
        served = _served()
    if served is None:
        raise Unavailable(f"no package list knows {PACKAGE} (no network?)")
    if served != VERSION:
        raise Unavailable(f"{PACKAGE} {served} is served, not {VERSION}")


def _served() -> str | None:
    """The version that the package lists of this machine offer."""
    found = re.search(r"Candidate: (\S+)", _call("apt-cache", "policy", PACKAGE))
    return found[1] if found and found[1] != "(none)" else None


def _unpacked(folder: Path) -> Path:
    _call("apt-get", "download", "-q", f"{PACKAGE}={VERSION}", folder=folder)
    (deb,) = folder.glob("*.deb")
    assert sha256(deb) == DEB_SHA256, f"{deb.name} is not the package that these tests were written for"
    _call("dpkg", "-x", str(deb), str(folder))
    assert sha256(folder / DATA) == DATA_SHA256
    return folder / DATA


def _call(*command: str, folder: Path | None = None) -> str:
    """The command's output; Unavailable where it fails or hangs."""
    said = f"`{' '.join(command)}`"
    try:
        done = subprocess.run(
            command, cwd=folder, env=os.environ | {"LC_ALL": "C"}, capture_output=True, text=True, timeout=300
        )
    except subprocess.TimeoutExpired:
        raise Unavailable(f"{said} had not finished after 300 seconds") from None
    if done.returncode != 0:
        raise Unavailable(f"{said} failed: {' '.join(done.stderr.splitlines()[-1:])}")
    return done.stdout


def read_rows(path: Path) -> pd.DataFrame:
    """The rows as they are: id, start, stop, status, event, pneu, adm.cens.exit, age, sex."""
    import rdata

    return rdata.read_rda(path, default_encoding="ASCII")["icu.pneu"]


def by_patient(rows: pd.DataFrame) -> pd.DataFrame:
    """One row a patient, their last: `stop` is the length of stay in days, whether it had ended or not."""
    return rows.sort_values(["id", "stop"]).groupby("id").last()
