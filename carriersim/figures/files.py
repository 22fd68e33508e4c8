"""The figure files of a run."""

from pathlib import Path

from carriersim.figures import (
    departure,
    directions,
    heat,
    occupation,
    profile,
    resistance,
    temperatures,
    trajectories,
)
from carriersim.figures.style import STYLE, Style, own_settings

_FIGURES = {
    "profile": profile.make_figure,
    "occupation": occupation.make_figure,
    "resistance": resistance.make_figure,
    "departure": departure.make_figure,
    "temperatures": temperatures.make_figure,
    "heat": heat.make_figure,
    "directions": directions.make_figure,
    "trajectories": trajectories.make_figure,
}
# Without versions and dates in the files the same result gives the same bytes. Light compression
# costs a tenth in size and saves two thirds of the time of writing.
_FORMATS = {
    ".png": {"metadata": {"Software": None}, "pil_kwargs": {"compress_level": 2}},
    ".svg": {"metadata": {"Date": None}},
}


def save_all(result, directory, style: Style = STYLE) -> list[Path]:
    """Write every figure that has a meaning for `result` as .png and .svg into `directory`.

    Returns the paths written. `resistance` is left out where there is no breakdown (the reason is
    in `result.why`); `departure`, `temperatures` and `heat` are drawn where energies relax at a
    bias, `directions` and `trajectories` in two and three dimensions. The same result gives the
    same bytes. Raises OSError where it cannot write.
    """
    directory = Path(directory)
    written = []
    with own_settings():
        for name, make_figure in _FIGURES.items():
            figure = make_figure(result, style)
            if figure is None:
                continue
            for suffix, options in _FORMATS.items():
                path = directory / (name + suffix)
                figure.savefig(path, **options)
                written.append(path)
    return written
