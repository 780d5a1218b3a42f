"""Watching a batch: its snapshot as a picture on a terminal, or as plain lines elsewhere."""

from __future__ import annotations

import json
import sys
import time
from collections.abc import Callable
from pathlib import Path
from typing import Any

from analysis.command.batch_state import LOG, SHARE_OF_TIME, SNAPSHOT, WHY
from analysis.command.entry import say
from analysis.command.output import put_json
from analysis.command.progress import about
from sim.errors import StoreError

SECONDS_BETWEEN_LINES = 5.0
SECONDS_BETWEEN_LOOKS = 1.0
MOST_PARTS_SHOWN = 15
LINES_OF_LOG = 3
RUNNING = ("running", "writing")


class Screen:
    """Shows snapshots as they come, on standard error: redrawn in place on a terminal, else a line now and then."""

    def __init__(self) -> None:
        self._live: Any = None
        self._next = float("-inf")

    def __enter__(self) -> Screen:
        if sys.stderr.isatty():
            from rich.console import Console
            from rich.live import Live

            self._live = Live(console=Console(stderr=True, highlight=False, markup=False), auto_refresh=False)
            self._live.__enter__()
        return self

    def __exit__(self, *error: Any) -> None:
        if self._live is not None:
            self._live.__exit__(*error)

    def show(self, document: Callable[[], dict[str, Any]], *, at_once: bool = False) -> None:
        """The snapshot, where it is time for another one."""
        began = time.monotonic()
        if began < self._next and not at_once:
            return
        if self._live is None:
            print(line(document()), file=sys.stderr, flush=True)
        else:
            self._live.update(picture(document()), refresh=True)
        pause = SECONDS_BETWEEN_LINES if self._live is None else SECONDS_BETWEEN_LOOKS
        now = time.monotonic()
        self._next = now + max(pause, (now - began) / SHARE_OF_TIME)


def line(document: dict[str, Any]) -> str:
    """A snapshot in one line."""
    where, said = document["now"], [_done(document), _pace(document)]
    if where is not None:
        said.append(f"{where['part']} to {where['replications']} replications")
    if document["state"] == "writing":
        said.append(_written(document))
    if document["runs"]["failed"]:
        said.append(f"{document['runs']['failed']} failed")
    return f"batch {document['state']}: " + "; ".join(said)


def _done(document: dict[str, Any]) -> str:
    runs = document["runs"]
    there = runs["reused"] + runs["computed"]
    share = 100 * there // runs["asked"] if runs["asked"] else 100
    return f"{there:,} of {runs['asked']:,} runs, {share} %"


def _written(document: dict[str, Any]) -> str:
    return f"results written for {document['results_written']} of {len(document['parts'])} parts"


def _pace(document: dict[str, Any]) -> str:
    rate, left, bound = (
        document[name] for name in ("runs_per_second", "seconds_left", "seconds_to_deadline")
    )
    said = [f"{rate:,.1f} runs a second"] if rate is not None and document["state"] == "running" else []
    said.append("time left not known" if left is None else f"{about(left)} left" if left else "nothing left")
    if bound is not None and document["state"] == "running":
        said.append(f"ends in {about(bound)}")
    return ", ".join(said)


def picture(document: dict[str, Any]) -> Any:
    """A snapshot for a terminal: sums, a bar, and the parts that are not complete."""
    from rich.console import Group
    from rich.progress_bar import ProgressBar
    from rich.text import Text

    runs = document["runs"]
    there = runs["reused"] + runs["computed"]
    where = document["now"]
    lines = [
        f"{document['title'] or document['plan']}: {document['state']} {document['bounds']}",
        f"{_done(document)}; {_pace(document)}; workers {document['workers']}; failed {runs['failed']}",
    ]
    if where is not None:
        lines.append(f"now: {where['part']}, up to {where['replications']} replications")
    if document["state"] == "writing":
        lines.append(_written(document))
    if document["clock"]:
        lines.append(document["clock"])
    bar = ProgressBar(total=max(1, runs["asked"]), completed=there, width=60)
    return Group(*map(Text, lines), bar, _parts(document), *map(Text, document.get("log", ())))


def _parts(document: dict[str, Any]) -> Any:
    from rich import box
    from rich.table import Table
    from rich.text import Text

    open_parts = [part for part in document["parts"] if not part["complete"]]
    table = Table(box=box.SIMPLE_HEAD, pad_edge=False)
    for place, column in enumerate(
        ("part not complete", "priority", "replications", "runs missing", "alone")
    ):
        table.add_column(column, justify="left" if place == 0 else "right")
    for part in open_parts[:MOST_PARTS_SHOWN]:
        table.add_row(*map(Text, part_row(part)))
    if len(open_parts) > MOST_PARTS_SHOWN:
        table.add_row(f"... and {len(open_parts) - MOST_PARTS_SHOWN} more")
    return table


def part_row(part: dict[str, Any]) -> tuple[str, ...]:
    """A part in a table: name, priority, replications reached, runs missing, and the time that these would take."""
    left = part["seconds_left"]
    return (
        part["name"], f"{part['priority']}", f"{part['reached']} of {part['replications']}", f"{part['missing']:,}",
        "-" if part["complete"] else "not known" if left is None else about(left),
    )  # fmt: skip


# ---- from another terminal ----


def snapshot(folder: Path) -> dict[str, Any]:
    """The batch's last snapshot, with the log's last lines, and whether its process is still there."""
    from sim.store_file import is_written

    alive = is_written(folder)  # first: a batch that ends meanwhile has then left its last snapshot
    try:
        document = json.loads((folder / SNAPSHOT).read_text(encoding="utf-8"))
    except FileNotFoundError:
        raise StoreError(f"{folder} holds no batch ({SNAPSHOT} is missing)") from None
    except (OSError, ValueError) as error:
        raise StoreError(f"{folder / SNAPSHOT} cannot be read: {error}") from error
    if document["state"] in RUNNING and not alive:
        document |= {
            "state": "gone",
            "ended_because": "its process ended without a word; run the batch again to go on",
        }
    log = folder / LOG
    lines = log.read_text(encoding="utf-8", errors="replace").splitlines() if log.exists() else []
    return document | {"log": lines[-LINES_OF_LOG:]}


def watch(folder: Path, as_json: bool) -> None:
    """Shows a folder's batch until it ends; with `as_json` one snapshot, with what the store itself counts."""
    if as_json:
        from sim.store import Store

        document = snapshot(folder)
        with Store(folder) as store:
            put_json(document | {"store": store.counts()})
        return
    with Screen() as screen:
        document = snapshot(folder)
        while document["state"] in RUNNING:
            screen.show(lambda shown=document: shown)
            time.sleep(SECONDS_BETWEEN_LOOKS)
            document = snapshot(folder)
        screen.show(lambda: document, at_once=True)
    if document["ended_because"]:
        say(f"batch {document['state']}: {WHY.get(document['ended_because'], document['ended_because'])}")
