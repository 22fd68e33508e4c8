"""The ways of a few carriers through a channel of two or three dimensions, seen from the side."""

from dataclasses import dataclass
from math import ceil

import numpy as np
from matplotlib.lines import Line2D
from matplotlib.patches import Patch

from carriersim.figures import along
from carriersim.figures.style import STYLE, Style, dress, new_figure, place, ticks, write
from carriersim.formatting import format_number, format_share, length_scale
from carriersim.result import TRAJECTORY_EVENTS, Trajectory

START, COLLISION, MIRROR, SCATTERED, _, REFLECTED, END = range(len(TRAJECTORY_EVENTS))
# Of each kind of event: marker, its size, whether it is hollow, name in the legend.
_MARKS = {
    START: (">", 5.5, False, "start"),
    COLLISION: ("o", 2.4, False, "collision"),
    SCATTERED: ("^", 4.2, False, "scattered by a wall"),
    MIRROR: ("o", 3.4, True, "mirrored by a wall"),
    REFLECTED: ("x", 4.6, False, "turned back by a plane"),
    END: ("s", 4.6, False, "end"),
}
_LEFT_OFF = ("s", 4.6, True, "left there, still under way")
_MOST_CARRIERS = 3  # in a panel
_MOST_EVENTS = 200  # in a panel: more cannot be told apart in a view from the side
_SMALL_MARKS = 100  # from so many events on
_MAGNIFIED = 40  # events that one more panel then shows
_WALL = 0.09  # thickness of a wall as drawn, as a share of the distance between them
_PANEL, _GAP, _TOP, _LABELS = 1.3, 0.42, 0.42, 0.26  # heights in inches
_BETWEEN = 0.86  # above a panel whose axis differs from that above it
_BELOW, _LEGEND_ROW, _CAPTION_ROW, _BOTTOM = 0.6, 0.16, 0.17, 0.08
_COLUMNS = 3  # of the legend
_LEFT, _RIGHT = 0.68, 0.2


@dataclass(frozen=True)
class _Panel:
    """Carriers that are drawn together, from the side or as path flown against position."""

    title: str
    carriers: tuple
    numbers: range  # which choose the colours
    window_nm: tuple[float, float]
    longest_nm: float | None  # path of any carrier shown, for the unit; None: from the side

    @property
    def side(self):
        return self.longest_nm is None


def make_figure(result, style: Style = STYLE):
    """A figure of its own for `draw`; None where no trajectories were sampled."""
    if not result.trajectories:
        return None
    panels = _panels(result)
    height = _TOP + _title_room(result, panels[0]) + sum(map(_above, panels, [None, *panels]))
    height += len(panels) * _PANEL + _BELOW + _BOTTOM
    height += ceil(len(_handles(result, panels, style)) / _COLUMNS) * _LEGEND_ROW
    height += len(_caption(result, panels)) * _CAPTION_ROW
    figure = new_figure(style.width, height, style)
    draw(figure, result, style)
    return figure


def draw(figure, result, style: Style = STYLE):
    """Draw the channel from the side with up to six carriers' ways; return the axes.

    One panel for carriers that reach the right contact, one for others. Position along the channel
    in nm (or µm), across it in nm; each panel says by how much it is stretched. Where events are
    too many to be told apart, the path flown against the position instead, and one more panel for
    the beginning of one carrier from the side. Raises ValueError where no trajectories were
    sampled.
    """
    if not result.trajectories:
        raise ValueError("no trajectories: one dimension, relaxation, or none asked for")
    panels = _panels(result)
    axis = _across(result)
    height = figure.get_size_inches()[1]
    top = _TOP + _title_room(result, panels[0])
    axes = []
    for index, panel in enumerate(panels):
        top += _above(panel, panels[index - 1] if index else None)
        ax = place(figure, _LEFT, _RIGHT, height - top - _PANEL, top)
        last = index + 1 == len(panels) or panels[index + 1].window_nm != panel.window_nm
        _draw_panel(ax, result, panel, axis, style, first=index == 0, x_label=last)
        top += _PANEL
        axes.append(ax)
    figure.legend(
        handles=_handles(result, panels, style), loc="upper center",
        bbox_to_anchor=(0.5, 1.0 - (top + _BELOW - 0.04) / height), ncols=_COLUMNS,
        fontsize=style.small, frameon=False, handlelength=1.8, columnspacing=1.4, borderpad=0.0,
        borderaxespad=0.0, labelcolor=style.ink, labelspacing=0.35,
    )  # fmt: skip
    for row, line in enumerate(reversed(_caption(result, panels))):
        figure.text(0.5, (_BOTTOM + row * _CAPTION_ROW) / height, line, ha="center", va="bottom",
                    fontsize=style.small, color=style.soft)  # fmt: skip
    return axes


