"""What the tests ask a cluster to run; workers import it by this name."""

from __future__ import annotations

import os
import signal
import time
from pathlib import Path


def half(number: int, seconds: float = 0.0) -> float:
    """An even number's half after so many seconds; an odd one is refused."""
    time.sleep(seconds)
    if number % 2:
        raise ValueError(f"{number} is odd")
    return number / 2


def who(seconds: float) -> int:
    """The process that ran this, after so many seconds."""
    time.sleep(seconds)
    return os.getpid()


def poison(number: int) -> int:
    """Kills its process where the number is 13."""
    if number == 13:
        os.kill(os.getpid(), signal.SIGKILL)
    return number


def note_and_sleep(folder: str, number: int, seconds: float) -> int:
    """Leaves a file that it has begun, one for each time it is run."""
    Path(folder, f"{number}-{os.getpid()}-{time.monotonic_ns()}").touch()
    time.sleep(seconds)
    return number


def nap(seconds: float, load: bytes, answer: int) -> bytes:
    """A task of so many seconds with so much to carry there and back."""
    time.sleep(seconds)
    return bytes(answer)
