"""Provenance: what repeats each result to the last bit, on the machine that its fingerprint names."""

from __future__ import annotations

import shlex
from collections.abc import Iterator
from typing import Any

from analysis.report.blocks import Block, Code, Heading, Table, Text, table
from analysis.report.contents import Figures, Results
from analysis.report.reading import Result
from analysis.report.words import name

TITLE = "Provenance"


def blocks(results: Results, figures: Figures) -> Iterator[Block]:
    for one in results.all:
        yield Heading(f"Result {name(one.label)} ({one.kind})")
        yield Code(shlex.join(map(str, one.provenance.get("command", []))), "the command that repeats it")
        yield _facts(one)
    for network in results.networks:
        yield Heading(f"Scenario {network.number}: {name(network.title)}")
        yield Text(f"SHA-256 of its text: {network.sha256}. Save it under the name that the command gives.")
        yield Code("\n".join(_lines(network.text)), "the scenario file")


def _lines(text: str) -> Iterator[str]:
    from sim.wording import visible

    yield from (visible(line.replace("\t", "    ")) for line in text.rstrip("\n").split("\n"))


def _facts(result: Result) -> Table:
    origin = result.provenance
    program, machine = origin.get("program", {}), origin.get("machine", {})
    scenario = origin["scenario"]
    said = f"{program.get('name', '-')} {program.get('version', '-')}"
    rows = [
        ("program", f"{said}, commit {program.get('commit') or 'not recorded'}"),
        ("scenario file", str(scenario.get("file", "-"))),
        *((f"SHA-256 of {data}", str(sha)) for data, sha in scenario.get("data_sha256", {}).items()),
        ("engine", str(origin.get("engine", "-"))),
        ("seed", str(origin.get("seed", "-"))),
        ("hash of all records", str(result.document.get("record_hash", "none: not simulated"))),
        ("began, ended (UTC)", f"{origin.get('started', '-')}, {origin.get('ended', '-')}"),
        ("versions", ", ".join(f"{one} {said}" for one, said in origin.get("versions", {}).items()) or "-"),
        ("machine", f"{machine.get('system', '-')}, {machine.get('processor', '-')}"),
        ("fingerprint", _plain(machine.get("fingerprint"))),
    ]  # fmt: skip
    return table("Where it came from", ("what", "value"), rows)


def _plain(value: Any) -> str:
    return ", ".join(f"{key} {one}" for key, one in value.items()) if isinstance(value, dict) else "-"
