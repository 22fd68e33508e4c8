"""Directions and sample trajectories in two and three dimensions, and the figures of both."""

import dataclasses

import numpy as np
import pytest
from scipy.integrate import simpson

import carriersim as cs
from carriersim import fermi
from carriersim import scenario as scenarios
from carriersim.engine import ray_tallies, rays, trajectories
from carriersim.engine.directions import new_ray_stream
from carriersim.engine.problem import build
from carriersim.engine.streams import TRAJECTORIES
from carriersim.engine.trajectories import sample_trajectories
from carriersim.figures import directions, draw_directions, draw_trajectories, files, save_all
from carriersim.figures import trajectories as drawn
from carriersim.figures.style import STYLE, new_figure, own_settings
from carriersim.result import TRAJECTORY_EVENTS, Estimate, Trajectory
from tests.fake_results import RELAXING, RIBBON, WIRE, fake_result, space_result
from tests.test_figures import ALL, check_files, check_texts, luminance, points

START, COLLISION, MIRROR, DIFFUSE, PASSAGE, REFLECTION, END = range(7)
NO_WALLS = {"channel.width_nm": None, "channel.height_nm": None, "channel.specularity": None}
ROUNDING = 1e-5  # of directions in open space, where y is a small difference of far places
MORE = [f"{name}.{kind}" for name in ("directions", "trajectories") for kind in ("png", "svg")]

# Name: text, changes.
SETTINGS = {
    "ribbon with one barrier": (RIBBON, {}),
    "wire with 30 planes": (WIRE, {"scattering.points": points(30, 500.0)}),
    "film": (
        WIRE,
        {"channel.width_nm": 200, "channel.specularity": {"width": 1, "height": 0}},
    ),
    "no walls, seven places, linear response": (
        RIBBON,
        NO_WALLS
        | {"contacts.bias_mV": 0, "probes": [{"position_nm": x} for x in (5, 50, 130, 200, 290)]},
    ),
    "no walls, 3d, barriers at the contacts": (
        WIRE,
        NO_WALLS | {"contacts.left.transmission": 0.3, "contacts.right.transmission": 0.6},
    ),
    "ballistic": (WIRE, NO_WALLS | {"scattering.mean_free_path_nm": None}),
    "10 µm, 300 planes": (
        RIBBON,
        {"channel.length_nm": 10_000, "scattering.points": points(300, 10_000.0)},
    ),
    "10 µm, smooth": (
        RIBBON,
        {
            "channel.length_nm": 10_000,
            "channel.specularity": 1,
            "scattering.mean_free_path_nm": 2000,
            "scattering.points": None,
        },
    ),
    "unequal temperatures, T(E)": (
        RIBBON,
        {
            "contacts.left.temperature_K": 320,
            "scattering.points[0].transmission": {"energy_meV": [0, 50], "value": [0.1, 0.9]},
            "scattering.points[0].angular": "constant",
        },
    ),
    "nobody gets through": (RIBBON, {"scattering.points[0].transmission": 1e-9}),
}
_KNOWN = {}


def result_of(name):
    if name not in _KNOWN:
        _KNOWN[name] = space_result(*SETTINGS[name])
    return _KNOWN[name]


def problem_of(text, changes=None):
    return build(scenarios.read_text(text, changes=changes))


# --- Sample trajectories ------------------------------------------------------------------------


def ways(problem, count=6):
    """Places and kinds of events of sample carriers, one carrier after another."""
    sampled = sample_trajectories(problem, count)
    assert sampled
    return [(t.places_nm, t.kinds) for t in sampled]


def _on_face(across, size):
    """Which places lie on either of two faces, but for rounding."""
    near = np.minimum(across, size - across) < 1e-9
    return near & (size > 0.0)


def legs(places):
    """Direction of each straight leg between two events, unit vectors (n-1, 3)."""
    steps = np.diff(places, axis=0)
    return steps / np.linalg.norm(steps, axis=1, keepdims=True)


