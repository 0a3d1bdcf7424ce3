"""The input: scenario files in TOML, checked whole, and the problems they describe."""

from breakstep.scenario.find import shipped
from breakstep.scenario.load import Scenario, load_scenario, scenario_from

__all__ = ["Scenario", "load_scenario", "scenario_from", "shipped"]
