"""The `[run]` table: seed, length, replications, confidence."""

from __future__ import annotations

from typing import Annotated

from pydantic import Field

from sim.tables import MOST_DAYS, NotNegative, Positive, Table


class Run(Table):
    """How long and how often the network is simulated. Days count from Monday 00:00."""

    seed: Annotated[int, Field(ge=0, lt=2**63, examples=["seed = 4021"])] = 4021
    warm_up_days: Annotated[NotNegative, Field(le=MOST_DAYS, examples=["warm_up_days = 126"])] = 126.0
    measured_days: Annotated[Positive, Field(le=MOST_DAYS, examples=["measured_days = 728"])] = 728.0
    replications: Annotated[int, Field(ge=1, le=1_000_000, examples=["replications = 32"])] = 32
    confidence: Annotated[float, Field(gt=0, lt=1, examples=["confidence = 0.95"])] = 0.95
