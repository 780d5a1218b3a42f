"""Reading result folders: what each holds, of which kind it is, and what scenario it belongs to."""

from __future__ import annotations

import json
import os
import tomllib
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

from analysis.report.words import clean
from sim.errors import Fault, ScenarioError
from sim.wording import shown, visible

RESULT, PROVENANCE = "result.json", "provenance.json"
MOST_BYTES = 400_000_000
NOWHERE = Path(os.devnull) / "no data files are read"
# kind -> where its documents say by which method each network was solved, for those that hold several
METHODS: Mapping[str, Callable[[Mapping[str, Any]], list[Any]]] = {
    "sweep": lambda document: document["points"],
    "align": lambda document: [one for row in document["rows"] for one in row["networks"]],
}
# kind -> the keys by which its document is known ; the first that fits holds where the command does not
# tell
KINDS: Mapping[str, tuple[str, ...]] = {
    "game": ("players", "equilibria", "optimum"),
    "verify": ("agrees", "measures"),
    "compare": ("policies", "differences"),
    "ledger": ("matrix", "closes_early"),
    "sweep": ("axes", "points", "varied"),
    "align": ("rows", "targets_tried"),
    "simulate": ("units", "network", "replications"),
    "exact": ("units", "network", "states"),
    "transient": ("days", "long_run"),
}


@dataclass(frozen=True)
class Network:
    """A scenario as its provenance has it. number: from 1, in the order of the results."""

    number: int
    text: str
    sha256: str

    @cached_property
    def tables(self) -> dict[str, Any]:
        """The file's own tables."""
        return clean(tomllib.loads(self.text))

    @cached_property
    def described(self) -> dict[str, Any] | None:
        """What `check` would tell of it; None where it needs data files, which are not part of a result."""
        from sim.scenario import parse_scenario
        from sim.scenario.describe import describe

        try:
            scenario = parse_scenario(self.text, folder=NOWHERE)
        except ScenarioError:
            return None
        return clean(describe(scenario, scenario.policy()))

    @property
    def title(self) -> str:
        """Its title, as text that can only be read."""
        return str(self.tables.get("title", "")) or "(no title)"


@dataclass(frozen=True)
class Result:
    """One result folder. label: the name by which the report calls it."""

    label: str
    kind: str
    document: dict[str, Any]
    provenance: dict[str, Any]
    network: Network

    @property
    def is_exact(self) -> bool:
        """Whether its numbers come from the exact chain."""
        if self.kind in METHODS:
            return all(one["method"] == "exact" for one in METHODS[self.kind](self.document))
        return self.kind in ("exact", "transient") or self.document.get("method") == "exact"


def read_results(folders: Sequence[Path]) -> list[Result]:
    """The results in the folders, in the order given; ScenarioError with every fault of every folder."""
    faults: list[Fault] = []
    read = [(folder, *_read(folder, faults)) for folder in _once(folders, faults)]
    whole = [one for one in read if one[1] and one[2]]
    networks = _networks(whole)
    labels = _labels([folder for folder, *_ in whole])
    results = [
        Result(label, kind_of(document, origin) or "", clean(document), clean(origin), networks[_sha(origin)])
        for label, (_, document, origin) in zip(labels, whole, strict=True)
    ]
    faults += _contradictions(results)
    if faults:
        raise ScenarioError(faults)
    return results


def kind_of(document: Mapping[str, Any], origin: Mapping[str, Any]) -> str | None:
    """The kind of a document: what its command says where the keys fit, else the first kind whose keys it has."""
    said = next((word for word in origin.get("command", [])[1:] if word in KINDS), None)
    fitting = [kind for kind, keys in KINDS.items() if set(keys) <= set(document)]
    return said if said in fitting else next((kind for kind in fitting if KINDS[kind]), None)


def _once(folders: Sequence[Path], faults: list[Fault]) -> list[Path]:
    """Each folder once; a second time is a fault."""
    seen: dict[Path, Path] = {}
    for folder in (part for one in folders for part in _parts(one)):
        if folder.resolve() in seen:
            rule, remedy = "must be given once", "leave the second one out"
            faults.append(Fault(None, "RESULTS", rule, f"got {shown(str(folder))} twice", remedy))
        seen.setdefault(folder.resolve(), folder)
    return list(seen.values())


