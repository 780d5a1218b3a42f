"""How large a chain may be, and the refusal of a larger one."""

from __future__ import annotations

from dataclasses import dataclass

from sim.errors import BrimlineError

REMEDY = (
    "take fewer units or beds, lower thresholds, or groups that share one mean stay (each further mean, "
    "or phase of a stay, in a unit multiplies its states), or simulate"
)


class ChainTooLarge(BrimlineError):  # noqa: N818 - the name says it all
    """The chain would take too many states, too much work or too much memory.

    states: the number of states, or an upper bound of it. excess: what is too large, in words.
    """

    def __init__(self, states: int, excess: str) -> None:
        self.states, self.excess = states, excess
        super().__init__(f"the exact chain is too large: {excess}; {REMEDY}")
        self.reasons = (str(self),)  # a refusal, as of a scenario out of scope

    def __reduce__(self):  # exceptions with more than one argument do not unpickle by themselves
        return type(self), (self.states, self.excess)


@dataclass(frozen=True)
class Limits:
    """The largest chain that is solved.

    states: states that can be reached, where they are eliminated. work: multiply-adds of the elimination.
    bytes: memory of its band. relaxed: states that can be reached, where occupancies tell all and are relaxed.
    """

    states: int = 20_000
    relaxed: int = 2_000_000
    work: float = 2e11
    bytes: int = 2**31

    def check_bound(self, bound: int, *, relaxed: bool = False) -> None:
        """Refuses a hopeless chain by an upper bound of its states, before anything is built.

        A bound may exceed the states that can be reached, hence the fivefold allowance.
        """
        most = self.relaxed if relaxed else self.states
        if bound > 5 * most:
            raise ChainTooLarge(bound, f"as many as {bound:,} states, the limit is {most:,}")

    def check_states(self, states: int, *, relaxed: bool = False) -> None:
        """Refuses too many states."""
        most = self.relaxed if relaxed else self.states
        if states > most:
            raise ChainTooLarge(states, f"{states:,} states, the limit is {most:,}")

    def check_band(self, states: int, *, width: int, work: float, size: int) -> None:
        """Refuses an elimination of that half bandwidth, work (multiply-adds) and size (bytes)."""
        band = f"{states:,} states with a half bandwidth of {width:,}"
        if work > self.work:
            raise ChainTooLarge(states, f"{band} take {work:.1e} multiply-adds, the limit is {self.work:.1e}")
        if size > self.bytes:
            limit = f"the limit is {self.bytes / 2**30:.1f} GiB"
            raise ChainTooLarge(states, f"{band} take {size / 2**30:.1f} GiB, {limit}")


DEFAULT = Limits()