@pytest.mark.parametrize(
    ("text", "changes", "size"),
    [
        (RIBBON, {"channel.specularity": 0.5}, (30.0, 0.0)),
        (WIRE, {}, (30.0, 20.0)),
        # Faces that only mirror: the kernel leaves them out, a trajectory meets them.
        (WIRE, {"channel.specularity": {"width": 1, "height": 0}}, (30.0, 20.0)),
        (WIRE, {"channel.specularity": 1}, (30.0, 20.0)),
    ],
    ids=["ribbon", "wire", "film", "mirrors"],
)
def test_events_lie_where_they_happen(text, changes, size):
    """Walls are met on a face, nothing happens outside; mirrors turn one component of motion."""
    seen = set()
    for places, kinds in ways(problem_of(text, changes)):
        seen |= set(kinds.tolist())
        y, z = places[:, 1], places[:, 2]
        assert y.min() >= 0.0 and y.max() <= size[0]
        assert z.min() >= 0.0 and z.max() <= size[1]
        on_y, on_z = (_on_face(*pair) for pair in ((y, size[0]), (z, size[1])))
        met = np.isin(kinds, (MIRROR, DIFFUSE))
        assert np.all((on_y | on_z)[met])
        assert not np.any((on_y | on_z)[kinds == COLLISION])
        u = legs(places)
        for i in np.flatnonzero(kinds == MIRROR):
            face = 1 if on_y[i] else 2
            turned = u[i - 1].copy()
            turned[face] *= -1.0
            assert u[i] == pytest.approx(turned, abs=1e-6)
    assert {START, COLLISION, END} <= seen
    assert (MIRROR in seen) == (changes.get("channel.specularity", 0.2) != 0)


def test_planes_reflect_as_they_are_told_to():
    """At a plane x is the plane's; passing keeps the direction, a mirror turns u_x, a diffuse
    reflection sends it back anywhere."""
    for kind in ("specular", "diffuse"):
        changes = NO_WALLS | {"scattering.points[0].reflection": kind}
        turned = []
        for places, kinds in ways(problem_of(RIBBON, changes), 20):
            u = legs(places)
            passed = np.flatnonzero(kinds == PASSAGE)
            assert u[passed] == pytest.approx(u[passed - 1], abs=ROUNDING)
            at = np.flatnonzero(kinds == REFLECTION)
            assert np.all(places[at, 0] == 120.0)
            assert np.all(u[at - 1, 0] * u[at, 0] < 0.0)
            turned += list(u[at] - u[at - 1] * [-1.0, 1.0, 1.0])
        assert len(turned) > 10
        mirrors = np.abs(turned).max(axis=1) < ROUNDING
        assert np.all(mirrors) if kind == "specular" else not np.any(mirrors)


def test_trajectories_run_from_contact_to_contact():
    """Half the carriers reach the right contact; the others, from the farthest, do not."""
    sampled = sample_trajectories(problem_of(RIBBON), 6)
    assert all(t.kinds[0] == START and t.kinds[-1] == END for t in sampled)
    assert all(t.places_nm[0, 0] == 0.0 for t in sampled)
    assert [t.places_nm[-1, 0] for t in sampled] == [300.0] * 3 + [0.0] * 3
    reach = [t.places_nm[:, 0].max() for t in sampled[3:]]
    assert reach == sorted(reach, reverse=True)
    assert all(t.kinds.dtype == np.int64 and t.places_nm.shape[1] == 3 for t in sampled)
    assert max(max(t.kinds) for t in sampled) < len(TRAJECTORY_EVENTS)


def test_sample_carriers_are_those_of_the_kernel(monkeypatch):
    """Compiled, with the same random numbers and faces, each carrier has the same fate: where it
    ends, its arrivals at every node, and the motion that walls take from it."""
    monkeypatch.setattr(trajectories, "MOST_IN_ALL", 10**9)
    monkeypatch.setattr(trajectories, "MOST_CARRIERS", 40)
    problem = problem_of(WIRE, {"scattering.points": points(5, 500.0)})
    follow = trajectories._follower(problem)
    space = problem.space
    for number in range(1, 41):
        counts = ray_tallies.empty_counts(problem)
        stream = new_ray_stream(1, number, TRAJECTORIES)
        rays.cross(
            number, 1, trajectories._offset(1), problem.geometry, space.planes, *space.faces, None,
            ray_tallies.drive_of(problem), stream, counts, np.zeros(1, np.uint8), 10**9, None,
        )  # fmt: skip
        way = follow(number)
        assert counts.transmitted[0] == trajectories._arrives(problem, way)
        at_planes = counts.crossings[0, 1:-1, :2].sum()
        assert at_planes == np.isin(way.kinds, (PASSAGE, REFLECTION)).sum()
        scattered = np.flatnonzero(way.kinds == DIFFUSE)
        lost = legs(way.places_nm)[scattered - 1, 0].sum()
        assert counts.lost.sum() == pytest.approx(lost, abs=1e-6)


