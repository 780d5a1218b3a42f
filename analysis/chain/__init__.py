"""The exact Markov chain of a network with exponential stays, built from the scenario and nothing else."""

from analysis.chain.exact import chain_size, solve
from analysis.chain.limits import ChainTooLarge, Limits
from analysis.chain.measures import ExactResult
from analysis.chain.scope import OutOfScope, refusals
from analysis.chain.table import solve_table, solved_together

__all__ = [
    "ChainTooLarge",
    "ExactResult",
    "Limits",
    "OutOfScope",
    "chain_size",
    "refusals",
    "solve",
    "solve_table",
    "solved_together",
]
