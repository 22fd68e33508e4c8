"""Figures are drawn from results alone, for every kind of result, and repeat bit by bit."""

import dataclasses
import hashlib
import subprocess
import sys

import numpy as np
import pytest
from PIL import Image

from carriersim import fermi, limits, storage
from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.figures import (
    draw_departure,
    draw_heat,
    draw_heat_shares,
    draw_occupation,
    draw_profile,
    draw_resistance,
    draw_temperatures,
    energies,
    files,
    save_all,
)
from carriersim.figures import occupation as occupation_module
from carriersim.figures import resistance as resistance_module
from carriersim.figures.style import (
    FILLING,
    MISSING_AND_EXTRA,
    STYLE,
    new_figure,
    own_settings,
    place,
    spread,
    thin,
)
from carriersim.result import Estimate, Part
from tests.fake_results import MIXED, fake_result, relaxing_result

ALL = ["profile.png", "profile.svg", "occupation.png", "occupation.svg"]
ALL += ["resistance.png", "resistance.svg"]
RELAXED = ["departure.png", "departure.svg", "temperatures.png", "temperatures.svg"]
RELAXED += ["heat.png", "heat.svg"]
SPACE = ("directions", "trajectories")  # only in two and three dimensions


def axes():
    return place(new_figure(5.4, 4.0), 0.7, 0.2, 1.0, 0.4)


def points(count, length):
    rng = np.random.default_rng(5)
    places = np.sort(rng.uniform(0.01, 0.99, count)) * length
    return [{"position_nm": float(x), "transmission": 0.9} for x in places]


SETTINGS = {
    "linear response, five probes": {
        "contacts.bias_mV": 0,
        "probes": [{"position_nm": x} for x in (5, 20, 50, 60, 90)],
    },
    "negative bias, one probe": {"contacts.bias_mV": -300, "probes": [{"position_nm": 20}]},
    "tiny bias, cold, wide": {
        "contacts.bias_mV": 1e-5,
        "contacts.temperature_K": 0.02,
        "channel.modes": 1e7,
    },
    "absolute zero, 1 nm, ballistic": {
        "contacts.temperature_K": 0,
        "channel.length_nm": 1,
        "scattering.points": None,
        "scattering.backscatter_path_nm": None,
    },
    "sections, barrier, one cell": {
        "scattering.sections": [{"from_nm": 10, "to_nm": 30, "mean_free_path_nm": 5}],
        "contacts.left.transmission": 0.5,
        "simulation.cells": 1,
    },
    "100 µm, opaque": {
        "channel.length_nm": 1e5,
        "scattering.points": [*points(50, 1e5), {"position_nm": 5e4, "transmission": 1e-6}],
    },
}


TWO_PROBES = [
    {"position_nm": 20, "coupling": 1},
    {"position_nm": 75, "coupling": 1, "temperature_K": 100},
]
HOT = {
    "contacts.temperature_K": 20,
    "contacts.bias_mV": 40,
    "relaxation.mechanisms": [{"kind": "carriers", "path_nm": 15}],
}
RELAXING_SETTINGS = {
    "strong bath, two probes and one that only reads": {
        "relaxation.mechanisms[0].path_nm": 1,
        "probes": [*TWO_PROBES, {"position_nm": 60}],
        "scattering.sections": [{"from_nm": 10, "to_nm": 30, "mean_free_path_nm": 1e9}],
    },
    "weak bath, tiny bias": {
        "relaxation.mechanisms[0].path_nm": 1000,
        "contacts.bias_mV": 0.1,
        "contacts.temperature_K": 300,
    },
    "hot carriers": HOT,
    "absolute zero, one cell, negative bias": {
        "contacts.temperature_K": 0,
        "contacts.bias_mV": -100,
        "scattering.points": None,
        "simulation.cells": 1,
    },
    "phonon, sections, 20 µm, cold": {
        "relaxation.mechanisms": [{"kind": "optical_phonon", "path_nm": 2000, "energy_meV": 160}],
        "scattering.sections": [{"from_nm": 1000, "to_nm": 3000, "mean_free_path_nm": 1e9}],
        "scattering.points[0].position_nm": 15_000,
        "channel.length_nm": 20_000,
        "contacts.temperature_K": 0.1,
        "contacts.bias_mV": 0.03,
        "probes": [{"position_nm": 9000}],
    },
}