@pytest.mark.parametrize(("text", "mean"), [(RIBBON, np.pi / 4), (WIRE, 2 / 3)], ids=["2", "3"])
def test_sample_carriers_start_by_the_cosine_law(monkeypatch, text, mean):
    """Mean cosine of the flux from a black-body contact: pi/4 on a circle, 2/3 on a sphere
    (int cos^2 over int cos of a half space)."""
    monkeypatch.setattr(trajectories, "MOST_IN_ALL", 10**9)
    monkeypatch.setattr(trajectories, "MOST_CARRIERS", 12_000)
    changes = NO_WALLS | {"scattering.points": None, "scattering.mean_free_path_nm": None}
    problem = problem_of(text, changes)
    cosines = [legs(places)[0, 0] for places, _ in ways(problem, 12_000)]
    error = np.std(cosines) / np.sqrt(len(cosines))
    assert error < 0.0035 * mean
    assert np.mean(cosines) == pytest.approx(mean, abs=4 * error)


def test_energies_follow_the_ballistic_current():
    """Half of the current flows below the median of F_L - F_R (Landauer 1957), whatever the share
    of the run's own histories."""
    table = {"energy_meV": [0, 50], "value": [0.1, 0.9]}
    changes = {
        "scattering.points[0].transmission": table,
        "scattering.points[0].angular": "constant",
        "contacts.bias_mV": 40,
    }
    problem = problem_of(RIBBON, changes)
    spectrum = trajectories._by_current(problem)
    energy = np.linspace(-400.0, 440.0, 200_001)
    weight = fermi.difference(energy, 40.0, 300.0, 0.0, 300.0)
    expected = np.interp(problem.bins.edges, energy, np.cumsum(weight) / weight.sum())
    assert spectrum.cumulative == pytest.approx(expected, abs=1e-4)
    assert np.abs(problem.spectrum.cumulative - expected).max() > 1e-3


def test_a_long_way_is_left_unfinished():
    result = result_of("10 µm, 300 planes")
    sizes = [t.kinds.size for t in result.trajectories]
    assert max(sizes) == trajectories.MOST_EVENTS
    longest = result.trajectories[int(np.argmax(sizes))]
    assert longest.kinds[-1] != END


@pytest.mark.parametrize("count", [0, 1, 2, 7])
def test_as_many_trajectories_as_asked(count):
    assert len(sample_trajectories(problem_of(RIBBON), count)) == count


def test_no_trajectories_without_directions_or_with_relaxation():
    assert sample_trajectories(problem_of(RELAXING, {"relaxation.mechanisms": None}), 6) == ()
    bath = [{"kind": "bath", "path_nm": 50, "direction": "randomised"}]
    assert sample_trajectories(problem_of(RIBBON, {"relaxation.mechanisms": bath}), 6) == ()


def test_trajectories_change_no_tally_and_are_saved(tmp_path):
    changes = {"simulation.histories": 6400, "simulation.cells": 20}
    scenario = scenarios.read_text(RIBBON, changes=changes)
    with_them = cs.simulate(scenario, workers=1)
    without = cs.simulate(scenario.replace({"simulation.trajectories": 0}), workers=1)
    assert len(with_them.trajectories) == 6 and without.trajectories == ()
    assert with_them.resistance_ohm == without.resistance_ohm
    assert np.array_equal(with_them.mu_meV, without.mu_meV)
    assert np.array_equal(with_them.current_by_direction, without.current_by_direction)
    with_them.save(tmp_path / "run")
    read = cs.open_result(tmp_path / "run")
    for ours, theirs in zip(with_them.trajectories, read.trajectories, strict=True):
        assert np.array_equal(ours.places_nm, theirs.places_nm)
        assert np.array_equal(ours.kinds, theirs.kinds)
    shown = [save(read, tmp_path, n) for n, save in (("a", _saved), ("b", _saved))]
    assert shown[0] == shown[1]


