"""carriersim: a Monte Carlo simulator of carriers in short conducting channels with scatterers.

import carriersim as cs

result = cs.simulate(cs.load("scenarios/quick-start.yaml"), workers=2)
print(result.resistance_ohm.value, result.resistance_ohm.error)
"""

__version__ = "0.1.0"

from carriersim.scenario import Scenario, ScenarioError, load

__all__ = ["Scenario", "ScenarioError", "__version__", "load", "open_result", "simulate"]


def __getattr__(name):
    # Numerical libraries are imported on first use: reading and checking a scenario needs none.
    if name == "simulate":
        from carriersim.runner import simulate

        return simulate
    if name == "open_result":
        from carriersim.storage import open_result

        return open_result
    raise AttributeError(f"module 'carriersim' has no attribute '{name}'")
