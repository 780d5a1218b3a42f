"""Reading a scenario file: every fault at once, or a Scenario."""

from __future__ import annotations

import re
import tomllib
import unicodedata
from pathlib import Path
from typing import Any

from pydantic import ValidationError

from sim.durations import Duration, Empirical, Mixture
from sim.errors import Fault, ScenarioError
from sim.scenario.crosschecks import cross_check
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


def read_toml(path: str | Path) -> tuple[str, dict[str, Any]]:
    """The text of a TOML file and its tables, names and keys in NFC; ScenarioError where it cannot be read."""
    text = unicodedata.normalize("NFC", _text_of(Path(path)))
    return text, _toml(text, str(path))


def _text_of(path: Path) -> str:
    try:
        with path.open("rb") as opened:
            content = opened.read(MOST_BYTES + 1)
        text = content[:MOST_BYTES].decode("utf-8-sig")
    except UnicodeDecodeError as error:
        at = f"byte {error.start + 1} is not UTF-8"
        raise _unreadable(path, "must be text in UTF-8", at, "save it again in UTF-8") from None
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        raise _unreadable(
            path, "must be a file that can be read", reason.lower(), "correct the path"
        ) from None
    if len(content) > MOST_BYTES:
        raise _unreadable(
            path, f"must be at most {MOST_BYTES:,} bytes", "it is larger", "put data into CSV files"
        )
    return text


def _unreadable(path: Path, rule: str, value: str, remedy: str) -> ScenarioError:
    return ScenarioError([Fault(None, str(path), rule, value, remedy)], str(path))


def _toml(text: str, file: str) -> dict[str, Any]:
    """The file's tables, with names and keys in NFC however they are escaped."""
    try:
        return _composed(tomllib.loads(text))
    except tomllib.TOMLDecodeError as error:
        line, value, remedy = _syntax(str(error), text)
    except RecursionError:
        levels = [line.count("[") + line.count("{") + line.count(".") for line in text.split("\n")]
        line, value, remedy = levels.index(max(levels)) + 1, "nested too deeply", "flatten it"
    except ValueError:  # of an integer beyond what Python reads or writes
        longest = max(re.finditer(r"[0-9A-Fa-f_]+", text), key=lambda found: len(found[0]))
        line = text.count("\n", 0, longest.start()) + 1
        value, remedy = "a number of thousands of digits", "shorten it"
    raise ScenarioError([Fault(line, "file", "must be valid TOML", value, remedy)], file) from None


def _composed(value: Any) -> Any:
    if isinstance(value, int):
        str(value)  # ValueError beyond 4300 digits, which hexadecimal ones reach unseen
    if isinstance(value, dict):
        return {unicodedata.normalize("NFC", key): _composed(inner) for key, inner in value.items()}
    if isinstance(value, list):
        return [_composed(inner) for inner in value]
    return unicodedata.normalize("NFC", value) if isinstance(value, str) else value


_SYNTAX = {
    r"Cannot overwrite a value": ("a key is given twice", "remove one of the two"),
    r"Cannot (?:declare|mutate immutable namespace) \('(units|patients|policies|parts)',\).*": (
        "a second table `[{0}]`", "write `[[{0}]]` in double brackets above each row"),
    r"Cannot declare \((.*?),?\) twice": ("a second table {0}", "join the two"),
    r"Invalid value": ("no value that TOML knows", "correct this line (text needs quotes)"),
    r"Expected '=' after a key in a key/value pair": (
        "a key without `=` after it", "write `key = value` (a key with spaces or accents needs quotes)"),
    r"Illegal character '\\n'": ("a line that ends inside quotes", "close the quotes"),
    r"Invalid statement|Invalid initial character for a key part": (
        "no key where one was expected", "correct this line (a key with spaces or accents needs quotes)"),
}  # fmt: skip


def _syntax(said: str, text: str) -> tuple[int, str, str]:
    """Line, value and remedy of a TOML syntax error."""
    found = re.search(r" \(at line (\d+), column \d+\)$", said)
    line = int(found[1]) if found else text.rstrip().count("\n") + 1
    said = said.rpartition(" (at ")[0] or said
    for pattern, (value, remedy) in _SYNTAX.items():
        if match := re.fullmatch(pattern, said):
            return line, value.format(*match.groups()), remedy.format(*match.groups())
    return line, said[:1].lower() + said[1:], "correct this line"


def _data_hashes(scenario: Scenario) -> dict[str, str]:
    """Data file -> SHA-256, for every file that the scenario's stays and delays read."""
    durations: list[Duration | None] = [group.stay for group in scenario.patients] + [
        scenario.diversion.delay
    ]
    durations += [part for one in durations if isinstance(one, Mixture) for part in one.parts]
    return {one.file: one.sha256 for one in durations if isinstance(one, Empirical)}