def _saved(result, directory, name):
    place = directory / name
    place.mkdir()
    return {path.name: path.read_bytes() for path in save_all(result, place)}


# --- Figures ------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", SETTINGS)
def test_every_kind_of_result_is_drawn(tmp_path, name):
    result = result_of(name)
    written = [path.name for path in save_all(result, tmp_path)]
    assert written == (ALL if result.breakdown else ALL[:4]) + MORE
    check_files([tmp_path / file for file in written])
    assert sum((tmp_path / file).stat().st_size for file in MORE) < 1.5e6


@pytest.mark.parametrize("name", SETTINGS)
def test_texts_do_not_overlap(name):
    with own_settings():
        for figure in ("directions", "trajectories"):
            check_texts(files._FIGURES[figure](result_of(name), STYLE), figure)


def test_one_dimension_has_neither_figure():
    result = fake_result()
    for name in ("directions", "trajectories"):
        assert files._FIGURES[name](result, STYLE) is None
    with pytest.raises(ValueError, match="no directions: "):
        draw_directions(new_figure(5.4, 3.0), result)
    with pytest.raises(ValueError, match="no trajectories: one dimension"):
        draw_trajectories(new_figure(5.4, 3.0), result)


def curve(ax, label):
    (line,) = [line for line in ax.lines if line.get_label() == label]
    return line.get_xdata(), line.get_ydata()


@pytest.mark.parametrize("name", ["ribbon with one barrier", "film"])
def test_areas_are_the_transmission(name):
    result = result_of(name)
    axes = draw_directions(new_figure(5.4, 3.2), result)
    assert [ax.get_title() for ax in axes] == ["left contact", *_middle(result), "right contact"]
    for ax in axes:
        assert ax.get_xlabel() == "angle to axis (°)"
        right, left = (curve(ax, f"{side}-moving")[1].sum() * 5.0 for side in ("right", "left"))
        assert right - left == pytest.approx(100.0 * result.transmission.value, abs=1.0)
        assert ax.texts[0].get_text() == f"{right:.1f} − {left:.1f} = {right - left:.1f} %"
    assert axes[0].get_ylabel() == "current per degree\n(% of the ballistic current)"
    # All carriers of the left contact enter: the curve is the cosine law there, in the size of its
    # error bands.
    angle, values = curve(axes[0], "right-moving")
    assert values == pytest.approx(
        np.interp(angle, *curve(axes[0], "ballistic: cosine law")), abs=0.05
    )
    angle, _ = curve(axes[0], "left-moving")
    assert angle == pytest.approx(180.0 - result.direction_deg)
    band = axes[0].collections[0].get_paths()[0].vertices[:, 1]
    assert band.max() == pytest.approx((values * 1.003).max(), rel=2e-3)


def _middle(result):
    return [f"{result.scenario.channel.length_nm / 2:g} nm"]


@pytest.mark.parametrize("name", ["ribbon with one barrier", "film"])
def test_the_ballistic_law_is_the_whole_current(name):
    """cos on a circle, 2 sin cos on a sphere; Lambert's law over all directions is 1."""
    result = result_of(name)
    angle, percent = directions.cosine_law(result)
    assert simpson(percent, x=angle) == pytest.approx(100.0, abs=1e-4)
    at = 0.0 if result.scenario.channel.dimension == 2 else 45.0
    assert angle[np.argmax(percent)] == at
    assert percent.max() == pytest.approx(100.0 * np.pi / 180.0)