def _above(panel, other):
    """Inches between a panel and the other one above it, None for the first."""
    if other is None:
        return 0.0
    return _GAP if panel.window_nm == other.window_nm else _BETWEEN


def _title_room(result, panel):
    """More inches above the first panel where transmissions or a count stand there."""
    contacts, points = result.scenario.contacts, result.scenario.scattering.points
    some = points or any(c.transmission != 1.0 for c in (contacts.left, contacts.right))
    return _LABELS if some and panel.window_nm[1] == result.scenario.channel.length_nm else 0.0


# --- What is drawn ------------------------------------------------------------------------------


def _panels(result):
    through = [t for t in result.trajectories if _arrives(result, t)]
    others = [t for t in result.trajectories if not _arrives(result, t)]
    groups = [group[:_MOST_CARRIERS] for group in (through, others)]
    window = _window(result, [*groups[0], *groups[1]])
    side = all(sum(t.kinds.size for t in group) <= _MOST_EVENTS for group in groups)
    longest = None if side else max(_flown(t)[-1] for group in groups for t in group)
    panels, number = [], 0
    for group, title in zip(groups, _titles(result, groups, (through, others)), strict=True):
        if group:
            numbers = range(number, number + len(group))
            panels.append(_Panel(title, tuple(group), numbers, window, longest))
            number += len(group)
    return panels if side else [*panels, _beginning(panels)]


def _arrives(result, trajectory):
    """Whether a carrier reaches the right contact."""
    far = trajectory.places_nm[-1, 0] > 0.5 * result.scenario.channel.length_nm
    return bool(far and trajectory.kinds[-1] == END)


def _titles(result, groups, all_groups):
    """A title for each of the groups that are shown, out of those that were sampled."""
    through, others = (
        f"{len(shown)} that" if len(shown) == len(known) else f"{len(shown)} of {len(known)} that"
        for shown, known in zip(groups, all_groups, strict=True)
    )
    through += " reach the right contact"
    if result.transmission is not None:
        through += f", like {format_share(result.transmission.value, 1.0)} of all"
    ended = [t.kinds[-1] == END for t in groups[1]]
    if all(ended):
        others += " return to the left contact"
    elif any(ended):
        others += " return, or are left under way"
    else:
        others += " are left under way"
    return through, others


def _window(result, carriers):
    """Stretch of the channel to draw, nm: all of it unless the carriers stay in its first half."""
    length = result.scenario.channel.length_nm
    reach = max(t.places_nm[:, 0].max() for t in carriers)
    return (0.0, length if reach > 0.5 * length else 1.08 * reach)


def _beginning(panels):
    """A panel that shows the first events of the first carrier that has many."""
    carriers = [pair for p in panels for pair in zip(p.numbers, p.carriers, strict=True)]
    number, first = next(pair for pair in carriers if pair[1].kinds.size > _MAGNIFIED)
    cut = Trajectory(first.places_nm[:_MAGNIFIED], first.kinds[:_MAGNIFIED])
    reach = cut.places_nm[:, 0].max()
    title = f"the first {_MAGNIFIED} events of one of them"
    return _Panel(title, (cut,), range(number, number + 1), (0.0, 1.04 * reach), None)


@dataclass(frozen=True)
class _Across:
    """The direction drawn upwards: column of the places, letter, name, distance of its walls."""

    column: int
    letter: str
    name: str
    size_nm: float | None
    specularity: float
    other: float  # specularity of the walls that are not seen


def _across(result):
    """Which side of the channel is seen: walls that scatter, the height before the width."""
    channel = result.scenario.channel
    if channel.width_nm is None:
        return _Across(1, "y", "from the start,", None, 1.0, 1.0)
    width, height = channel.face_specularity
    if channel.dimension == 2 or (width < 1.0 and height == 1.0):
        return _Across(1, "y", "width", channel.width_nm, width, height)
    return _Across(2, "z", "height", channel.height_nm, height, width)


