"""hypothesis strategies for whole networks: what any engine can be run on.

Times lie on a coarse clock, so that discharges, transfer arrivals, reviews, new arrivals and window edges
often fall on the same instant. Some clocks are not exact in binary: their ties are near misses of one bit.
"""

from __future__ import annotations

from itertools import product

from hypothesis import strategies as st

from sim.intake import Intake
from sim.lowering import ANY_BED, HOME_BED, TURNED_AWAY, Network, Rules
from tests.builders import Case, Patient, intake, network, rules

TICKS = (0.25, 0.25, 0.25, 1 / 3, 0.1)  # days
STAY_FACTORS = ((1.0,), (1.0, 2.0), (0.5, 1.0, 1.25))
STAYS = (1, 0, 1, 2, 3, 4, 5, 8, 13, 30)  # ticks
MOST_PATIENTS = 120

bed_numbers = st.sampled_from([*(1, 2, 3) * 4, *range(1, 9), *range(9, 41, 4), 40])
chances = st.sampled_from([0.0, 0.0, 0.25, 0.5, 0.5, 1.0])  # some equal to a patient's gate number
at_least = st.sampled_from([2, 0, 6, 12])  # patients
# How many patients alike, their delay in ticks, their gate number; drawn as one, which is much faster.
chance_numbers = st.sampled_from(
    list(product([1, 1, 1, 2, 5, 15], [0, 0, 1, 2, 6], [0.25, 0.25, 0.5, 0.5, 2.0**-53, 1 - 2.0**-53]))
)
last_resorts = st.sampled_from([TURNED_AWAY, HOME_BED, ANY_BED])


@st.composite
def networks(draw: st.DrawFn, tick: float, stay_classes: int = 1) -> Network:
    """1 to 6 units, small ones likelier; a warm-up or none; 1 to 4 judged periods on the clock."""
    beds = draw(st.lists(bed_numbers, min_size=1, max_size=6))
    edges = [draw(st.sampled_from([0, 0, 0, 1, 2, 3, 5, 8]))]
    for length in draw(st.lists(st.integers(1, 20), min_size=1, max_size=4)):
        edges.append(edges[-1] + length)
    return network(
        beds,
        edges=[edge * tick for edge in edges],
        extra_days=draw(st.sampled_from([0, 0, 1, 3])) * tick,
        stay_class=draw(st.lists(st.integers(0, stay_classes - 1), min_size=len(beds), max_size=len(beds))),
    )


@st.composite
def policies(draw: st.DrawFn, of: Network, tick: float) -> Rules:
    """Any rules that the network can have."""
    n = len(of.beds)
    own = [draw(thresholds(int(beds))) for beds in of.beds]
    return rules(
        of,
        own=own,
        incoming=[draw(thresholds(closes)) for closes in own],
        gap=[draw(st.sampled_from([1, 1, 1, 2, 3, *range(1, 2 * int(beds))])) for beds in of.beds],
        admit_while_closed=draw(st.lists(chances, min_size=n, max_size=n)),
        review_hours=[24 * tick * draw(st.sampled_from([0, 0, 0, 1, 2, 3])) for _ in range(n)],
        asks=[draw(referral_orders(home, n)) for home in range(n)],
        last_resort=draw(last_resorts),
    )


def thresholds(most: int) -> st.SearchStrategy[int]:
    """A threshold from 0 to `most`, both ends likelier."""
    return st.sampled_from([*range(most, -1, -1), most, most])


@st.composite
def referral_orders(draw: st.DrawFn, home: int, n: int) -> list[int]:
    """The default order, another order of some of the others, or nobody."""
    others = [(home + step) % n for step in range(1, n)]
    if draw(st.booleans()):
        return others
    return draw(st.permutations(others))[: draw(st.integers(0, n))]


@st.composite
def intakes(draw: st.DrawFn, of: Network, tick: float, stay_factors: tuple[float, ...] = (1.0,)) -> Intake:
    """Up to 120 patients on the clock, often several alike at once; some arrive at the end or later."""
    last = round(float(of.edges[-1]) / tick)
    rows = st.tuples(
        st.integers(0, last + 1), st.integers(0, len(of.beds) - 1), st.sampled_from(STAYS), chance_numbers
    )
    patients = [
        Patient(arrival * tick, home, stay * tick, delay * tick, gate)
        for arrival, home, stay, (alike, delay, gate) in draw(
            st.lists(rows, min_size=draw(at_least), max_size=20)
        )
        for _ in range(alike)
    ]
    return intake(*patients[:MOST_PATIENTS], stay_factors=stay_factors, staffing=draw(staffing_of(of, tick)))


@st.composite
def staffing_of(draw: st.DrawFn, of: Network, tick: float) -> list[tuple[float, int, int]] | None:
    """No changes of staffed beds in most networks, else up to eight on the clock, down to no bed at all."""
    if draw(st.sampled_from([True, True, False])):
        return None
    last = round(float(of.edges[-1]) / tick)
    places = st.tuples(st.integers(0, last + 1), st.integers(0, len(of.beds) - 1))
    changes = sorted(draw(st.sets(places, max_size=8)))
    return [(time * tick, unit, draw(st.integers(0, int(of.beds[unit])))) for time, unit in changes]


@st.composite
def cases(draw: st.DrawFn) -> Case:
    """A whole run: a network, rules that fit it, and an intake for it."""
    tick = draw(st.sampled_from(TICKS))
    factors = draw(st.sampled_from(STAY_FACTORS))
    of = draw(networks(tick, len(factors)))
    return Case(of, draw(policies(of, tick)), draw(intakes(of, tick, factors)))


@st.composite
def rule_parameters(draw: st.DrawFn, beds: int) -> dict[str, tuple]:
    """What a unit of so many beds may choose in a game: some rule parameters, each over some values."""
    of_beds = st.lists(st.integers(0, beds), min_size=1, max_size=4, unique=True).map(tuple)
    values = {
        "closure_threshold": of_beds,
        "incoming_threshold": of_beds,
        "reopening_gap": st.sampled_from([(1,), (1, 2), (3, 1)]),
        "admit_while_closed": st.sampled_from([(0.0,), (0.0, 0.25)]),
    }
    chosen = draw(st.sets(st.sampled_from(list(values)), min_size=1))
    return {name: draw(values[name]) for name in values if name in chosen}
