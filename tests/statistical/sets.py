"""Studies of the possible and the confirmed set, of best-reply sets, and the errors planted in them."""

from __future__ import annotations

import itertools
from collections.abc import Callable, Iterator
from functools import partial
from unittest import mock

import numpy as np

from analysis import sets
from analysis.contrasts import Evidence, evidence_of
from analysis.equilibria import regrets
from analysis.payoffs import PayoffTable
from analysis.reply_bands import reply_bands
from analysis.sets import confirmed, possible
from tests.statistical.core import ALPHA, Bench, Figure, Study, at_least, at_most, no_more
from tests.statistical.pool import Experiments

GAMES = ("small", "contested", "crowd", "plateau", "rare", "three", "thresholds")
MANY_CONTROLS = ("three", "crowd")
REPLICATIONS = (10, 20, 50)
LOOKS = (10, 12, 15, 20, 25, 30, 40)
STRICT = 0.01
MOST_BESIDE_TRUTH = (
    1.5  # profiles in C an equilibrium, with control variates, at 50 replications of the large game
)
Judge = Callable[[Evidence, np.random.Generator], np.ndarray]


def whole(evidence: Evidence, rng: np.random.Generator) -> np.ndarray:
    """The possible set at the studies' level."""
    return possible(evidence, ALPHA, rng).mask


def strict(evidence: Evidence, rng: np.random.Generator) -> np.ndarray:
    """The possible set at a smaller level."""
    return possible(evidence, STRICT, rng).mask


def tables(bench: Bench, game: str, replications: int, controls: bool) -> Iterator[PayoffTable]:
    """The table of each experiment."""
    pool, sample = bench.sample(game, replications)
    for chosen in sample.chosen:
        yield pool.table(chosen, controls=controls)


def covered(
    bench: Bench, game: str, replications: int, controls: bool, judge: Judge = whole
) -> tuple[np.ndarray, np.ndarray, Experiments]:
    """By experiment: whether C holds every true equilibrium, and its size."""
    truth, rng = bench.truth(game).equilibria, np.random.default_rng([replications, controls])
    masks = np.array(
        [judge(evidence_of(table), rng) for table in tables(bench, game, replications, controls)]
    ).reshape(-1, truth.size)
    sample = bench.sample(game, replications)[1]
    return masks[:, truth.ravel()].all(axis=1), masks.sum(axis=1), sample


def possible_study(bench: Bench, *, game: str, replications: int, controls: bool) -> list[Figure]:
    """Coverage of C, and how large it is beside the truth."""
    held, sizes, sample = covered(bench, game, replications, controls)
    truth = int(bench.truth(game).equilibria.sum())
    share = float(sizes.mean()) / truth
    what = f"mean size of C / {truth} true equilibria"
    judged = game == "thresholds" and replications == 50 and controls
    size = no_more(what, share, MOST_BESIDE_TRUTH) if judged else Figure(what, share)
    return [at_least("C holds every pure equilibrium", float(held.mean()), 1 - ALPHA, sample), size]


def confirmed_study(bench: Bench, *, game: str, replications: int, controls: bool) -> list[Figure]:
    """How often K holds a profile whose regret is more than epsilon; epsilon is just below one that is not 0."""
    truth, wrong, right = bench.truth(game), [], []
    for table in tables(bench, game, replications, controls):
        mask = confirmed(evidence_of(table), truth.contested, ALPHA).mask
        wrong.append((mask & (truth.regret > truth.contested)).any())
        right.append((mask & truth.equilibria).sum() / truth.equilibria.sum())
    sample = bench.sample(game, replications)[1]
    return [
        at_most(f"K is wrong (epsilon {truth.contested:.2g})", float(np.mean(wrong)), ALPHA, sample),
        Figure("share of the equilibria confirmed", float(np.mean(right))),
    ]


