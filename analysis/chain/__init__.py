"""The exact Markov chain of a network with exponential stays, built from the scenario and from nothing else."""

from analysis.chain.limits import ChainTooLarge, Limits
from analysis.chain.measures import ExactResult
from analysis.chain.scope import OutOfScope, refusals
from analysis.chain.solve import chain_size, solve

__all__ = ["ChainTooLarge", "ExactResult", "Limits", "OutOfScope", "chain_size", "refusals", "solve"]
