"""The same steps in a notebook: read a network, change it, run it, and look at results as frames and as HTML.

    from analysis.notebook import read
    network = read("scenarios/two-units.toml")
    network.simulate(replications=40).to_frame()

Every step calls what the command of the same name calls, and gives the same numbers to the last bit. Nothing is
printed. For planning only, not for decisions on a patient or a live bed.
"""

from analysis.notebook.how import How
from analysis.notebook.network import Network, read
from analysis.notebook.results import Agreement, Comparison, Description, Exact, Game, Simulation
from analysis.notebook.studies import Alignment, Ledger, Report, Sweep, report
from sim.errors import BrimlineError, RunError, ScenarioError, StoreError

__all__ = [
    "Agreement", "Alignment", "BrimlineError", "Comparison", "Description", "Exact", "Game", "How", "Ledger", "Network",
    "Report", "RunError", "ScenarioError", "Simulation", "StoreError", "Sweep", "read", "report",
]  # fmt: skip