@pytest.mark.parametrize(
    "changes",
    [{}, {"contacts.bias_mV": 0}, {"contacts.bias_mV": -50}, {"contacts.left.temperature_K": 310}],
    ids=["bias", "linear", "negative", "unequal"],
)
def test_currents_are_shares_of_the_ballistic_current_at_any_bias(changes):
    result = space_result(RIBBON, changes | {"scattering.points": None}, noise=1e-6)
    values, errors = directions.percent_per_degree(result)
    # Everything that the left contact sends enters: by the fake's law 100 % but for half a cell.
    assert values[0, 0].sum() * 5.0 == pytest.approx(100.0, abs=0.6)
    assert np.all(errors >= 0.0) and errors[0, 0] == pytest.approx(1e-6 * values[0, 0], rel=0.01)


def test_of_many_places_six_are_shown():
    probes = [{"position_nm": x} for x in range(15, 300, 20)]
    result = space_result(RIBBON, {"probes": probes})
    axes = files._FIGURES["directions"](result, STYLE).axes
    titles = [ax.get_title() for ax in axes]
    assert len(titles) == 6 and titles[0] == "left contact" and titles[-1] == "right contact"


def test_carriers_are_drawn_where_they_were():
    result = result_of("ribbon with one barrier")
    figure = files._FIGURES["trajectories"](result, STYLE)
    through, back = figure.axes
    assert through.get_xlim() == back.get_xlim()
    assert back.get_xlabel() == "position along the channel (nm)"
    assert through.get_ylabel() == back.get_ylabel() == "width y (nm)"
    for ax, group in ((through, result.trajectories[:3]), (back, result.trajectories[3:])):
        ways = [
            line for line in ax.lines if line.get_linestyle() == "-" and len(line.get_xdata()) > 2
        ]
        for line, carrier in zip(ways, group, strict=True):
            assert np.array_equal(line.get_xydata(), carrier.places_nm[:, :2])
    heads = [text.get_text() for text in through.texts]
    share = 100 * result.transmission.value
    assert f"3 that reach the right contact, like {share:.1f} % of all" in heads
    assert "T = 0.4" in heads
    # The stretch, from the pixels of the figure.
    pixels = np.diff(through.transData.transform([(0.0, 0.0), (1.0, 1.0)]), axis=0)[0]
    assert f"y stretched {pixels[1] / pixels[0]:.2g} ×" in heads
    labels = [text.get_text() for text in figure.legends[0].get_texts()]
    assert labels == [
        "start", "collision", "scattered by a wall", "turned back by a plane", "end",
        "wall, scatters", "plane (thick: reflects more)",
    ]  # fmt: skip


def test_marks_say_what_happened():
    places = np.array(
        [[0, 5, 0], [10, 0, 0], [20, 8, 0], [30, 30, 0], [120, 9, 0], [0, 3, 0]], float
    )
    kinds = np.array([START, DIFFUSE, COLLISION, MIRROR, REFLECTION, END])
    result = dataclasses.replace(
        result_of("ribbon with one barrier"), trajectories=(Trajectory(places, kinds),)
    )
    (ax,) = files._FIGURES["trajectories"](result, STYLE).axes
    marks = {
        line.get_marker(): line.get_xydata() for line in ax.lines if line.get_linestyle() == "None"
    }
    assert marks["^"].tolist() == [[10.0, 0.0]]
    assert marks["x"].tolist() == [[120.0, 9.0]]
    assert marks[">"].tolist() == [[0.0, 5.0]] and marks["s"].tolist() == [[0.0, 3.0]]
    assert sorted(line.get_markerfacecolor() for line in ax.lines if line.get_marker() == "o") == [
        STYLE.point, "white"
    ]  # fmt: skip
    assert ax.texts[-2].get_text() == "1 that return to the left contact"


