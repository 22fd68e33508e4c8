"""The closed forms that apply to any scenario."""

import numpy as np

from carriersim.limits.listing import elastic_limits
from carriersim.limits.listing_relaxation import relaxation_limits
from carriersim.limits.listing_space import space_limits
from carriersim.limits.number_transport import has_coupled_probe
from carriersim.limits.rows import Limit


def limits_for(scenario) -> tuple[Limit, ...]:
    """The closed forms that apply to a scenario whose random scatterers are drawn.

    In one dimension, with relaxation or coupled probes, all of the number and energy transport has
    closed forms if nothing depends on energy, else little has. For more dimensions see
    listing_space.
    """
    return tuple(limit for limit in _limits(scenario) if np.isfinite(limit.expected))


def _limits(scenario):
    if scenario.channel.dimension != 1:
        return space_limits(scenario)
    if has_coupled_probe(scenario) or scenario.relaxation.mechanisms:
        return relaxation_limits(scenario)
    return elastic_limits(scenario)
