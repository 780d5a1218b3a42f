"""`python -m tests.statistical [NAME ...]`: the full studies, with a table of every figure, its bar and the verdict.

A name selects every study that has it in its own. Pools and outcomes are kept in the folder, so that a run that was
stopped (Ctrl-C) goes on where it was; without `--folder` it is a temporary one.
"""

from __future__ import annotations

import argparse
import contextlib
import json
import sys
import tempfile
from collections.abc import Sequence
from pathlib import Path

from analysis.command.progress import progress, until_interrupted
from tests.statistical.core import FULL, Bench, Effort, Outcome, Study
from tests.statistical.running import chosen, lines, outcomes, pools, written

INTERRUPTED = 130


def arguments(given: Sequence[str] | None) -> argparse.Namespace:
    """The options; status 2 and the reason for what cannot be."""
    parser = argparse.ArgumentParser("python -m tests.statistical", description=__doc__.splitlines()[0])
    parser.add_argument("names", nargs="*", help="parts of names [default: all]")
    parser.add_argument("--experiments", type=_count, default=FULL.experiments, help="of each study at most")
    parser.add_argument("--pool", type=_count, default=FULL.pool, help="replications of the large game")
    parser.add_argument("--workers", type=_count, default=1)
    parser.add_argument("--folder", type=Path, help="where pools and outcomes are kept")
    parser.add_argument("--list", action="store_true", help="only name the studies")
    return parser.parse_args(given)


def _count(text: str) -> int:
    value = int(text)
    if value < 1:
        raise argparse.ArgumentTypeError(f"must be at least 1; got {value}")
    return value


def main(given: Sequence[str] | None = None) -> int:
    """Runs what is asked for; 0 where every bar is met and every planted error caught, 1 otherwise."""
    asked = arguments(given)
    studies = chosen(asked.names)
    if asked.list or not studies:
        print(
            "\n".join(study.name for study in studies)
            or f"no study has {' or '.join(asked.names)} in its name"
        )
        return 0 if studies else 2
    effort = Effort(asked.experiments, asked.pool)
    with contextlib.ExitStack() as stack:
        folder = asked.folder or Path(stack.enter_context(tempfile.TemporaryDirectory()))
        folder.mkdir(parents=True, exist_ok=True)
        try:
            _fill(studies, folder, effort, asked.workers)
        except KeyboardInterrupt:
            print(
                "interrupted; the replications done are kept" if asked.folder else "interrupted",
                file=sys.stderr,
            )
            return INTERRUPTED
        return _run(studies, folder, effort, asked.workers)


def _fill(studies: Sequence[Study], folder: Path, effort: Effort, workers: int) -> None:
    """Simulates the pools."""
    needed = pools(studies, effort)
    for game, size in needed:
        with progress(f"replications of {game}", size, "replications") as bar:
            Bench(folder, effort, workers, bar.advance).pool(game, size)


def _run(studies: Sequence[Study], folder: Path, effort: Effort, workers: int) -> int:
    """Runs the studies that the folder has no outcome of, and prints all."""
    kept = folder / f"outcomes-{effort.experiments}-{effort.pool}.jsonl"
    before = {one.name: one for one in _read(kept)}
    missing = [study for study in studies if study.name not in before]
    found = [before[study.name] for study in studies if study.name in before]
    for one in found:
        print("\n".join(lines(one)))
    with progress("studies", len(missing), "studies") as bar, until_interrupted(
        outcomes(missing, folder, effort, workers)
    ) as replies, kept.open("a", encoding="utf-8") as file:  # fmt: skip
        for outcome in replies:
            print(written(outcome), file=file, flush=True)
            print("\n".join(lines(outcome)), flush=True)
            found.append(outcome)
            bar.advance()
    missed = [one.name for one in found if not one.passed]
    print(f"{len(found)} of {len(studies)} studies, {len(missed)} missed: {', '.join(missed) or 'none'}")
    return INTERRUPTED if replies.interrupted else int(bool(missed))


def _read(path: Path) -> list[Outcome]:
    if not path.exists():
        return []
    return [Outcome.of(json.loads(line)) for line in path.read_text(encoding="utf-8").splitlines()]


if __name__ == "__main__":
    sys.exit(main())