def test_crowded_carriers_show_the_path_flown():
    """A view from the side of a thousand events is a scribble: position against path, and the
    beginning from the side."""
    result = result_of("wire with 30 planes")
    figure = files._FIGURES["trajectories"](result, STYLE)
    through, _, beginning = figure.axes
    assert through.get_ylabel() == "path flown (µm)"
    carrier = result.trajectories[0]
    line = max(through.lines, key=lambda line: line.get_color() == STYLE.point)
    flown = np.linalg.norm(np.diff(carrier.places_nm, axis=0), axis=1).sum()
    assert line.get_ydata()[-1] == pytest.approx(1e-3 * flown)
    assert beginning.get_ylabel() == "height z (nm)"
    assert "the first 40 events of one of them" in [t.get_text() for t in beginning.texts]
    assert beginning.get_xlim()[1] < through.get_xlim()[1]
    # A carrier without as many events is passed over.
    short = Trajectory(carrier.places_nm[[0, -1]], carrier.kinds[[0, -1]])
    again = dataclasses.replace(result, trajectories=(short, *result.trajectories))
    *_, beginning = files._FIGURES["trajectories"](again, STYLE).axes
    way = next(line for line in beginning.lines if line.get_zorder() == 3)
    assert np.array_equal(way.get_xydata(), carrier.places_nm[:40, [0, 2]])


def test_only_the_stretch_that_carriers_reach_is_drawn():
    result = result_of("10 µm, 300 planes")
    figure = files._FIGURES["trajectories"](result, STYLE)
    captions = [text.get_text() for text in figure.texts]
    assert captions[0].startswith("Only the first ") and captions[0].endswith("none came farther.")
    reach = max(t.places_nm[:, 0].max() for t in result.trajectories)
    start, end = figure.axes[0].get_xlim()
    assert start < 0.0 and reach < end < 1.2 * reach
    labels = [text.get_text() for text in figure.legends[0].get_texts()]
    assert "left there, still under way" in labels


@pytest.mark.parametrize(
    ("text", "changes", "label"),
    [
        (WIRE, {}, "height z (nm)"),
        (WIRE, {"channel.specularity": {"width": 1, "height": 0.5}}, "height z (nm)"),
        (WIRE, {"channel.specularity": {"width": 0.5, "height": 1}}, "width y (nm)"),
        (WIRE, NO_WALLS, "from the start, y (nm)"),
    ],
    ids=["both", "height", "width", "none"],
)
def test_walls_that_scatter_are_seen(text, changes, label):
    figure = files._FIGURES["trajectories"](space_result(text, changes), STYLE)
    assert figure.axes[-1].get_ylabel() == label
    hidden = [t.get_text() for t in figure.texts if "anywhere in between" in t.get_text()]
    assert len(hidden) == ("start" not in label)
    if hidden:
        assert ("walls of the width" if "height" in label else "walls of the height") in hidden[0]


def test_captions_say_how_carriers_were_chosen():
    for name, words in (
        ("ribbon with one barrier", "The first that got through, and of the others tried those"),
        ("ballistic", "The first carriers that were tried."),
        ("nobody gets through", "None of the carriers tried got through"),
    ):
        figure = files._FIGURES["trajectories"](result_of(name), STYLE)
        assert any(text.get_text().startswith(words) for text in figure.texts)


def test_more_trajectories_than_fit_are_left_out():
    result = space_result(RIBBON, {"simulation.trajectories": 20})
    figure = files._FIGURES["trajectories"](result, STYLE)
    ways = [line for line in figure.axes[0].lines if line.get_zorder() == 3]
    assert len(ways) == len({line.get_color() for line in ways}) == 3
    assert "3 of 10 that" in figure.axes[0].texts[-2].get_text()


def test_colours_of_carriers_differ_in_grey():
    levels = sorted(luminance(drawn._colour(number, STYLE)) for number in range(3))
    assert np.all(np.diff(levels) > 8)


def test_planes_are_thicker_where_they_reflect_more():
    planes = [{"position_nm": 100, "transmission": 0.9}, {"position_nm": 200, "transmission": 0.1}]
    figure = files._FIGURES["trajectories"](
        space_result(RIBBON, {"scattering.points": planes}), STYLE
    )
    widths = [
        c.get_linewidths() for c in figure.axes[0].collections if len(c.get_linewidths()) == 2
    ]
    assert any(w[1] > 3.0 * w[0] for w in widths)


def test_missing_transmission_is_not_told():
    result = dataclasses.replace(result_of("ribbon with one barrier"), transmission=None)
    title = files._FIGURES["trajectories"](result, STYLE).axes[0].texts[-2].get_text()
    assert title == "3 that reach the right contact"
    assert isinstance(result.resistance_ohm, Estimate)
