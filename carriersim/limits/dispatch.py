"""The closed forms that apply to any scenario."""

import numpy as np

from carriersim.limits.listing import elastic_limits
from carriersim.limits.listing_relaxation import relaxation_limits
from carriersim.limits.number_transport import has_coupled_probe
from carriersim.limits.rows import Limit


def limits_for(scenario) -> tuple[Limit, ...]:
    """The closed forms that apply to a scenario whose random scatterers are drawn.

    Empty in d = 2 and 3. With relaxation or coupled probes all of the number and energy transport
    has closed forms if nothing depends on energy, else little has.
    """
    if scenario.channel.dimension != 1:
        return ()
    relaxes = has_coupled_probe(scenario) or bool(scenario.relaxation.mechanisms)
    rows = relaxation_limits(scenario) if relaxes else elastic_limits(scenario)
    return tuple(limit for limit in rows if np.isfinite(limit.expected))
