"""Figures are drawn from results alone, for every kind of result, and repeat bit by bit."""

import dataclasses
import hashlib
import subprocess
import sys

import numpy as np
import pytest
from PIL import Image

from carriersim import fermi, limits
from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.figures import draw_occupation, draw_profile, draw_resistance, save_all
from carriersim.figures import occupation as occupation_module
from carriersim.figures import resistance as resistance_module
from carriersim.figures.style import FILLING, STYLE, new_figure, place, spread, thin
from carriersim.result import Estimate, Part
from tests.fake_results import MIXED, fake_result

ALL = ["profile.png", "profile.svg", "occupation.png", "occupation.svg"]
ALL += ["resistance.png", "resistance.svg"]


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


@pytest.mark.parametrize("changes", SETTINGS.values(), ids=SETTINGS.keys())
def test_every_kind_of_result_is_drawn(tmp_path, changes):
    written = save_all(fake_result(changes=changes), tmp_path)
    assert [path.name for path in written] == ALL
    for path in written:
        if path.suffix == ".png":
            with Image.open(path) as image:
                image.load()
                assert min(image.size) > 300
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
    even = occupation_module._sample(result, result.f_plus, window)
    joined = occupation_module._sample(uneven, uneven.f_plus, window)
    assert even.shape == joined.shape
    assert np.mean(np.abs(even - joined) > 0.05) < 0.05


def test_energy_axis_stops_where_nothing_happens():
    changes = {"contacts.bias_mV": 300, "contacts.temperature_K": 4}
    result = fake_result(changes=changes)
    kT = 4 * BOLTZMANN_MEV_PER_K
    low, high = occupation_module._energy_window(result)
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


def test_of_many_parts_the_largest_are_named():
    result = fake_result(changes={"scattering.points": points(40, 100.0)})
    ax = draw_resistance(axes(), result)
    labels = [text.get_text() for text in ax.get_yticklabels()]
    assert len(labels) == 12
    assert labels[-1].startswith("the other ")


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
