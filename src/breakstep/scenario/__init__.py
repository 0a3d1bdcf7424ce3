"""The input: scenario files in TOML, checked whole, or code of the user's; and the problems they describe."""

from breakstep.scenario.find import shipped
from breakstep.scenario.load import AnyScenario, Scenario, any_scenario_from, load_scenario, scenario_from
from breakstep.scenario.setup import Setup

__all__ = ["AnyScenario", "Scenario", "Setup", "any_scenario_from", "load_scenario", "scenario_from", "shipped"]
