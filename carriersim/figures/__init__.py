"""Figures of a Result: potentials, occupations, and where the resistance sits.

Every `draw_*` takes axes (or a figure), a Result and a Style, and draws nothing but what the result
holds; `save_all` writes the files of a run.
"""

from carriersim.figures.files import save_all
from carriersim.figures.occupation import draw as draw_occupation
from carriersim.figures.profile import draw as draw_profile
from carriersim.figures.resistance import draw as draw_resistance
from carriersim.figures.style import STYLE, Style

__all__ = [
    "STYLE",
    "Style",
    "draw_occupation",
    "draw_profile",
    "draw_resistance",
    "save_all",
]