def _caption(result, panels):
    """Lines that say how the carriers were chosen, and what the view hides."""
    arrive = [_arrives(result, t) for t in result.trajectories]
    lines = ["None of the carriers tried got through: these came farthest."]
    if all(arrive):
        lines = ["The first carriers that were tried."]
    elif any(arrive):
        lines = ["The first that got through, and of the others tried those that came farthest."]
    end, length = panels[0].window_nm[1], result.scenario.channel.length_nm
    if end < length:
        factor, unit = length_scale(length)
        shown, whole = (format_number(v * factor, digits=3) for v in (end, length))
        lines.append(f"Only the first {shown} of {whole} {unit} are drawn: none came farther.")
    axis = _across(result)
    if axis.size_nm is not None and result.scenario.channel.dimension == 3:
        other = "height" if axis.column == 1 else "width"
        kind = _wall_name(axis.other).removeprefix("wall, ")
        lines.append(f"Events at the walls of the {other} ({kind}) may lie anywhere in between.")
    return lines


def _wall_name(specularity):
    if specularity == 1.0:
        return "wall, mirror"
    if specularity == 0.0:
        return "wall, scatters"
    return f"wall, specularity {format_number(specularity, digits=3)}"


# --- Drawing ------------------------------------------------------------------------------------


def _draw_panel(ax, result, panel, axis, style, *, first, x_label):
    length = result.scenario.channel.length_nm
    start, end = panel.window_nm
    factor, unit = length_scale(end - start)
    x = along.Along(factor, unit, length * factor)
    labels = first and end == length
    dress(ax, style)
    along.frame(ax, result, x, style, labels=labels)
    heights, limits, y_label = _upwards(panel, axis)
    _planes(ax, result, x, panel.window_nm, style)
    if panel.side and axis.size_nm is not None:
        _walls(ax, axis, style)
    size = 0.75 if sum(t.kinds.size for t in panel.carriers) > _SMALL_MARKS else 1.0
    for number, carrier, y in zip(panel.numbers, panel.carriers, heights, strict=True):
        _way(ax, carrier, carrier.places_nm[:, 0] * factor, y, _colour(number, style),
             size if panel.side else None)  # fmt: skip
    margin = along.END * (end - start) * factor
    ax.set_xlim(start * factor - margin, end * factor + margin)
    ax.set_ylim(*limits)
    ticks(ax, x=6, y=3)
    x_text = f"position along the channel ({unit})"
    write(ax, style, x=x_text if x_label else "", y=y_label)
    stretch = _stretch(ax, factor, axis) if panel.side else ""
    raised = first and _title_room(result, panel) > 0.0
    _heading(ax, panel.title, stretch, raised, style)
    if not x_label:
        ax.tick_params(axis="x", labelbottom=False)


def _flown(trajectory):
    """Path in nm until each event."""
    steps = np.diff(trajectory.places_nm, axis=0, prepend=trajectory.places_nm[:1])
    return np.cumsum(np.linalg.norm(steps, axis=1))


def _upwards(panel, axis):
    """What is drawn upwards for each carrier, the ends of the axis, and its label."""
    if not panel.side:
        flown = [_flown(t) for t in panel.carriers]
        longest = max(path[-1] for path in flown)
        factor, unit = length_scale(panel.longest_nm)
        return (
            [path * factor for path in flown],
            (0.0, 1.05 * longest * factor),
            f"path flown ({unit})",
        )
    heights = [t.places_nm[:, axis.column] for t in panel.carriers]
    label = f"{axis.name} {axis.letter} (nm)"
    if axis.size_nm is not None:
        return heights, (-_WALL * axis.size_nm, (1.0 + _WALL) * axis.size_nm), label
    low, high = min(map(np.min, heights)), max(map(np.max, heights))
    room = 0.08 * (high - low) or 1.0
    return heights, (low - room, high + room), label


def _heading(ax, title, stretch, raised, style):
    above = 1.0 + (0.06 + (_LABELS if raised else 0.0)) / _PANEL
    kwargs = {"transform": ax.transAxes, "va": "bottom", "fontsize": style.small}
    ax.text(0.0, above, title, ha="left", color=style.ink, **kwargs)
    ax.text(1.0, above, stretch, ha="right", color=style.soft, **kwargs)


