"""The compiled engine's face: lowered networks, rules and intakes in, records out."""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from sim.compiled import kernel
from sim.compiled.calendar import MOST_SEQUENCE, MOST_UNITS
from sim.errors import RunError
from sim.intake import Intake
from sim.lowering import IntakePlan, Network, Rules
from sim.record import GATE_STATES, Record
from sim.rules.out_of_use import Staffing
from sim.trace import KINDS, Trace

HEAP_ABOVE_BEDS = 120
PATIENTS_PER_BLOCK = 128
# An arrival, a transfer, an admission, a discharge; each of three changes of load may move two gates.
MOST_EVENTS_A_PATIENT = 10


def run(network: Network, rules: Rules, intake: Intake, *, trace: Trace | None = None) -> Record:
    """One replication under one policy; see `sim.reference.run`."""
    if trace is None:
        return run_table(network, [rules], intake)[0]
    table = Table(network, [rules], intake)
    reviews = 0 if rules.reviews is None else len(rules.reviews.times)
    changes = 0 if intake.staffing is None else len(intake.staffing.times)
    most = MOST_EVENTS_A_PATIENT * len(intake) + 3 * (reviews + changes)
    note_times, notes = np.empty(most), np.empty((most, 3), np.int64)
    table.advance_first_cell(note_times, notes)
    count = table.counters[0, kernel.NOTED]
    for time, (kind, patient, unit) in zip(note_times[:count].tolist(), notes[:count].tolist(), strict=True):
        trace.note(time, KINDS[kind], patient, unit)
    return table.record(0)


def run_table(
    network: Network, rules: Sequence[Rules], intake: Intake, *, block: int = PATIENTS_PER_BLOCK
) -> list[Record]:
    """One replication under every policy, in blocks of patients so that a block stays in the cache.

    The bits do not depend on `block`. Policies with different review timetables are run in groups.
    """
    records: dict[int, Record] = {}
    for cells in _by_timetable(rules):
        table = Table(network, [rules[cell] for cell in cells], intake)
        table.advance(0, len(intake), block)
        records |= {cell: table.record(place) for place, cell in enumerate(cells)}
    return [records[cell] for cell in range(len(rules))]


def warm(network: Network, rules: Sequence[Rules], plan: IntakePlan) -> None:
    """Compiles the kernels that these rules need, by running them on nobody; what is kept on disk is only loaded."""
    nobody = _nobody(plan)
    for cells in _by_timetable(rules):
        Table(network, [rules[cell] for cell in cells], nobody).advance(0, 1, 1)


