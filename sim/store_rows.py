"""What a store holds: the key of a run, its record as bytes without loss, and plain numbers by unit.

A key says what a record depends on and nothing else, so that commands share rows: the scenario's part is a hash of
the lowered network and the intake plan (its data and seed included; titles, targets, goals and the number of
replications left out), the cell a hash of the lowered rules.
"""

from __future__ import annotations

import hashlib
import itertools
import json
import math
import struct
from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields, is_dataclass
from functools import lru_cache
from typing import Any

import numpy as np

from sim.lowering import IntakePlan, Network, Rules
from sim.record import FULL, GATE_STATES, INCOMING_CLOSED, OWN_CLOSED, Record
from sim.tables import Table

# Raised by whoever changes the draws, the lowering or an engine so that a record differs: old rows then never match.
RECORDS = 1
# Raised by whoever changes the exact chain so that its measures differ.
EXACT = 1

Measures = dict[str, float | list[float] | None]

COUNTS = ("arrived", "admitted", "diverted_out", "diverted_in", "turned_away")
DAYS = ("occupied_days", "full_days", "closed_days", "closed_free_days", "incoming_closed_days")


@dataclass(frozen=True, order=True)
class Key:
    """The address of one run in a store: `scenario` and `cell` are hashes."""

    scenario: str
    cell: str
    replication: int


@dataclass(frozen=True)
class Row:
    """One run as it is kept.

    intake_hash: of the patients it met. engine: which one ran. fingerprint: the machine's, as text.
    seconds: of running.
    """

    key: Key
    record: Record
    intake_hash: str
    engine: str
    fingerprint: str
    seconds: float = 0.0


def scenario_hash(network: Network, plan: IntakePlan) -> str:
    """The scenario's part of a key."""
    return _digest(("records", RECORDS, network, plan))


def exact_hash(network: Network, plan: IntakePlan) -> str:
    """The scenario's part of the key of an exact cell."""
    return _digest(("exact", EXACT, network, plan))


def cell_hash(rules: Rules) -> str:
    """The policy's part of a key."""
    return _digest(rules)


def _digest(thing: Any) -> str:
    digest = hashlib.sha256()
    _feed(digest, thing)
    return digest.hexdigest()


def _feed(digest: Any, thing: Any) -> None:
    """Every value with its type and length, so that no two things are written alike."""
    if is_dataclass(thing):
        digest.update(f"<{type(thing).__name__}>".encode())
        for field in fields(thing):
            digest.update(f".{field.name}=".encode())
            _feed(digest, getattr(thing, field.name))
    elif isinstance(thing, Table):
        digest.update(f"<{type(thing).__name__}>".encode())
        for name, value in thing:
            digest.update(f".{name}=".encode())
            _feed(digest, value)
    elif isinstance(thing, np.ndarray):
        plain = _little_endian(thing)
        digest.update(f"[{plain.dtype.str}{plain.shape}]".encode() + plain.tobytes())
    elif isinstance(thing, tuple | list):
        digest.update(f"({len(thing)})".encode())
        for part in thing:
            _feed(digest, part)
    elif thing is None or isinstance(thing, bool | int | float | str):
        text = (thing.hex() if isinstance(thing, float) else str(thing)).encode()
        digest.update(f"{type(thing).__name__}{len(text)}:".encode() + text)
    else:
        raise TypeError(f"a {type(thing).__name__} has no place in a key")


def _little_endian(array: np.ndarray) -> np.ndarray:
    return np.ascontiguousarray(array).astype(array.dtype.newbyteorder("<"), copy=False)


def pack(record: Record) -> bytes:
    """A record as bytes: the length of a JSON list of (name, type, shape), that list, and the arrays' bytes."""
    arrays = {name: _little_endian(array) for name, array in record.arrays().items()}
    head = json.dumps([[name, one.dtype.str, list(one.shape)] for name, one in arrays.items()]).encode()
    return struct.pack("<I", len(head)) + head + b"".join(one.tobytes() for one in arrays.values())


def unpack(blob: bytes) -> Record:
    """The record of `pack`, bit for bit; ValueError where the bytes are no record."""
    try:
        (length,) = struct.unpack_from("<I", blob)
        place, arrays = 4 + length, {}
        for name, kind, shape, count in _layout(blob[4:place]):
            array = np.frombuffer(blob, kind, count, place).reshape(shape)
            arrays[name] = array.astype(kind.newbyteorder("="))
            place += array.nbytes
        if place != len(blob):
            raise ValueError(f"{len(blob) - place} bytes too many")
        return Record(**arrays)
    except (struct.error, TypeError, UnicodeDecodeError) as error:
        raise ValueError(f"no record: {error}") from error


@lru_cache
def _layout(head: bytes) -> list[tuple[str, np.dtype, list[int], int]]:
    """The arrays of a record, as its list says: name, type, shape and number of values."""
    return [(name, np.dtype(kind), shape, math.prod(shape)) for name, kind, shape in json.loads(head)]


def pack_measures(units: Sequence[Measures]) -> bytes:
    """Exact measures by unit as bytes: the length of a JSON list, that list, and float64 values.

    The list has for each unit its (name, how many) in order: -1 is one number, -2 none.
    """
    head = [[[name, _how_many(value)] for name, value in unit.items()] for unit in units]
    values = [value for unit in units for value in unit.values() if value is not None]
    numbers = np.concatenate([np.zeros(0), *(np.atleast_1d(np.asarray(value, float)) for value in values)])
    text = json.dumps(head).encode()
    return struct.pack("<I", len(text)) + text + numbers.astype("<f8").tobytes()


def _how_many(value: float | list[float] | None) -> int:
    if value is None:
        return -2
    return len(value) if isinstance(value, list) else -1


def unpack_measures(blob: bytes) -> list[Measures]:
    """The measures of `pack_measures`, bit for bit."""
    (length,) = struct.unpack_from("<I", blob)
    numbers = iter(np.frombuffer(blob, "<f8", offset=4 + length).tolist())
    units: list[Measures] = []
    for unit in json.loads(blob[4 : 4 + length]):
        units.append({name: _taken(numbers, many) for name, many in unit})
    return units


def _taken(numbers: Iterator[float], many: int) -> float | list[float] | None:
    if many < 0:
        return None if many == -2 else next(numbers)
    return list(itertools.islice(numbers, many))


def by_unit(record: Record) -> list[tuple[float, ...]]:
    """COUNTS and DAYS of every unit, for those who read the store by SQL: counts as int, times in days."""
    admitted = record.admitted.sum(axis=0)
    occupancy = record.occupancy_days.sum(axis=0)
    columns = (
        record.arrived,
        admitted,
        record.diverted.sum(axis=1),
        admitted - np.diagonal(record.admitted),
        record.turned_away,
        occupancy @ np.arange(occupancy.shape[-1]),
        *(_days(record, wanted, unwanted) for wanted, unwanted in _GATES),
    )
    return list(zip(*(column.tolist() for column in columns), strict=True))


_GATES = ((FULL, 0), (OWN_CLOSED, 0), (OWN_CLOSED, FULL), (INCOMING_CLOSED, 0))


def _days(record: Record, wanted: int, unwanted: int) -> np.ndarray:
    states = [state for state in range(GATE_STATES) if state & wanted and not state & unwanted]
    return record.gate_days[:, states].sum(axis=1)
