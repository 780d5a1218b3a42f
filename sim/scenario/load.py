"""Reading a scenario file: every fault at once, or a Scenario."""

from __future__ import annotations

import re
import tomllib
import unicodedata
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from sim.errors import Fault, ScenarioError
from sim.scenario.crosschecks import cross_check
from sim.scenario.durations import Duration, Empirical, Mixture
from sim.scenario.faults import Collector
from sim.scenario.positions import key_lines
from sim.scenario.scenario import Scenario, Source

MOST_BYTES = 20_000_000


def read_scenario(path: str | Path) -> Scenario:
    """The scenario in a TOML file, `schema = 1`.

    Raises ScenarioError with every fault of the file and of the data it names.
    """
    path = Path(path)
    return parse_scenario(_text_of(path), folder=path.parent, file=str(path))


def parse_scenario(text: str, *, folder: str | Path = ".", file: str = "scenario") -> Scenario:
    """The scenario in a TOML text; data files are sought below `folder`. Raises as `read_scenario`."""
    text = unicodedata.normalize("NFC", text)
    data = _toml(text, file)
    collector = Collector(data, key_lines(text))
    scenario = None
    try:
        scenario = Scenario.model_validate(data, context={"folder": folder})
    except ValidationError as error:
        collector.add_all(error, Scenario)
    cross_check(collector)
    if collector.faults or scenario is None:
        raise ScenarioError(sorted(collector.faults, key=lambda fault: (fault.line or 0, fault.key)), file)
    return scenario.from_source(Source(file, text, _data_hashes(scenario)))


def _text_of(path: Path) -> str:
    try:
        if path.is_file() and path.stat().st_size > MOST_BYTES:
            raise _unreadable(path, f"must be at most {MOST_BYTES:,} bytes", "larger", "put data into CSV files")
        return path.read_bytes().decode("utf-8-sig")
    except OSError as error:
        reason = error.strerror or "unreadable"
        raise _unreadable(path, "must be a file that can be read", reason.lower(), "correct the path") from None
    except UnicodeDecodeError as error:
        at = f"byte {error.start} is not UTF-8"
        raise _unreadable(path, "must be text in UTF-8", at, "save it again in UTF-8") from None


def _unreadable(path: Path, rule: str, value: str, remedy: str) -> ScenarioError:
    return ScenarioError([Fault(None, str(path), rule, value, remedy)], str(path))


def _toml(text: str, file: str) -> dict[str, Any]:
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        found = re.search(r"\(at line (\d+), column (\d+)\)", str(error))
        line = int(found[1]) if found else text.count("\n") + 1
        said = str(error).split(" (at ")[0]
        fault = Fault(line, "file", "must be valid TOML", said[0].lower() + said[1:], "correct this line")
        raise ScenarioError([fault], file) from None
    except RecursionError:
        fault = Fault(None, "file", "must be valid TOML", "nested too deeply", "flatten it")
        raise ScenarioError([fault], file) from None


def _data_hashes(scenario: Scenario) -> dict[str, str]:
    """Data file -> SHA-256, for every file that the scenario's stays and delays read."""
    durations: list[Duration | None] = [group.stay for group in scenario.patients] + [scenario.diversion.delay]
    durations += [part for one in durations if isinstance(one, Mixture) for part in one.parts]
    return {one.file: one.sha256 for one in durations if isinstance(one, Empirical)}