class Table:
    """The cells of one replication in progress: policies that share their review timetable."""

    def __init__(self, network: Network, rules: Sequence[Rules], intake: Intake) -> None:
        if len(network.beds) > MOST_UNITS or len(intake) >= MOST_SEQUENCE:
            raise RunError(
                f"the compiled engine takes at most {MOST_UNITS} units and {MOST_SEQUENCE} patients; got "
                f"{len(network.beds)} and {len(intake)}: use --engine reference"
            )
        cells, units, most = len(rules), len(network.beds), int(network.beds.sum()) + 1
        self.network, self.rules, self.intake = network, rules, intake
        self.whole, self.referral, self.soft = (
            _whole(network, rules),
            _stack(rules, "referral_order"),
            _soft(rules),
        )
        self.since = np.zeros((cells, units, 3))
        self.times, self.keys = np.empty((cells, most)), np.empty((cells, most), np.int64)
        self.counters = np.zeros((cells, 5), np.int64)
        self.counters[:, kernel.PERIOD] = -1
        self.occupancy_days = np.zeros((cells, len(network.edges) - 1, units, int(network.beds.max()) + 1))
        self.staffed_days = None if intake.staffing is None else np.zeros_like(self.occupancy_days)
        self.gate_days = np.zeros((cells, units, GATE_STATES))
        self.counts = np.zeros((cells, units, kernel.PAIRS + 2 * units), np.int64)

    def advance(self, first: int, last: int, block: int) -> None:
        """Runs patients `first` to `last` in every cell; up to the end of the window with the last of them."""
        kernel.advance_table(
            *self._intake(), self.network.edges, self.network.extra_days, self.referral, self.soft, *self._reviews(),
            self.whole, self.since, self.times, self.keys, self.counters, self._in_heap(),
            self.occupancy_days, self.staffed_days, self.gate_days, self.counts, first, last, block,
        )  # fmt: skip

    def advance_first_cell(self, note_times: np.ndarray, notes: np.ndarray) -> None:
        """Runs the first cell from beginning to end and notes every event."""
        kernel.advance(
            *self._intake(), self.network.edges, self.network.extra_days, self.referral[0],
            self.soft[0], *self._reviews(),
            self.whole[0], self.since[0], self.times[0], self.keys[0], self.counters[0], self._in_heap(),
            self.occupancy_days[0], None if self.staffed_days is None else self.staffed_days[0],
            self.gate_days[0], self.counts[0], note_times, notes, 0, len(self.intake),
        )  # fmt: skip

    def record(self, cell: int) -> Record:
        """What one cell measured."""
        counts, units = self.counts[cell], len(self.network.beds)
        pairs = counts[:, kernel.PAIRS :]
        return Record(
            occupancy_days=self.occupancy_days[cell], gate_days=self.gate_days[cell], arrived=counts[:, kernel.ARRIVED],
            turned_away=counts[:, kernel.TURNED], diverted=pairs[:, :units], admitted=pairs[:, units:],
            on_road_at_start=counts[:, kernel.ON_ROAD_AT_START], on_road_at_end=counts[:, kernel.ON_ROAD_AT_END],
            staffed_days=None if self.staffed_days is None else self.staffed_days[cell],
        )  # fmt: skip

    def _intake(self) -> tuple[np.ndarray | None, ...]:
        intake = self.intake
        staffing = (None, None, None) if intake.staffing is None else tuple(vars(intake.staffing).values())
        return intake.arrival, intake.home, intake.stay, intake.delay, intake.gate, *staffing

    def _reviews(self) -> tuple[np.ndarray | None, np.ndarray | None]:
        reviews = self.rules[0].reviews
        return (None, None) if reviews is None else (reviews.times, reviews.units)

    def _in_heap(self) -> bool:
        return int(self.network.beds.sum()) > HEAP_ABOVE_BEDS


def _whole(network: Network, rules: Sequence[Rules]) -> np.ndarray:
    """What the kernel reads of every unit, (cells, units, columns); units start empty."""
    whole = np.zeros((len(rules), len(network.beds), kernel.COLUMNS), np.int64)
    own, incoming = _stack(rules, "own_closes"), _stack(rules, "incoming_closes")
    columns = {
        kernel.BEDS: network.beds,
        kernel.STAY_CLASS: network.stay_class,
        kernel.OWN_CLOSES: own,
        kernel.OWN_REOPENS: _stack(rules, "own_reopens"),
        kernel.INCOMING_CLOSES: incoming,
        kernel.INCOMING_REOPENS: _stack(rules, "incoming_reopens"),
        kernel.LAST_RESORT: np.array([[one.last_resort] for one in rules]),
        kernel.REVIEWED: np.array([[0] if one.reviews is None else one.reviews.reviewed for one in rules]),
        kernel.GATE_STATE: (own == 0) * kernel.OWN_CLOSED | (incoming == 0) * kernel.INCOMING_CLOSED,
    }
    for column, values in columns.items():
        whole[:, :, column] = values
    return whole


def _stack(rules: Sequence[Rules], name: str) -> np.ndarray:
    return np.stack([getattr(one, name) for one in rules])


def _soft(rules: Sequence[Rules]) -> np.ndarray:
    """Every cell's chances of admission while closed, (cells, units)."""
    none = np.zeros(len(rules[0].own_closes))
    return np.stack([none if one.admit_while_closed is None else one.admit_while_closed for one in rules])


def _by_timetable(rules: Sequence[Rules]) -> list[list[int]]:
    """Cells that share their review timetable."""
    groups: dict[tuple[bytes, ...], list[int]] = {}
    for cell, one in enumerate(rules):
        timetable = (
            () if one.reviews is None else tuple(column.tobytes() for column in vars(one.reviews).values())
        )
        groups.setdefault(timetable, []).append(cell)
    return list(groups.values())


def _nobody(plan: IntakePlan) -> Intake:
    """One patient who never comes, and changes of staffed beds where the plan has them."""
    never, home = np.array([np.inf]), np.zeros(1, np.int64)
    staffing = None if plan.outages is None else Staffing(never, home, home)
    stay = np.ones((len(plan.stay_factors), 1))
    return Intake(never, home, home, np.ones(1), stay, np.zeros(1), np.array([0.5]), staffing)
