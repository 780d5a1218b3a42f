"""Which equilibrium is reached: best replies in turn, best replies all at once, and fictitious play, from a start.

Fictitious play answers the others' past shares (Brown 1951, "Iterative solution of games by fictitious play"; a
strict pure equilibrium, once played, is played for ever; from memory). In every rule a player who is already
replying best stays, and else takes the lowest-numbered of the best strategies. These are models of how thresholds
might move, not forecasts.
"""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from analysis.equilibria import DEFAULT_TOLERANCE, Profile, as_costs, expected, regrets
from analysis.goals import Sense

EQUILIBRIUM, CYCLE, UNSETTLED = "equilibrium", "cycle", "unsettled"
MOST_ROUNDS = 10_000
FICTITIOUS_ROUNDS = 1_000
TABLES = 200


@dataclass(frozen=True)
class Path:
    """Where a rule leads.

    visited: profiles from the start on (of a cycle: up to its first return). ends: `equilibrium`, `cycle` or
    `unsettled`. cycle: the profiles that come round again. shares: of fictitious play that does not settle, each
    player's shares of time. rounds: until the end was known.
    """

    rule: str
    visited: tuple[Profile, ...]
    ends: str
    rounds: int
    cycle: tuple[Profile, ...] = ()
    shares: tuple[np.ndarray, ...] | None = None

    @property
    def last(self) -> Profile:
        """The last profile visited."""
        return self.visited[-1]


def in_turn(
    payoffs: np.ndarray, sense: Sense, start: Profile, *, tolerance: float = DEFAULT_TOLERANCE
) -> Path:
    """Players reply best one after the other, in scenario order, until a whole round changes nothing."""
    costs = as_costs(np.asarray(payoffs, float), sense)

    def round_of(profile: Profile) -> list[Profile]:
        steps = []
        for player in range(len(costs)):
            profile = _replaced(profile, player, _reply(costs[player], profile, player, tolerance))
            steps.append(profile)
        return steps

    return _played("best replies in turn", start, round_of)


def all_at_once(
    payoffs: np.ndarray, sense: Sense, start: Profile, *, tolerance: float = DEFAULT_TOLERANCE
) -> Path:
    """All players reply best to the last profile at once, until nothing changes."""
    costs = as_costs(np.asarray(payoffs, float), sense)

    def round_of(profile: Profile) -> list[Profile]:
        return [tuple(_reply(costs[player], profile, player, tolerance) for player in range(len(costs)))]

    return _played("best replies all at once", start, round_of)


def _played(rule: str, start: Profile, round_of) -> Path:
    """Rounds until a profile at the start of a round comes again; a round that changes nothing is an equilibrium."""
    seen, visited = {start: 0}, [start]
    here = start
    for rounds in range(1, MOST_ROUNDS + 1):
        steps = round_of(here)
        if all(step == here for step in steps):
            return Path(rule, tuple(visited), EQUILIBRIUM, rounds)
        visited += [step for before, step in zip([here, *steps], steps, strict=False) if step != before]
        here = steps[-1]
        if here in seen:
            return Path(rule, tuple(visited), CYCLE, rounds, tuple(visited[seen[here] : -1]))
        seen[here] = len(visited) - 1
    return Path(rule, tuple(visited), UNSETTLED, MOST_ROUNDS)


def _reply(cost: np.ndarray, profile: Profile, player: int, tolerance: float) -> int:
    own = cost[(*profile[:player], slice(None), *profile[player + 1 :])]
    return _choice(own, profile[player], tolerance)


def _choice(own: np.ndarray, present: int, tolerance: float) -> int:
    """The present strategy where it is best, else the first of the best."""
    best = own.min()
    return present if own[present] <= best + tolerance else int(np.argmax(own <= best + tolerance))


def _replaced(profile: Profile, player: int, strategy: int) -> Profile:
    return (*profile[:player], strategy, *profile[player + 1 :])


def fictitious_play(
    payoffs: np.ndarray,
    sense: Sense,
    start: Profile,
    *,
    rounds: int = FICTITIOUS_ROUNDS,
    tolerance: float = DEFAULT_TOLERANCE,
) -> Path:
    """Each player replies best to the shares of time that the others spent at each strategy, the start included.

    Ends where a strict equilibrium is played, for it is then played for ever; after `rounds` the profile of the last
    tenth, if it was only one and is an equilibrium, counts as reached too.
    """
    costs = as_costs(np.asarray(payoffs, float), sense)
    shape = costs.shape[1:]
    regret = regrets(payoffs, sense)
    counts = [np.eye(n)[k] for n, k in zip(shape, start, strict=True)]
    here, visited, since = start, [start], 0
    for played in range(1, rounds + 1):
        if since == played - 1 and _is_strict(costs, here, tolerance):
            return Path("fictitious play", tuple(visited), EQUILIBRIUM, played)
        shares = [one / played for one in counts]
        step = tuple(
            _choice(expected(cost, shares, keep=(player,)), here[player], tolerance)
            for player, cost in enumerate(costs)
        )
        if step != here:
            visited.append(step)
            here, since = step, played
        for one, k in zip(counts, here, strict=True):
            one[k] += 1
    if since <= 0.9 * rounds and (regret[(slice(None), *here)] <= tolerance).all():
        return Path("fictitious play", tuple(visited), EQUILIBRIUM, rounds)
    return Path(
        "fictitious play", tuple(visited), UNSETTLED, rounds, shares=tuple(one / one.sum() for one in counts)
    )


def _is_strict(costs: np.ndarray, profile: Profile, tolerance: float) -> bool:
    """Whether every deviation by one player costs that player more than the tolerance."""
    for player, cost in enumerate(costs):
        own = cost[(*profile[:player], slice(None), *profile[player + 1 :])]
        if (np.delete(own, profile[player]) <= own[profile[player]] + tolerance).any():
            return False
    return True


RULES = {"in_turn": in_turn, "all_at_once": all_at_once, "fictitious_play": fictitious_play}


@dataclass(frozen=True)
class Reached:
    """Of resampled tables, the share in which a rule ends at each profile, in a cycle, or unsettled.

    shares: profile -> share of all tables; the rest is `cycling` and `unsettled`.
    """

    rule: str
    tables: int
    shares: Mapping[Profile, float]
    cycling: float
    unsettled: float


def reached_shares(
    tables: np.ndarray, sense: Sense, start: Profile, *, tolerance: float = DEFAULT_TOLERANCE
) -> dict[str, Reached]:
    """How often each rule ends where, over tables (tables, players, *shape) of resampled replications."""
    found = {}
    for name, rule in RULES.items():
        ends: Counter[Profile | str] = Counter()
        for payoffs in tables:
            path = rule(payoffs, sense, start, tolerance=tolerance)
            ends[path.last if path.ends == EQUILIBRIUM else path.ends] += 1
        shares = {end: count / len(tables) for end, count in ends.most_common() if not isinstance(end, str)}
        found[name] = Reached(
            path.rule, len(tables), shares, ends[CYCLE] / len(tables), ends[UNSETTLED] / len(tables)
        )
    return found