@pytest.mark.parametrize("changes", SETTINGS.values(), ids=SETTINGS.keys())
def test_every_kind_of_result_is_drawn(tmp_path, changes):
    written = save_all(fake_result(changes=changes), tmp_path)
    assert [path.name for path in written] == ALL
    check_files(written)


@pytest.mark.parametrize("changes", RELAXING_SETTINGS.values(), ids=RELAXING_SETTINGS.keys())
def test_every_kind_of_relaxing_result_is_drawn(tmp_path, changes):
    written = save_all(relaxing_result(changes), tmp_path)
    assert [path.name for path in written] == ALL + RELAXED
    check_files(written)


def test_storage_knows_every_figure():
    assert tuple(files._FIGURES) == storage.FIGURES


def check_files(written):
    for path in written:
        if path.suffix == ".png":
            with Image.open(path) as image:
                image.load()
                assert min(image.size) > 200
        else:
            assert path.read_text("utf-8").rstrip().endswith("</svg>")


def test_ten_thousand_scatterers_make_no_huge_files(tmp_path):
    changes = {"channel.length_nm": 1e5, "scattering.points": points(10_000, 1e5)}
    written = save_all(fake_result(changes=changes, energies=60), tmp_path)
    assert sum(path.stat().st_size for path in written) < 4e6


def test_unequal_temperatures_have_no_resistance_figure(tmp_path):
    changes = {"contacts.left.temperature_K": 320, "contacts.right.temperature_K": 280}
    result = fake_result(changes=changes | {"contacts.temperature_K": None})
    assert [path.name for path in save_all(result, tmp_path)] == ALL[:4]
    with pytest.raises(ValueError, match="no breakdown: the contacts have different temp"):
        draw_resistance(axes(), result)


def test_what_is_not_known_is_left_out(tmp_path):
    result = fake_result(changes={"probes": [{"position_nm": 20}, {"position_nm": 30}]})
    nothing = np.full(result.x_nm.size, np.nan)
    parts = tuple(
        dataclasses.replace(part, resistance_ohm=Estimate(part.resistance_ohm.value, None))
        for part in result.breakdown
    )
    probes = (
        dataclasses.replace(result.probes[0], potential=None),
        dataclasses.replace(result.probes[1], potential=Estimate(5.0, None)),
    )
    errors = {name: np.full_like(value, np.nan) for name, value in result.errors.items()}
    result = dataclasses.replace(
        result, carrier_temperature_K=nothing, departure=nothing, breakdown=parts,
        probes=probes, errors=errors,
    )  # fmt: skip
    assert len(save_all(result, tmp_path)) == 6


def test_the_same_result_gives_the_same_bytes(tmp_path):
    hashes = []
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
        written = save_all(fake_result(), tmp_path / name)
        hashes.append([hashlib.sha256(path.read_bytes()).hexdigest() for path in written])
    assert hashes[0] == hashes[1]


