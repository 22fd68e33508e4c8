"""Colours, sizes and small drawing helpers common to all figures.

The colours differ in lightness first (CIE L* 52, 40, 75 for the three curves), so that figures read
in grey and with any colour vision; line styles differ as well. Matplotlib's object interface is
used throughout: it starts faster than pyplot and keeps no global state.
"""

import threading
from contextlib import contextmanager
from dataclasses import dataclass

import matplotlib
import numpy as np
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.colors import LinearSegmentedColormap
from matplotlib.figure import Figure
from matplotlib.ticker import MaxNLocator, NullLocator

_RC_LOCK = threading.RLock()  # matplotlib's settings belong to the process, not to a thread


@dataclass(frozen=True)
class Style:
    """What figures look like. Sizes in points, widths and heights in inches."""

    ink: str = "#22252b"
    soft: str = "#6b7078"
    faint: str = "#d5d2cb"
    ground: str = "#efece5"
    right_moving: str = "#6477cc"
    left_moving: str = "#e3b04b"
    mean: str = "#14695e"
    interface: str = "#e4e0d6"
    point: str = "#3b3f8f"
    piece: str = "#e3b04b"
    probe: str = "#a8476b"
    lattice: str = "#c9763a"
    right_dashes: object = "-"
    left_dashes: object = (0, (7, 1.2))
    mean_dashes: object = (0, (1.1, 1.1))
    text: float = 9.0
    small: float = 7.8
    line: float = 2.2
    width: float = 5.4
    dpi: int = 140

    def colour_of(self, kind: str) -> str:
        """Colour of a part of the resistance of this kind."""
        return getattr(self, kind, self.soft)


STYLE = Style()

# Lightness falls evenly from empty (pale) to full (dark).
FILLING = LinearSegmentedColormap.from_list(
    "filling", ["#fbf7ec", "#f0cf8e", "#cf8f5f", "#94526a", "#4b2f68", "#17163a"]
)

# Too few carriers (blue) and too many (brown): equally dark at both ends, pale where none differ.
MISSING_AND_EXTRA = LinearSegmentedColormap.from_list(
    "missing and extra",
    ["#232a63", "#5366bd", "#b3bfe6", "#f7f5f0", "#ecc893", "#b5702a", "#552c0c"],
)


@contextmanager
def own_settings():
    """Matplotlib's defaults instead of the user's rc file, and SVG files that repeat bit by bit."""
    own = {
        key: value
        for key, value in matplotlib.rcParamsDefault.items()
        if not key.startswith(("backend", "interactive", "toolbar", "webagg", "date.", "figure."))
    }
    # The font that comes with matplotlib, by name: no search for others, the same look everywhere.
    # Hinting would take half of the time of drawing.
    own |= {
        "svg.hashsalt": "carriersim",
        "font.family": ["DejaVu Sans"],
        "text.hinting": "no_hinting",
    }
    with _RC_LOCK, matplotlib.rc_context(own):
        yield


def new_figure(width: float, height: float, style: Style = STYLE) -> Figure:
    """An empty figure with its own Agg canvas; inches."""
    figure = Figure(figsize=(width, height), dpi=style.dpi, facecolor="white")
    FigureCanvasAgg(figure)
    return figure


def place(figure: Figure, left: float, right: float, bottom: float, top: float):
    """Axes whose edges lie this many inches from those of the figure."""
    width, height = figure.get_size_inches()
    box = (left / width, bottom / height)
    return figure.add_axes((*box, 1 - box[0] - right / width, 1 - box[1] - top / height))


def dress(ax, style: Style = STYLE) -> None:
    """Quiet axes: two spines, small ticks."""
    for side in ("top", "right"):
        ax.spines[side].set_visible(False)
    for side in ("left", "bottom"):
        ax.spines[side].set_color(style.soft)
        ax.spines[side].set_linewidth(0.8)
    ax.tick_params(labelsize=style.small, colors=style.ink, length=3, width=0.8, color=style.soft)


def write(ax, style: Style = STYLE, *, x="", y="", title="", below=0.36, beside=0.5, above=0.05):
    """Axis labels and title at fixed distances (inches), so that drawing need not measure ticks."""
    box = ax.get_position()
    width, height = ax.figure.get_size_inches() * (box.width, box.height)
    ax.set_title(title, fontsize=style.text, color=style.ink, y=1.0 + above / height, pad=0)
    for axis, label, at in (
        (ax.xaxis, x, (0.5, -below / height)),
        (ax.yaxis, y, (-beside / width, 0.5)),
    ):
        if label:
            axis.set_label_text(label, fontsize=style.text, color=style.ink)
        axis.set_label_coords(*at)
    ax.xaxis.label.set_verticalalignment("center")
    ax.yaxis.label.set_verticalalignment("center")


def ticks(ax, *, x=None, y=None, steps=(1, 2, 2.5, 5, 10)) -> None:
    """At most this many intervals between ticks of round numbers; 0: no ticks at all.

    Text costs most of the time of a figure, so there are few.
    """
    for axis, count in ((ax.xaxis, x), (ax.yaxis, y)):
        if count is not None:
            locator = MaxNLocator(count, steps=steps) if count else NullLocator()
            axis.set_major_locator(locator)


def spread(places, gap: float, low: float, high: float) -> np.ndarray:
    """Move sorted label places apart to at least `gap`, inside [low, high] if there is room."""
    places = np.asarray(places, float)
    if places.size < 2:
        return np.clip(places, low, high)
    gap = min(gap, (high - low) / (places.size - 1))
    steps = gap * np.arange(places.size)
    # Without the steps the labels only have to keep their order: the nearest such places.
    free = _in_order(places - steps)
    return np.clip(free, low, high - steps[-1]) + steps


def _in_order(values: np.ndarray) -> np.ndarray:
    """The nondecreasing sequence closest to `values` (pooling of neighbours out of order)."""
    blocks: list[list[float]] = []
    for value in values:
        blocks.append([value, 1])
        while len(blocks) > 1 and blocks[-2][0] > blocks[-1][0]:
            mean, size = blocks.pop()
            blocks[-1] = [
                (blocks[-1][0] * blocks[-1][1] + mean * size) / (blocks[-1][1] + size),
                blocks[-1][1] + size,
            ]
    return np.concatenate([np.full(int(size), mean) for mean, size in blocks])


def thin(x: np.ndarray, pixels: int = 1200) -> np.ndarray:
    """Indices of sorted `x` that still draw the same curve: two points a pixel column at most."""
    if x.size <= 2 * pixels:
        return np.arange(x.size)
    column = np.floor((x - x[0]) / (x[-1] - x[0]) * pixels)
    turns = np.flatnonzero(np.diff(column)) + 1
    return np.unique(np.concatenate([[0], turns - 1, turns, [x.size - 1]]))
