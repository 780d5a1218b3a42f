"""Pending events of one run, earliest first: a sorted array for small networks, a binary heap for large ones.

An event is a time and a key; the key packs kind, sequence and unit so that its order is the model's order of
events at one time. Both forms live in the same two arrays; the sorted one is kept by the kernel itself, in place.
"""

from __future__ import annotations

import numpy as np

from sim.compiled.cache import compiled

SEQUENCE_SHIFT, KIND_SHIFT = 8, 48
# Places that are known not to be negative spare numba the question at every use of them.
NONE, ONE = np.uintp(0), np.uintp(1)
MOST_UNITS = 1 << SEQUENCE_SHIFT
MOST_SEQUENCE = 1 << (KIND_SHIFT - SEQUENCE_SHIFT)


@compiled
def pack(kind, sequence, unit):
    """The key of an event."""
    return (kind << KIND_SHIFT) | (sequence << SEQUENCE_SHIFT) | unit


@compiled
def kind_of(key):
    """The kind of event that a key names."""
    return key >> KIND_SHIFT


@compiled
def sequence_of(key):
    """The sequence (the patient) that a key names."""
    return (key >> SEQUENCE_SHIFT) & (MOST_SEQUENCE - 1)


@compiled
def unit_of(key):
    """The unit that a key names."""
    return key & (MOST_UNITS - 1)


@compiled
def _before(time, key, other_time, other_key):
    return time < other_time or (time == other_time and key < other_key)


@compiled
def push_heap(times, keys, count, time, key):
    """Adds an event to a binary heap of `count` events whose next one stands first."""
    place = count
    while place > 0:
        parent = (place - 1) >> 1
        if not _before(time, key, times[parent], keys[parent]):
            break
        times[place] = times[parent]
        keys[place] = keys[parent]
        place = parent
    times[place] = time
    keys[place] = key


@compiled
def pop_heap(times, keys, count):
    """Removes the first of `count` events of a heap."""
    last = count - 1
    time, key = times[last], keys[last]
    place = 0
    while True:
        child = 2 * place + 1
        if child >= last:
            break
        if child + 1 < last and _before(times[child + 1], keys[child + 1], times[child], keys[child]):
            child += 1
        if not _before(times[child], keys[child], time, key):
            break
        times[place] = times[child]
        keys[place] = keys[child]
        place = child
    times[place] = time
    keys[place] = key