def test_figures_ignore_and_keep_the_users_settings(tmp_path):
    import matplotlib

    with matplotlib.rc_context({"axes.facecolor": "red", "font.size": 30, "svg.hashsalt": "own"}):
        save_all(fake_result(), tmp_path)
        assert matplotlib.rcParams["font.size"] == 30
        assert matplotlib.rcParams["svg.hashsalt"] == "own"
    with Image.open(tmp_path / "profile.png") as image:
        red, green, blue = image.convert("RGB").getpixel((image.width // 2, 80))
    assert not (red > 200 and green < 100 and blue < 100)


def test_neither_the_package_nor_the_figures_import_pyplot():
    code = (
        "import sys, carriersim; assert 'matplotlib' not in sys.modules;"
        "import carriersim.figures; assert 'matplotlib.pyplot' not in sys.modules"
    )
    subprocess.run([sys.executable, "-c", code], check=True)


def test_a_full_directory_is_reported(tmp_path):
    with pytest.raises(OSError):
        save_all(fake_result(), tmp_path / "absent")


def line_of(ax, label):
    return next(line for line in ax.lines if line.get_label() == label)


def test_profile_shows_potentials_closed_form_and_units():
    result = fake_result(changes={"probes": [{"position_nm": 20}]}, noise=1e-9)
    ax = draw_profile(axes(), result)
    right = line_of(ax, "right-moving, μ₊")
    assert right.get_xdata()[[0, -1]] == pytest.approx([0.0, 100.0])
    assert right.get_ydata()[0] == pytest.approx(20.0, abs=0.01)
    # The jump at the scatterer at 40 nm is upright: one place, two values.
    at = np.flatnonzero(right.get_xdata() == 40.0)
    assert at.size == 2
    x = np.array([40.0 - 1e-9, 40.0 + 1e-9])
    expected = limits.profile(result.scenario, x)[0]
    assert right.get_ydata()[at] == pytest.approx(expected, abs=0.05)
    closed = line_of(ax, "closed form")
    expected = limits.profile(result.scenario, closed.get_xdata())[0]
    assert closed.get_ydata() == pytest.approx(expected)
    assert ax.get_xlabel() == "position along the channel (nm)"
    assert ax.get_ylabel() == "electrochemical potential (meV)"
    labels = [text.get_text() for text in ax.get_legend().get_texts()]
    assert "probe" in labels
    assert {"T = 0.4", "T = 0.7"} <= {text.get_text() for text in ax.texts}


def test_profile_without_a_closed_form(monkeypatch):
    monkeypatch.setattr(limits, "profile", lambda scenario, x_nm: None)
    ax = draw_profile(axes(), fake_result())
    assert "closed form" not in [line.get_label() for line in ax.lines]


@pytest.mark.parametrize(
    ("changes", "label"),
    [
        ({"contacts.bias_mV": 0}, "potential per unit of the bias"),
        ({"contacts.bias_mV": 1e-3}, "electrochemical potential (µeV)"),
        ({"contacts.bias_mV": 20_000}, "electrochemical potential (eV)"),
    ],
)
def test_profile_units(changes, label):
    assert draw_profile(axes(), fake_result(changes=changes)).get_ylabel() == label


def test_a_long_channel_is_drawn_in_micrometres():
    ax = draw_profile(axes(), fake_result(changes={"channel.length_nm": 1e5}))
    assert ax.get_xlabel() == "position along the channel (µm)"
    assert line_of(ax, "right-moving, μ₊").get_xdata()[-1] == pytest.approx(100.0)


def test_more_scatterers_than_labels_are_counted():
    changes = {"scattering.points": points(70, 100.0)}
    ax = draw_profile(axes(), fake_result(changes=changes))
    assert [text.get_text() for text in ax.texts] == ["70 point scatterers (ticks along the top)"]


def test_same_filling_keeps_the_number_of_carriers():
    result = fake_result(changes={"contacts.bias_mV": 200, "contacts.temperature_K": 40})
    values = result.f_plus[:, 150]
    same = occupation_module.same_filling(result, values, 40.0)
    widths = np.diff(result.energy_edges_meV)
    assert widths @ same == pytest.approx(widths @ values, abs=0.01)
    # It is an equilibrium, which the two-step occupation is not.
    assert np.sqrt(widths @ (same - values) ** 2) > 2.0
    half = np.interp(0.5, same[::-1], result.energy_meV[::-1])
    expected = fermi.occupation(result.energy_meV, half, 40.0)
    assert same == pytest.approx(expected, abs=0.02)


def test_same_filling_in_linear_response():
    result = fake_result(changes={"contacts.bias_mV": 0}, noise=1e-9)
    same = occupation_module.same_filling(result, result.f_plus[:, 0], 300.0)
    assert same == pytest.approx(result.f_plus[:, 0], abs=1e-6)
    assert occupation_module.same_filling(result, result.f_plus[:, 0], 0.0) is None


def test_same_filling_counts_the_modes():
    changes = {"contacts.bias_mV": 200, "contacts.temperature_K": 40}
    result = fake_result(changes=changes)
    changes |= {"channel.modes": {"energy_meV": [0.0, 200.0], "value": [1.0, 5.0]}}
    result = dataclasses.replace(result, scenario=fake_result(changes=changes).scenario)
    values = result.f_plus[:, 150]
    same = occupation_module.same_filling(result, values, 40.0)
    weight = np.diff(result.energy_edges_meV) * np.interp(result.energy_meV, [0, 200], [1, 5])
    assert weight @ same == pytest.approx(weight @ values, abs=0.05)


def test_occupation_cuts_lie_on_both_sides_of_the_largest_jump():
    result = fake_result()
    *_, a, b, c, d = draw_occupation(new_figure(5.4, 5.6), result)
    titles = [ax.get_title() for ax in (a, b, c, d)]
    assert titles == ["a: 2.75 nm", "b: 39.75 nm", "c: 40.25 nm", "d: 96.75 nm"]


def test_occupation_at_chosen_places():
    figure = new_figure(5.4, 5.6)
    drawn = draw_occupation(figure, fake_result(), places_nm=[10, 90, 50])
    assert len(drawn) == 3 + 3
    assert drawn[-1].get_title() == "c: 89.75 nm"


def test_occupation_map_follows_uneven_energies_and_cells():
    changes = {"contacts.bias_mV": 300, "contacts.temperature_K": 10}
    result = fake_result(changes=changes, noise=0.0)
    # The same occupations on an axis of which every second half is joined.
    keep = np.r_[0:60, 60 : result.energy_meV.size : 4]
    edges = np.r_[result.energy_edges_meV[keep], result.energy_edges_meV[-1]]
    uneven = dataclasses.replace(
        result, energy_meV=0.5 * (edges[1:] + edges[:-1]), energy_edges_meV=edges,
        f_plus=result.f_plus[keep], f_minus=result.f_minus[keep],
    )  # fmt: skip
    window = (-20.0, 250.0)
    even = energies.sample(result, result.f_plus, window)
    joined = energies.sample(uneven, uneven.f_plus, window)
    assert even.shape == joined.shape
    assert np.mean(np.abs(even - joined) > 0.05) < 0.05


def test_energy_axis_stops_where_nothing_happens():
    changes = {"contacts.bias_mV": 300, "contacts.temperature_K": 4}
    result = fake_result(changes=changes)
    kT = 4 * BOLTZMANN_MEV_PER_K
    low, high = energies.energy_window(result)
    assert -40 < low < -5 * kT
    assert 300 + 5 * kT < high < 340


def test_resistance_rows_add_up():
    result = fake_result()
    ax = draw_resistance(axes(), result)
    labels = [text.get_text() for text in ax.get_yticklabels()]
    assert labels[0] == "left interface"
    assert labels[2] == "scatterer 1, 40 nm"
    ends = [bar.get_x() + bar.get_width() for bar in ax.patches]
    total = sum(part.resistance_ohm.value for part in result.breakdown)
    assert ends[-1] == pytest.approx(total / 1e3)
    assert "kΩ" in ax.get_xlabel()


def test_of_many_parts_the_sums_are_shown():
    result = fake_result(changes={"scattering.points": points(40, 100.0)})
    ax = draw_resistance(axes(), result)
    labels = [text.get_text() for text in ax.get_yticklabels()]
    assert labels[0] == "left interface" and labels[-1] == "right interface"
    assert "40 scatterers" in labels and len(labels) == 4


def test_mechanisms_of_one_piece_rise_together():
    def piece(name, ohm):
        estimate = Estimate(ohm, 1.0)
        return Part(name, "piece", estimate, from_nm=0.0, to_nm=100.0, mechanism=name)

    parts = [piece("edges", 100.0), piece("lattice", 300.0)]
    places, heights, kinds = resistance_module._staircase(parts)
    assert places.tolist() == [[0.0, 100.0]]
    assert heights.tolist() == [[0.0, 400.0]]
    assert kinds.tolist() == ["piece"]


def luminance(colour):
    from matplotlib.colors import to_rgb

    linear = [c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in to_rgb(colour)]
    y = float(np.dot([0.2126, 0.7152, 0.0722], linear))
    return 116 * y ** (1 / 3) - 16 if y > 0.008856 else 903.3 * y


def test_colours_differ_in_grey():
    curves = [luminance(c) for c in (STYLE.mean, STYLE.right_moving, STYLE.left_moving)]
    kinds = [luminance(getattr(STYLE, kind)) for kind in ("point", "probe", "piece", "interface")]
    for levels in (curves, kinds):
        assert np.all(np.diff(sorted(levels)) > 10)
    steps = [luminance(FILLING(x)) for x in np.linspace(0, 1, 21)]
    assert np.all(np.diff(steps) < -1.5)


def test_spread_keeps_order_gap_and_ends():
    places = spread([0.5, 0.5, 0.51, 0.98], 0.1, 0.04, 0.96)
    assert np.all(np.diff(places) >= 0.1 - 1e-12)
    assert places.min() >= 0.04
    assert places.max() <= 0.96
    assert spread([0.3, 0.7], 0.1, 0.0, 1.0) == pytest.approx([0.3, 0.7])
    assert np.all(np.diff(spread([0.5] * 30, 0.1, 0.0, 1.0)) > 0)


def test_thinning_keeps_every_step():
    x = np.sort(np.random.default_rng(1).uniform(0, 1, 50_000))
    keep = thin(x, 100)
    assert keep[0] == 0
    assert keep[-1] == x.size - 1
    assert keep.size <= 202
    assert np.diff(x[keep]).max() < 0.011
    assert thin(x[:50], 100).tolist() == list(range(50))


def test_mixed_text_is_the_default():
    assert fake_result(MIXED).scenario == fake_result().scenario


@pytest.mark.parametrize("changes", RELAXING_SETTINGS.values(), ids=RELAXING_SETTINGS.keys())
def test_texts_of_relaxing_figures_do_not_overlap(changes):
    result = relaxing_result(changes)
    with own_settings():
        for name, make_figure in files._FIGURES.items():
            if name in SPACE:
                assert make_figure(result, STYLE) is None
            else:
                check_texts(make_figure(result, STYLE), name)


def check_texts(figure, name):
    """No text leaves the figure or covers another."""
    figure.draw_without_rendering()
    boxes = [(text, text.get_window_extent()) for text in texts_of(figure)]
    assert len(boxes) > 8
    for index, (text, box) in enumerate(boxes):
        inside = figure.bbox.padded(1.0)
        assert inside.contains(*box.min) and inside.contains(*box.max), (name, text)
        for other, other_box in boxes[index + 1 :]:
            assert not box.padded(-1.0).overlaps(other_box), (name, text, other)


def texts_of(figure):
    """All texts that are seen, without tick labels beyond the ends of an axis."""
    found = [*figure.texts]
    for ax in figure.axes:
        found += [ax.title, ax.xaxis.label, ax.yaxis.label, *ax.texts]
        for axis, ends in ((ax.xaxis, ax.get_xlim()), (ax.yaxis, ax.get_ylim())):
            shown = [
                tick.label1
                for tick in axis.get_major_ticks()
                if min(ends) <= tick.get_loc() <= max(ends) and tick.label1.get_visible()
            ]
            found += [*shown, axis.offsetText]
        if ax.get_legend():
            found += ax.get_legend().get_texts()
    for legend in figure.legends:
        found += legend.get_texts()
    return [text for text in found if text.get_visible() and text.get_text()]


def test_linear_response_has_no_figures_of_energies(tmp_path):
    result = relaxing_result({"contacts.bias_mV": 0, "probes": TWO_PROBES})
    assert result.relaxes
    assert [path.name for path in save_all(result, tmp_path)] == ALL
    for draw in (draw_temperatures, draw_heat, draw_heat_shares):
        with pytest.raises(ValueError, match=r"^no .*bias 0"):
            draw(axes(), result)
    with pytest.raises(ValueError, match="no departure: no relaxation, bias 0"):
        draw_departure(new_figure(5.4, 5.2), result)


def test_unknown_temperatures_and_power_are_left_out(tmp_path):
    result = relaxing_result()
    nothing = np.full(result.x_nm.size, np.nan)
    names = ("carrier_temperature_plus_K", "carrier_temperature_minus_K", "carrier_temperature_K")
    result = dataclasses.replace(
        result, **dict.fromkeys((*names, "departure"), nothing), heat_W=None, errors={}
    )
    assert [path.name for path in save_all(result, tmp_path)] == ALL


@pytest.mark.parametrize("changes", [{}, {"probes": TWO_PROBES}, HOT], ids=["", "probes", "hot"])
def test_relaxing_results_agree_with_closed_forms(changes):
    result = relaxing_result(changes, noise=1e-9, energies=800)
    temperatures = limits.carrier_temperatures_K(result.scenario, result.x_nm)
    assert result.carrier_temperature_plus_K == pytest.approx(temperatures[0], rel=1e-3)
    assert result.carrier_temperature_minus_K == pytest.approx(temperatures[1], rel=1e-3)
    power = limits.lattice_power_W_per_nm(result.scenario, result.x_nm)
    assert result.lattice_power_W_per_nm == pytest.approx(power, abs=1e-3 * power.max() + 1e-20)
    expected = limits.heat_W(result.scenario)
    for name in ("left_contact", "right_contact", "lattice"):
        value = getattr(result.heat_W, name).value
        assert value == pytest.approx(getattr(expected, name), rel=1e-3, abs=1e-20)


@pytest.mark.parametrize("changes", [{}, {"probes": TWO_PROBES}], ids=["", "probes"])
def test_profile_of_a_relaxing_channel_has_its_closed_form(changes):
    result = relaxing_result(changes, noise=1e-9)
    ax = draw_profile(axes(), result)
    closed = line_of(ax, "closed form")
    expected = np.interp(result.x_nm, closed.get_xdata(), closed.get_ydata())
    assert result.mu_plus_meV == pytest.approx(expected, abs=0.1)


def test_profile_with_phonons_has_no_closed_form():
    phonon = {"kind": "optical_phonon", "path_nm": 20, "energy_meV": 160}
    ax = draw_profile(axes(), relaxing_result({"relaxation.mechanisms": [phonon]}))
    assert "closed form" not in [line.get_label() for line in ax.lines]


def test_curves_are_upright_at_a_probe_that_takes_carriers():
    ax = draw_profile(axes(), relaxing_result({"probes": TWO_PROBES}))
    places = line_of(ax, "mean of both").get_xdata()
    assert [np.count_nonzero(places == x) for x in (20.0, 40.0, 75.0)] == [2, 2, 2]


def test_occupation_of_a_relaxing_channel_has_one_more_cut():
    result = relaxing_result()
    drawn = draw_occupation(new_figure(5.4, 5.6), result)[3:]
    titles = [ax.get_title() for ax in drawn]
    assert titles == ["a: 2.75 nm", "b: 39.75 nm", "c: 40.25 nm", "d: 69.75 nm", "e: 96.75 nm"]
    # Each direction with its band, beside the Fermi function of as many carriers at 77 K.
    cell = int(np.argmin(abs(result.x_nm - 69.75)))
    right, same, *_ = drawn[3].lines
    band = drawn[3].collections[0].get_paths()[0].vertices[:, 0]
    error = result.errors["f_plus"][:, cell]
    inside = np.isin(result.energy_meV, right.get_ydata())
    assert right.get_xdata() == pytest.approx(result.f_plus[inside, cell])
    assert band.max() == pytest.approx((result.f_plus[:, cell] + error)[inside].max())
    expected = fermi.occupation(same.get_ydata(), result.mu_plus_meV[cell], 77.0)
    assert same.get_xdata() == pytest.approx(expected, abs=0.02)
    # Without a jump the cuts are spread evenly.
    drawn = draw_occupation(new_figure(5.4, 5.6), relaxing_result({"scattering.points": None}))
    assert [ax.get_title()[:5] for ax in drawn[3:]] == ["a: 2.", "b: 26", "c: 49", "d: 72", "e: 96"]


def test_occupations_of_relaxing_channels_are_means_over_bins():
    result = relaxing_result({"contacts.bias_mV": 0.1, "contacts.temperature_K": 300}, noise=1e-9)
    figure = new_figure(5.4, 5.6)
    lines = draw_occupation(figure, result)[-1].lines
    # Left-moving carriers at the right end are those of the right contact.
    assert np.abs(lines[2].get_xdata()).max() < 1e-3


def test_differences_of_both_signs_get_a_colour_each():
    changes = {"contacts.left.temperature_K": 300, "contacts.right.temperature_K": 100}
    changes |= {"contacts.temperature_K": None, "contacts.bias_mV": 5}
    picture = draw_occupation(new_figure(5.4, 5.6), relaxing_result(changes))[0].images[0]
    assert picture.get_cmap() is MISSING_AND_EXTRA
    assert picture.norm.vmin == -picture.norm.vmax < -0.1


def test_bin_means_hold_the_number_at_any_temperature():
    edges = np.array([-50.0, -10.0, 3.0, 4.0, 20.0, 90.0])
    kelvin = np.array([0.0, 1.0, 100.0, np.nan])
    means = fermi.mean_occupation(edges, np.array([3.5, 3.5, 3.5, 3.5]), kelvin)
    assert means[:, 0] == pytest.approx([1.0, 1.0, 0.5, 0.0, 0.0])
    fine = np.linspace(-50.0, 90.0, 280_001)
    for column in (1, 2):
        f = fermi.occupation(0.5 * (fine[1:] + fine[:-1]), 3.5, kelvin[column])
        bins = np.searchsorted(edges, fine[:-1] + 1e-9) - 1
        expected = np.bincount(bins, f) / np.bincount(bins)
        assert means[:, column] == pytest.approx(expected, abs=1e-6)
    assert np.isnan(means[:, 3]).all()


def test_departure_map_and_curve():
    result = relaxing_result({"probes": TWO_PROBES})
    figure = new_figure(5.4, 5.2)
    top, lower, bar = draw_departure(figure, result)
    picture = lower.images[0]
    assert picture.norm.vmin == -picture.norm.vmax
    assert picture.get_cmap() is MISSING_AND_EXTRA
    assert bar.get_ylabel() == "mean f − F(E; μ, Tₑ)"
    assert lower.get_xlabel() == "position along the channel (nm)"
    assert lower.get_ylabel() == "energy (meV)"
    assert top.get_xlim() == lower.get_xlim()
    curve = next(line for line in top.lines if line.get_linewidth() == STYLE.line)
    assert np.isin(result.departure, curve.get_ydata()).all()
    image = picture.get_array()
    low, high = picture.get_extent()[2:]
    energy = low + (high - low) * (np.arange(image.shape[0]) + 0.5) / image.shape[0]
    column = int(0.415 * image.shape[1])  # at 41.5 nm
    cell = int(np.argmin(abs(result.x_nm - 41.5)))
    mean = 0.5 * (result.f_plus + result.f_minus)[:, cell]
    local = fermi.occupation(energy, result.mu_meV[cell], result.carrier_temperature_K[cell])
    expected = np.interp(energy, result.energy_meV, mean) - local
    assert np.asarray(image[:, column]) == pytest.approx(expected, abs=0.02)
    labels = [text.get_text() for text in figure.legends[0].get_texts()]
    assert labels == ["μ of both directions", "probe", "standard error (typical)"]


def test_noise_of_the_departure_stays_pale():
    changes = {"contacts.bias_mV": 1, "contacts.temperature_K": 300, "scattering.points": None}
    result = relaxing_result(changes, noise=0.3)
    _, lower, bar = draw_departure(new_figure(5.4, 5.2), result)
    assert lower.images[0].norm.vmax > 2.9 * np.abs(np.diff(bar.get_ylim())) / 6.1
    assert np.mean(np.abs(lower.images[0].get_array()) > 0.5 * lower.images[0].norm.vmax) < 0.2
    assert "(10" in bar.get_ylabel()


def test_temperatures_show_carriers_lattice_contacts_and_probes():
    result = relaxing_result({"probes": TWO_PROBES, "contacts.left.temperature_K": 90})
    ax = draw_temperatures(axes(), result)
    assert ax.get_xlabel() == "position along the channel (nm)"
    assert ax.get_ylabel() == "carrier temperature (K)"
    for name, label in (
        ("carrier_temperature_plus_K", "right-moving"),
        ("carrier_temperature_minus_K", "left-moving"),
        ("carrier_temperature_K", "mean, with drift"),
    ):
        assert np.isin(getattr(result, name), line_of(ax, label).get_ydata()).all()
    assert len(ax.collections) >= 3  # bands
    assert line_of(ax, "lattice").get_ydata() == pytest.approx([77.0, 77.0])
    assert line_of(ax, "contact").get_ydata() == pytest.approx([90.0, 90.0])
    assert line_of(ax, "probe").get_xdata() == pytest.approx([20.0, 75.0])
    assert line_of(ax, "probe").get_ydata() == pytest.approx([77.0, 100.0])
    low, high = ax.get_ylim()
    assert low < 77.0 and high > np.nanmax(result.carrier_temperature_plus_K)


def test_cold_temperatures_are_in_millikelvin():
    ax = draw_temperatures(
        axes(), relaxing_result({"contacts.temperature_K": 0.1, "contacts.bias_mV": 0.03})
    )
    assert ax.get_ylabel() == "carrier temperature (mK)"
    assert line_of(ax, "lattice").get_ydata() == pytest.approx([100.0, 100.0])


def test_heat_shares_add_up():
    result = relaxing_result({"probes": [*TWO_PROBES, {"position_nm": 60}]})
    ax = draw_heat_shares(axes(), result)
    labels = [text.get_text() for text in ax.get_yticklabels()]
    assert labels == ["left contact", "lattice", "probe, 20 nm", "probe, 75 nm", "right contact"]
    assert ax.get_xlabel() == "share of I V (%)"
    widths = [bar.get_width() for bar in ax.patches]
    assert sum(widths) == pytest.approx(100.0)
    power = result.current_A.value * 0.1
    assert widths[1] == pytest.approx(100.0 * result.heat_W.lattice.value / power, rel=0.01)
    assert f"{widths[1]:.1f} %" in [text.get_text() for text in ax.texts]


def test_many_probes_share_a_row_of_the_heat():
    probes = [{"position_nm": x, "coupling": 1} for x in range(2, 98, 4)]
    ax = draw_heat_shares(axes(), relaxing_result({"probes": probes, "scattering.points": None}))
    labels = [text.get_text() for text in ax.get_yticklabels()]
    assert len(labels) == 12
    assert labels[-2] == "the other 16 probes"
    assert sum(bar.get_width() for bar in ax.patches) == pytest.approx(100.0)


def test_heat_between_different_temperatures_is_in_watts():
    changes = {"contacts.left.temperature_K": 300, "contacts.right.temperature_K": 100}
    changes |= {"contacts.temperature_K": None, "contacts.bias_mV": 5}
    ax = draw_heat_shares(axes(), relaxing_result(changes))
    assert ax.get_xlabel() == "power that lands there (nW)"
    assert ax.patches[0].get_width() < -50.0
    assert not [text for text in ax.texts if "%" in text.get_text()]


@pytest.mark.parametrize(
    ("changes", "label", "factor"),
    [
        ({}, "power to the lattice (nW/nm)", 1e9),
        (
            {"channel.length_nm": 20_000, "relaxation.mechanisms[0].path_nm": 4000},
            "power to the lattice (nW/µm)",
            1e12,
        ),
    ],
    ids=["nm", "µm"],
)
def test_power_along_the_channel(changes, label, factor):
    result = relaxing_result(changes)
    ax = draw_heat(axes(), result)
    assert ax.get_ylabel() == label
    line = line_of(ax, "lattice (area: its share)")
    power = result.lattice_power_W_per_nm * factor
    assert np.isclose(power[:, None], line.get_ydata()).any(axis=1).all()
    closed = line_of(ax, "closed form")
    expected = limits.lattice_power_W_per_nm(result.scenario, np.array([60.0])) * factor
    scale = closed.get_xdata()[-1] / result.scenario.channel.length_nm
    at = np.interp(60.0 * scale, closed.get_xdata(), closed.get_ydata())
    assert at == pytest.approx(expected[0], rel=0.01)


def test_carriers_alone_heat_no_lattice():
    figure = files._FIGURES["heat"](relaxing_result(HOT), STYLE)
    assert len(figure.axes) == 1
    assert len(files._FIGURES["heat"](relaxing_result(), STYLE).axes) == 2


def test_resistance_of_coupled_probes_and_phonons():
    result = relaxing_result({"probes": TWO_PROBES})
    ax = draw_resistance(axes(), result)
    labels = [text.get_text() for text in ax.get_yticklabels()]
    assert labels[1:4] == ["probe 1, 20 nm", "scatterer 1, 40 nm", "probe 2, 75 nm"]
    assert ax.patches[1].get_facecolor()[:3] == pytest.approx(rgb(STYLE.probe))

    def phonon(start, end):
        estimate = Estimate(1000.0, 1.0)
        name = "optical phonon 160 meV"
        return Part(name, "piece", estimate, from_nm=start, to_nm=end, mechanism=name)

    assert resistance_module._label(phonon(0.0, 40.0), 100.0) == "optical phonon 160 meV, 0 – 40 nm"
    label = resistance_module._label(phonon(12.346, 56.789), 100.0)
    assert label == "phonon 160 meV, 12.346 – 56.789 nm"


def rgb(colour):
    from matplotlib.colors import to_rgb

    return to_rgb(colour)


def test_colours_of_missing_and_extra_are_equally_dark():
    shares = np.linspace(0.0, 0.45, 10)
    missing = [luminance(MISSING_AND_EXTRA(share)) for share in shares]
    extra = [luminance(MISSING_AND_EXTRA(1.0 - share)) for share in shares]
    assert np.all(np.diff(missing) > 2.0) and np.all(np.diff(extra) > 2.0)
    assert np.abs(np.subtract(missing, extra)).max() < 10.0
