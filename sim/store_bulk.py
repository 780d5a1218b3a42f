"""Many rows of a store read at once: a million of them must not cost minutes.

Rows of one shape are laid side by side and cut into arrays together; each row's hash is still held against its bits.
"""

from __future__ import annotations

import hashlib
import json
import math
import struct
from collections.abc import Sequence
from functools import lru_cache
from itertools import pairwise
from typing import NamedTuple

import numpy as np

from sim.record import Record


class _Layout(NamedTuple):
    """Of the rows of one shape: names, types and shapes of the arrays, where each begins, and what is hashed before."""

    names: tuple[str, ...]
    kinds: tuple[np.dtype, ...]
    shapes: tuple[tuple[int, ...], ...]
    cuts: tuple[tuple[int, int], ...]
    marks: tuple[bytes, ...]


def unpack_all(blobs: Sequence[bytes], hashes: Sequence[str]) -> list[Record | None]:
    """The records of `store_rows.pack`, bit for bit; None for each whose bytes do not have its hash."""
    records: list[Record | None] = [None] * len(blobs)
    for (head, length), places in _alike(blobs).items():
        layout = _layout(head, length)
        sound = [] if layout is None else [
            place for place in places if _hash(blobs[place], layout) == hashes[place]
        ]  # fmt: skip
        if layout is not None and sound:
            for place, record in zip(sound, _cut([blobs[one] for one in sound], layout), strict=True):
                record.__dict__["hash"] = hashes[place]  # the cached property's place
                records[place] = record
    return records


def _alike(blobs: Sequence[bytes]) -> dict[tuple[bytes, int], list[int]]:
    """Places of the rows by what stands before their arrays, and by length."""
    found: dict[tuple[bytes, int], list[int]] = {}
    for place, blob in enumerate(blobs):
        end = 4 + int.from_bytes(blob[:4], "little")
        found.setdefault((blob[:end], len(blob)), []).append(place)
    return found


@lru_cache
def _layout(head: bytes, length: int) -> _Layout | None:
    """None where that is no record."""
    try:
        (told,) = struct.unpack_from("<I", head)
        arrays = [(name, np.dtype(kind), tuple(shape)) for name, kind, shape in json.loads(head[4:])]
        sizes = [kind.itemsize * math.prod(shape) for _, kind, shape in arrays]
        Record(**dict.fromkeys((name for name, _, _ in arrays), np.zeros(0)))
    except (struct.error, TypeError, ValueError):
        return None
    ends = [len(head)]
    for size in sizes:
        ends.append(ends[-1] + size)
    if told != len(head) - 4 or ends[-1] != length:
        return None
    marks = tuple(f"{name}:{kind.str}:{shape};".encode() for name, kind, shape in arrays)  # as `hash_arrays`
    names, kinds, shapes = zip(*arrays, strict=True)
    return _Layout(names, kinds, shapes, tuple(pairwise(ends)), marks)


def _hash(blob: bytes, layout: _Layout) -> str:
    """As `Record.hash`, from the bytes themselves."""
    parts = [part for mark, (start, end) in zip(layout.marks, layout.cuts, strict=True)
             for part in (mark, blob[start:end])]  # fmt: skip
    return hashlib.sha256(b"".join(parts)).hexdigest()


def _cut(blobs: Sequence[bytes], layout: _Layout) -> list[Record]:
    count = len(blobs)
    side_by_side = np.frombuffer(b"".join(blobs), np.uint8).reshape(count, -1)
    columns = []
    for kind, shape, (start, end) in zip(layout.kinds, layout.shapes, layout.cuts, strict=True):
        cut = np.ascontiguousarray(side_by_side[:, start:end]).reshape(-1).view(kind)
        columns.append(cut.astype(kind.newbyteorder("="), copy=False).reshape(count, *shape))
    return [Record(**dict(zip(layout.names, arrays, strict=True))) for arrays in zip(*columns, strict=True)]