def _stretch(ax, factor, axis):
    """Words on inches per nm across over inches per nm along; factor: drawn place along per nm."""
    box = ax.get_position()
    width, height = ax.figure.get_size_inches() * (box.width, box.height)
    (left, right), (low, high) = ax.get_xlim(), ax.get_ylim()
    ratio = height / (high - low) / (width * factor / (right - left))
    size = format_number(max(ratio, 1.0 / ratio), digits=2)
    return f"{axis.letter} {'stretched' if ratio >= 1.0 else 'squeezed'} {size} ×"


def _walls(ax, axis, style):
    for start, end in ((-_WALL, 0.0), (1.0, 1.0 + _WALL)):
        ax.axhspan(start * axis.size_nm, end * axis.size_nm, zorder=2, **_wall_look(axis, style))
    for edge in (0.0, axis.size_nm):
        ax.axhline(edge, color=style.ink, lw=0.8, zorder=2.1)


def _wall_look(axis, style):
    if axis.specularity == 1.0:
        return {"facecolor": style.faint, "lw": 0}
    return {"facecolor": style.ground, "edgecolor": style.soft, "hatch": "//////", "lw": 0}


def _planes(ax, result, x, window_nm, style):
    """Planes as lines, the thicker the less they let through."""
    start, end = window_nm[0], (1.0 + along.END) * window_nm[1]
    points = [p for p in result.scenario.scattering.points if start <= p.position_nm <= end]
    if not points:
        return
    most = 2.4 * min(1.0, 30.0 / len(points))
    # The mean of a table stands for it.
    passing = [float(np.mean(getattr(p.transmission, "value", p.transmission))) for p in points]
    ax.vlines(
        [p.position_nm * x.factor for p in points], 0.0, 1.0, transform=ax.get_xaxis_transform(),
        color=style.soft, lw=[0.4 + most * (1.0 - t) for t in passing], zorder=1.5,
        alpha=min(1.0, max(0.4, 20.0 / len(points))),
    )  # fmt: skip


def _way(ax, carrier, x, y, colour, size):
    """One carrier; size: of the marks at its events, None where only its ends are marked."""
    ax.plot(x, y, color=colour, lw=0.9 if size else 1.1, alpha=0.9, zorder=3,
            solid_joinstyle="round")  # fmt: skip
    for kind, mark in _MARKS.items():
        own = carrier.kinds == kind
        if own.any() and (size or kind in (START, END)):
            _mark(ax, x[own], y[own], mark, colour, 1.0 if kind in (START, END) else size)
    if _left_off(carrier):
        _mark(ax, x[-1:], y[-1:], _LEFT_OFF, colour, 1.0)


def _mark(ax, x, y, mark, colour, scale):
    marker, size, hollow, _ = mark
    ax.plot(x, y, ls="", marker=marker, ms=size * scale, mec=colour, mew=0.9 * scale, zorder=4,
            mfc="white" if hollow else colour, clip_on=False)  # fmt: skip


def _left_off(carrier):
    """Whether the record of a carrier was full before it came to a contact."""
    return carrier.kinds[-1] != END and carrier.kinds.size > _MAGNIFIED


def _colour(number, style):
    colours = (style.point, style.lattice, style.probe)
    return colours[number % len(colours)]


def _handles(result, panels, style):
    """What the legend of all panels shows."""
    kinds = {k for p in panels if p.side for t in p.carriers for k in t.kinds}
    kinds |= {START, END} & {k for p in panels for t in p.carriers for k in t.kinds}
    entries = [mark for kind, mark in _MARKS.items() if kind in kinds]
    if any(_left_off(t) for panel in panels for t in panel.carriers):
        entries.append(_LEFT_OFF)
    handles = [
        Line2D([], [], ls="", marker=marker, ms=size, mec=style.ink, mew=0.9,
               mfc="white" if hollow else style.ink, label=name)
        for marker, size, hollow, name in entries
    ]  # fmt: skip
    axis = _across(result)
    if axis.size_nm is not None:
        handles.append(Patch(label=_wall_name(axis.specularity), **_wall_look(axis, style)))
    if result.scenario.scattering.points:
        handles.append(
            Line2D([], [], color=style.soft, lw=1.8, label="plane (thick: reflects more)")
        )
    return handles
