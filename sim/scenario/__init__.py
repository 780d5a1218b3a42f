"""The frozen description of a network, one file per table of the scenario file."""

from sim.scenario.load import parse_scenario, read_scenario
from sim.scenario.policies import Policy, UnitRules
from sim.scenario.scenario import Scenario

__all__ = ["Policy", "Scenario", "UnitRules", "parse_scenario", "read_scenario"]
