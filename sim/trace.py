"""A trace: every event of one run, as an outsider could follow it."""

from __future__ import annotations

import csv
from dataclasses import dataclass, field
from pathlib import Path

from sim.lowering import NOBODY
from sim.wording import in_spreadsheet

KINDS = (
    "arrival", "admission", "transfer", "turned away", "discharge", "review", "own gate opens", "own gate closes",
    "incoming gate opens", "incoming gate closes", "staffing",
)  # fmt: skip


@dataclass
class Trace:
    """Events in the order they happened: (time in days, kind, patient or -1, unit's place).

    Kinds: arrival (at the home), admission, transfer (the decision, at the unit that will take the patient),
    turned away, discharge, review, staffing (staffed beds change), and each gate that opens or closes.
    """

    events: list[tuple[float, str, int, int]] = field(default_factory=list)

    def note(self, time: float, kind: str, patient: int, unit: int) -> None:
        """Adds one event."""
        self.events.append((time, kind, patient, unit))

    def write(self, path: Path, units: tuple[str, ...]) -> None:
        """Writes CSV with the columns time, kind, patient, unit; the patient is empty for gates and reviews."""
        with path.open("w", newline="", encoding="utf-8") as file:
            rows = csv.writer(file)
            rows.writerow(["time", "kind", "patient", "unit"])
            for time, kind, patient, unit in self.events:
                whom = "" if patient == NOBODY else patient
                rows.writerow([time, kind, whom, in_spreadsheet(units[unit])])