def replies_study(bench: Bench, *, game: str, replications: int, controls: bool) -> list[Figure]:
    """Whether every player's true best replies, to everything, are all in the sets."""
    exact = bench.truth(game).table.payoffs
    true = np.stack([one <= one.min(axis=axis, keepdims=True) + 1e-9 for axis, one in enumerate(exact)])
    rng, held, share = np.random.default_rng(replications), [], []
    for table in tables(bench, game, replications, controls):
        bands = reply_bands(evidence_of(table), true, ALPHA, rng).possible
        held.append(bool(bands[true].all()))
        share.append(bands.sum() / true.sum())
    sample = bench.sample(game, replications)[1]
    return [
        at_least("all best replies are in the sets", float(np.mean(held)), 1 - ALPHA, sample),
        Figure("mean size / true best replies", float(np.mean(share))),
    ]


# ---- errors planted ----


def no_student_map(bench: Bench) -> list[Figure]:
    """The critical value of a sum of flipped scores taken as it is."""
    with mock.patch.object(sets, "flip_to_student", lambda flipped, replications, degrees: flipped):
        return strict_study(bench)


def strict_study(bench: Bench) -> list[Figure]:
    """Coverage of C at a level of .01, where the tail is what matters."""
    held, _, sample = covered(bench, "crowd", 10, False, strict)
    return [at_least("C holds every pure equilibrium", float(held.mean()), 1 - STRICT, sample)]


def peeking(bench: Bench) -> list[Figure]:
    """Seven looks from 10 to 40 replications, each at the whole level; what any look excludes stays out."""
    pool, sample = bench.sample("crowd", LOOKS[-1])
    truth, rng, held = bench.truth("crowd").equilibria, np.random.default_rng(8), []
    for chosen in sample.chosen:
        looks = [whole(evidence_of(pool.table(chosen[:look], controls=False)), rng) for look in LOOKS]
        held.append(bool(np.logical_and.reduce(looks)[truth].all()))
    return [at_least("C holds every pure equilibrium", float(np.mean(held)), 1 - ALPHA, sample)]


def plug_in_confirmation(bench: Bench) -> list[Figure]:
    """Profiles whose estimated regret is at most epsilon, confirmed without more ado."""
    truth, wrong = bench.truth("small"), []
    for table in tables(bench, "small", 10, False):
        mask = regrets(table.payoffs, "cost").max(axis=0) <= truth.contested
        wrong.append((mask & (truth.regret > truth.contested)).any())
    sample = bench.sample("small", 10)[1]
    return [at_most("K is wrong", float(np.mean(wrong)), ALPHA, sample)]


KINDS = {"possible": possible_study, "confirmed": confirmed_study, "replies": replies_study}
REDUCED = {
    "possible-contested-10", "possible-contested-20-controls", "possible-plateau-10", "possible-rare-20",
    "possible-three-10", "confirmed-contested-10-controls", "confirmed-rare-20", "replies-contested-10",
    "replies-plateau-10",
}  # fmt: skip


def _studies() -> Iterator[Study]:
    for (kind, run), game, count, controls in itertools.product(
        KINDS.items(), GAMES, REPLICATIONS, (False, True)
    ):
        if controls and game in MANY_CONTROLS and count == 10:
            continue  # too few degrees of freedom are left
        name = f"{kind}-{game}-{count}" + ("-controls" if controls else "")
        what = f"R = {count}" + (", control variates" if controls else "")
        known = {"game": game, "replications": count, "controls": controls}
        yield Study(name, what, partial(run, **known), ((game, count),), reduced=name in REDUCED)


STUDIES = [
    *_studies(),
    Study("possible-crowd-10-strict", "R = 10, level .01", strict_study, (("crowd", 10),), reduced=False),
    Study("planted-no-student-map", "R = 10, level .01", no_student_map, (("crowd", 10),), planted=True),
    Study("planted-peeking", "looks at 10 to 40", peeking, (("crowd", 40),), planted=True, reduced=False),
    Study("planted-plug-in", "R = 10, small game", plug_in_confirmation, (("small", 10),), planted=True),
]
