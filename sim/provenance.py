"""Where a result came from: versions, machine, floating-point fingerprint, scenario and data hashes."""

from __future__ import annotations

import datetime
import hashlib
import platform
import subprocess
from functools import cache
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

from sim import __version__
from sim.demand import WeeklyPattern
from sim.intake import draw_intake
from sim.lowering import GroupDraws, IntakePlan
from sim.scenario import Scenario
from sim.stays import Coxian, Exponential, Gamma, Hyperexponential, Lognormal, Weibull

PACKAGES = ("numpy", "scipy", "numba", "simpy", "pandas", "joblib", "pydantic")


@cache
def fingerprint() -> dict[str, str]:
    """What must agree for two machines to give the same bits: versions, and the hash of a probe intake."""
    families = {
        "lognormal": Lognormal(4.0, 1.4),
        "gamma": Gamma(3.0, 0.7),
        "weibull": Weibull(3.0, 1.3),
        "exponential": Exponential(3.0),
        "hyperexponential": Hyperexponential(3.0, 1.5),
        "coxian": Coxian((1.0, 0.3), (0.4,)),
    }
    probe = IntakePlan(
        seed=1,
        groups=tuple(
            GroupDraws(f"probe {name}", 0, 2.0, WeeklyPattern(tuple(range(1, 25)), None), stay)
            for name, stay in families.items()
        ),
        stay_factors=(1.0, 1.1),
        delay_hours=Lognormal(2.5, 0.5),
        horizon_days=100.0,
    )
    return {"numpy": version("numpy"), "scipy": version("scipy"), "probe_intake": draw_intake(probe, 0).hash}


def provenance(
    scenario: Scenario, *, command: list[str], engine: str, started: datetime.datetime
) -> dict[str, Any]:
    """Everything needed to repeat a result, as plain values; times are UTC."""
    source = scenario.source
    return {
        "program": program(),
        "command": command,
        "engine": engine,
        "seed": scenario.run.seed,
        "scenario": {
            "file": source.file,
            "sha256": hashlib.sha256(source.text.encode()).hexdigest(),
            "text": source.text,
            "data_sha256": dict(source.data),
        },
        "versions": {"python": platform.python_version()} | {name: _version(name) for name in PACKAGES},
        "machine": {
            "system": platform.system(),
            "processor": platform.machine(),
            "fingerprint": fingerprint(),
        },
        "started": started.isoformat(timespec="seconds"),
        "ended": now().isoformat(timespec="seconds"),
    }


def program() -> dict[str, str | None]:
    """The program that runs: its version, and its commit where it runs from a checkout."""
    return {"name": "brimline", "version": __version__, "commit": _commit()}


def now() -> datetime.datetime:
    """This moment, UTC."""
    return datetime.datetime.now(datetime.UTC)


def _version(package: str) -> str | None:
    try:
        return version(package)
    except PackageNotFoundError:
        return None


def _commit() -> str | None:
    """The commit of the checkout that runs, where it is one and git is there; `+` marks uncommitted changes."""
    folder = Path(__file__).resolve().parent.parent
    if not (folder / ".git").exists():
        return None
    try:
        commit = _git(folder, "rev-parse", "HEAD")
        return commit + ("+" if _git(folder, "status", "--porcelain", "--untracked-files=no") else "")
    except (OSError, subprocess.SubprocessError):
        return None


def _git(folder: Path, *arguments: str) -> str:
    done = subprocess.run(
        ["git", "-C", str(folder), *arguments], capture_output=True, text=True, check=True, timeout=10
    )
    return done.stdout.strip()
