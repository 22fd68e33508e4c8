"""Figures of a Result: potentials, occupations, temperatures, directions, where resistance and heat
sit, and the ways of a few carriers.

Every `draw_*` takes axes (or a figure), a Result and a Style, and draws nothing but what the result
holds; `save_all` writes the files of a run.
"""

from carriersim.figures.departure import draw as draw_departure
from carriersim.figures.directions import draw as draw_directions
from carriersim.figures.files import save_all
from carriersim.figures.heat import draw as draw_heat
from carriersim.figures.heat import draw_shares as draw_heat_shares
from carriersim.figures.occupation import draw as draw_occupation
from carriersim.figures.profile import draw as draw_profile
from carriersim.figures.resistance import draw as draw_resistance
from carriersim.figures.style import STYLE, Style
from carriersim.figures.temperatures import draw as draw_temperatures
from carriersim.figures.trajectories import draw as draw_trajectories

__all__ = [
    "STYLE",
    "Style",
    "draw_departure",
    "draw_directions",
    "draw_heat",
    "draw_heat_shares",
    "draw_occupation",
    "draw_profile",
    "draw_resistance",
    "draw_temperatures",
    "draw_trajectories",
    "save_all",
]