def _parts(folder: Path) -> list[Path]:
    """The folder itself, or those in it that hold results where it holds none: a batch's parts, by name."""
    inner = sorted(file.parent for file in folder.glob(f"*/{RESULT}")) if folder.is_dir() else []
    return inner if inner and not (folder / RESULT).exists() else [folder]


def _read(folder: Path, faults: list[Fault]) -> tuple[Any, Any]:
    found = [_json(folder / name, faults) for name in (RESULT, PROVENANCE)]
    document, origin = found
    if document is None or origin is None:
        return None, None
    if kind_of(document, origin) is None:
        rule = f"must be a result of {', '.join(kind for kind in KINDS if kind != 'transient')}"
        got = f"its document has the keys {', '.join(sorted(map(str, document))[:8])}"
        faults.append(Fault(None, visible(str(folder / RESULT)), rule, got, "leave this folder out"))
        return None, None
    if not _has_scenario(origin):
        rule, got = "must hold the scenario's text", "it holds none"
        faults.append(
            Fault(None, visible(str(folder / PROVENANCE)), rule, got, "run the command again with --out")
        )
        return None, None
    return document, origin


def _has_scenario(origin: Mapping[str, Any]) -> bool:
    text = origin.get("scenario", {}).get("text") if isinstance(origin.get("scenario"), dict) else None
    try:
        return isinstance(text, str) and "units" in tomllib.loads(text) and "sha256" in origin["scenario"]
    except tomllib.TOMLDecodeError:
        return False


def _json(path: Path, faults: list[Fault]) -> Any:
    """The object in a file; None and a fault where there is none."""
    remedy = "give a folder that a command wrote with --out"
    try:
        if path.stat().st_size > MOST_BYTES:
            raise ValueError(f"it has more than {MOST_BYTES:,} bytes")
        found = json.loads(path.read_text(encoding="utf-8"))
        if isinstance(found, dict):
            return found
        got = "it holds no JSON object"
    except FileNotFoundError:
        got = "there is none" if path.parent.is_dir() else "there is no such folder"
    except OSError as error:
        got = (error.strerror or str(error)).lower()
    except (ValueError, RecursionError) as error:
        got = visible(str(error))
    faults.append(Fault(None, visible(str(path)), "must be a JSON file that can be read", got, remedy))
    return None


def _sha(origin: Mapping[str, Any]) -> str:
    return str(origin["scenario"]["sha256"])


def _networks(read: Sequence[tuple[Path, Any, Any]]) -> dict[str, Network]:
    """SHA-256 -> its scenario, numbered as met."""
    found: dict[str, Network] = {}
    for _, _, origin in read:
        sha = _sha(origin)
        found.setdefault(sha, Network(len(found) + 1, origin["scenario"]["text"], sha))
    return found


def _labels(folders: Sequence[Path]) -> list[str]:
    """Each folder's own name, numbered where two are called alike."""
    labels: list[str] = []
    for folder in folders:
        plain = visible(folder.resolve().name) or "results"
        again = sum(one == plain or one.startswith(f"{plain} (") for one in labels)
        labels.append(f"{plain} ({again + 1})" if again else plain)
    return labels


def _contradictions(results: Sequence[Result]) -> list[Fault]:
    """Two results that the same command, program and machine got from the same scenario must be the same."""
    seen: dict[str, Result] = {}
    faults = []
    for one in results:
        first = seen.setdefault(_recipe(one), one)
        if first is not one and first.document != one.document:
            rule = "must not contradict each other"
            got = f"{shown(first.label)} and {shown(one.label)} come from the same command and differ"
            faults.append(Fault(None, "RESULTS", rule, got, "run the command again and give one of them"))
    return faults


def _recipe(one: Result) -> str:
    command, kept = list(one.provenance.get("command", [])), []
    while command:
        word = command.pop(0)
        if word == "--out":
            command[:1] = []
        elif not word.startswith("--out="):
            kept.append(word)
    parts = [one.kind, one.network.sha256, kept, one.provenance.get("program"), one.provenance.get("machine"),
             one.document.get("interrupted"), one.document.get("replications")]  # fmt: skip
    return json.dumps(parts, sort_keys=True)
