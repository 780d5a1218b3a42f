"""The exact Markov chain of a network with stays of exponential phases, built from the scenario and nothing else."""

from analysis.chain.exact import chain_size, solve
from analysis.chain.fitting import PhaseFit, with_phase_fits
from analysis.chain.limits import ChainTooLarge, Limits
from analysis.chain.measures import ExactResult
from analysis.chain.scope import OutOfScope, refusals
from analysis.chain.table import can_be_solved_together, solve_table, solved_together

__all__ = [
    "ChainTooLarge",
    "ExactResult",
    "Limits",
    "OutOfScope",
    "PhaseFit",
    "can_be_solved_together",
    "chain_size",
    "refusals",
    "solve",
    "solve_table",
    "solved_together",
    "with_phase_fits",
]
