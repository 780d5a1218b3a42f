"""The `[diversion]` table: what happens to a patient whose home does not take them."""

from __future__ import annotations

from sim.rules import tables
from sim.tables import Table


class Diversion(*tables("diversion_keys"), Table):
    """The last resort when every unit asked is closed or full, and what a transfer costs in time."""
