"""What a user reads in the terminal."""

import dataclasses
import io
import math
import re

import numpy as np
import pytest
from rich.console import Console

import carriersim as cs
from carriersim import limits, report
from carriersim.formatting import (
    ascii_text,
    format_count,
    format_number,
    format_scaled,
    format_seconds,
    format_share,
    split_parts,
)
from carriersim.report import format_estimate, print_limits, print_result
from carriersim.result import Estimate, LimitRow, Part
from carriersim.scenario import read_text
from tests.fake_results import RIBBON, WIRE, fake_result, limit_row, relaxing_result, space_result


def printed(result, width=80, encoding="utf-8"):
    raw = io.BytesIO()
    stream = io.TextIOWrapper(raw, encoding=encoding)
    print_result(result, Console(file=stream, width=width))
    stream.flush()
    return raw.getvalue().decode(encoding)


@pytest.mark.parametrize(
    ("value", "error", "text"),
    [
        (12.906, 0.021, "12.906 ± 0.021 kΩ"),
        (12.90649, 0.0209, "12.906 ± 0.021 kΩ"),
        (12906.4, 2100.0, "12900 ± 2100 kΩ"),
        (12.9, 0.0996, "12.90 ± 0.10 kΩ"),
        (-3.14159, 0.25, "-3.14 ± 0.25 kΩ"),
        (0.0, 0.1, "0.00 ± 0.10 kΩ"),
        (-0.0001, 0.2, "0.00 ± 0.20 kΩ"),
        (1.0, 50.0, "1 ± 50 kΩ"),
        (5.0, 0.0, "5 kΩ exact"),
        (1.0, 1e-18, "1.000000000 ± 1.0e-18 kΩ"),
        (3e8, 1e5, "(3.0000 ± 0.0010)e+08 kΩ"),
        (1.5e-12, 2e-15, "(1.5000 ± 0.0020)e-12 kΩ"),
        (5e-320, 1e-321, "(5.00 ± 0.10)e-320 kΩ"),
        (5.0, math.nan, "5 ± n/a kΩ"),
        (5.0, None, "5 ± n/a kΩ"),
        (5.0, math.inf, "5 ± infinite kΩ"),
        (math.nan, 1.0, "n/a"),
        (-math.inf, 1.0, "-infinite kΩ"),
    ],
)
def test_estimates(value, error, text):
    assert format_estimate(value, error, "kΩ") == text


def test_an_estimate_without_unit():
    assert format_estimate(0.2, 0.001) == "0.2000 ± 0.0010"


@pytest.mark.parametrize(
    ("value", "error", "unit", "text"),
    [
        (12906.4, 21.0, "Ω", "12.906 ± 0.021 kΩ"),
        (1.5e-6, 1e-9, "A", "1.5000 ± 0.0010 µA"),
        (3.2e7, None, "Ω", "32 MΩ"),
        (0.0, 0.0, "W", "0 W exact"),
        (0.0, 2e-9, "W", "0.0 ± 2.0 nW"),
        (6453.2, 1e-11, "Ω", "6.4532 kΩ exact"),
        (999.9999, 0.5, "Ω", "1.00000 ± 0.00050 kΩ"),
    ],
)
def test_scaled_estimates(value, error, unit, text):
    assert format_scaled(value, error, unit) == text


def test_other_texts():
    assert format_number(1.40000001) == "1.4"
    assert format_number(123456789.0) == "1.23457e+08"
    assert format_count(950) == "950"
    assert format_count(12_345) == "12.3 thousand"
    assert format_count(1_280_000) == "1.28 million"
    assert format_count(9.9996e8) == "1 billion"
    assert format_seconds(0.4213) == "0.42 s"
    assert format_seconds(200) == "3 min 20 s"
    assert format_seconds(7500) == "2 h 05 min"
    assert format_share(1, 4) == "25.0 %"
    assert format_share(1, 1e6) == "< 0.1 %"
    assert ascii_text("12.9 ± 0.1 kΩ, 3 µm, Büttiker, μ₊ – 東") == (
        "12.9 +- 0.1 kohm, 3 um, Buttiker, mu+ - ?"
    )


def test_the_main_numbers_are_there():
    text = printed(fake_result(seed=3))
    assert "ballistic resistance  12.9064 kΩ exact" in text
    assert text.startswith("one defect: bias 20 mV, 300 K; 1.28 million histories in 0.42 s;")
    for word in ("current", "resistance", "conductance", "transmission", " nA", " kΩ", " Ω"):
        assert word in text
    assert "0.3 %" in text


@pytest.mark.parametrize("width", [20, 40, 59, 60, 80, 99, 100, 140, 300])
@pytest.mark.parametrize("encoding", ["utf-8", "ascii", "latin-1"])
def test_lines_fit_any_width_without_escape_codes(width, encoding):
    changes = {"probes": [{"position_nm": 20}, {"position_nm": 80}]}
    text = printed(fake_result(changes=changes), width, encoding)
    assert "\x1b" not in text
    if width >= 40:
        assert max(map(len, text.splitlines())) <= width
    if encoding != "utf-8":
        assert text.isascii()
        assert "kohm" in text


def test_numbers_are_never_broken_over_lines():
    for width in (40, 60, 80):
        lines = printed(fake_result(), width).splitlines()
        assert any("19.436 ± 0.058 kΩ  47.3 %" in line.replace("   ", "  ") for line in lines)


def test_brackets_in_names_are_not_markup():
    result = fake_result(changes={"name": "[red]a[/red] :smile: [x"})
    assert printed(result).startswith("[red]a[/red] :smile: [x: bias")


def test_sources_appear_only_where_there_is_room():
    assert "Büttiker" not in printed(fake_result(), 99)
    wide = printed(fake_result(), 100)
    assert wide.count("Büttiker 1986") == 1
    assert "[1]" in wide


def rows_of(result, title="Where the resistance sits"):
    """Rows of a table: texts between runs of spaces."""
    text = printed(result, 120).partition(f"{title}\n")[2].partition("\n\n")[0]
    return [re.split(r"\s{2,}", row.strip()) for row in text.splitlines()[1:]]


def test_many_parts_are_summed_by_kind():
    places = [{"position_nm": float(i + 1), "transmission": 0.9} for i in range(60)]
    result = fake_result(changes={"scattering.points": places})
    rows = rows_of(result)
    names = ["left interface", "60 scatterers", "backscattering, 61 pieces", "right interface"]
    assert sorted(row[0] for row in rows) == sorted(names)
    assert (rows[0][0], rows[3][0]) == (names[0], names[3])
    # 60 (1 - T)/T of h/2e^2 (Datta 1995).
    own = next(row for row in rows if row[0] == "60 scatterers")
    assert float(own[1].removesuffix(" kΩ").split()[0]) == pytest.approx(60 * 12.9064 / 9, rel=2e-3)
    shares = [float(row[-1].removesuffix(" %")) for row in rows]
    assert sum(shares) == pytest.approx(100.0, abs=0.3)


def test_a_part_that_stands_out_is_named_among_many():
    places = [{"position_nm": float(i + 1), "transmission": 0.9} for i in range(60)]
    places[30]["transmission"] = 0.3
    result = fake_result(
        changes={"scattering.points": places, "scattering.backscatter_path_nm": None}
    )
    names = [row[0] for row in rows_of(result)]
    ends = "left interface", "right interface"
    assert names == [ends[0], "60 scatterers", ends[1], "of these: scatterer 31"]


def test_sums_of_a_run_have_errors_of_their_own():
    """Of 60 scatterers that all count the same carriers, the sum is better known than the parts."""
    text = """
channel: {length_nm: 61, dimension: 1}
contacts: {bias_mV: 1, temperature_K: 4}
scattering: {backscatter_path_nm: 500, points: [PLACES]}
simulation: {histories: 20000}
"""
    places = ", ".join(f"{{position_nm: {i + 1}, transmission: 0.9}}" for i in range(60))
    result = cs.simulate(read_text(text.replace("PLACES", places)), workers=1)
    points, pieces = result.breakdown_sums
    assert (points.kind, points.count, pieces.mechanism, pieces.count) == (
        "point",
        60,
        "elastic",
        61,
    )
    for group in (points, pieces):
        own = [p.resistance_ohm for p in result.breakdown if p.kind == group.kind]
        total = group.resistance_ohm
        assert total.value == pytest.approx(sum(p.value for p in own), rel=1e-9)
        assert 0.0 < total.error < sum(p.error for p in own)
    # 60 (1 - T)/T and L/lam of h/2e^2 (Datta 1995).
    for group, expected in ((points, 60 / 9), (pieces, 61 / 500)):
        estimate = group.resistance_ohm
        assert abs(estimate.value - expected * 12906.40372) < 4 * estimate.error
    names = [row[0] for row in rows_of(result)]
    assert names[1:3] == ["60 scatterers", "elastic, 61 pieces"]


def test_split_parts_keeps_order_and_drops_nothing_that_counts():
    parts = [Part(str(i), "point", Estimate(float(i), 0.1), position_nm=i) for i in range(8)]
    parts[0] = dataclasses.replace(parts[0], resistance_ohm=Estimate(0.0, 0.0))
    shown, rest = split_parts(parts, 7, 3)
    assert [part.name for part in shown] == list("1234567")
    assert rest == []
    shown, rest = split_parts(parts, 6, 3)
    assert [part.name for part in shown] == list("567")
    assert [part.name for part in rest] == list("1234")


def test_missing_quantities_are_told_once():
    changes = {"contacts.left.temperature_K": 320, "contacts.temperature_K": 280}
    text = " ".join(printed(fake_result(changes=changes)).split())
    reason = "the contacts have different temperatures"
    assert text.count(reason) == 1
    assert f"resistance_ohm, breakdown, transmission: {reason}" in text
    assert "320 K left and 280 K right" in text
    assert "heat current out of the left contact" in text
    assert "noise" not in text


def test_linear_response():
    changes = {"contacts.bias_mV": 0, "probes": [{"position_nm": 20}]}
    text = printed(fake_result(changes=changes))
    assert "linear response" in text
    assert " of the bias" in text
    assert "current " not in text.partition("Without a value")[0].replace("heat current", "")


def test_caution_only_beside_heat_or_current():
    caution = "not a design rating"
    result = fake_result()
    assert " ".join(printed(result).split()).count(caution) == 1
    bare = dataclasses.replace(
        result, current_A=None, heat_W=None,
        thermal=type(result.thermal)(None, None, None, None),
    )  # fmt: skip
    assert caution not in " ".join(printed(bare).split())


def test_unfinished_runs_say_so():
    result = fake_result(converged=False, stopped_by="max_seconds")
    text = printed(result, 100)
    assert "time limit reached" in text
    assert "Not converged: the asked error was not reached." in text


DRIFTING = {"converged": False, "drift": "mu+ near 40 nm (largest of 41)"}


def test_an_unfinished_relaxing_run_says_what_drifts():
    result = relaxing_result(
        {"simulation.histories": 100}, residual=7.25, drift_sigma=7.25, stopped_by="histories",
        **DRIFTING,
    )  # fmt: skip
    reason, remedy = report.unfinished(result)
    assert reason == (
        "the fields still drift, most of all mu+ near 40 nm (largest of 41): by 7.25 standard "
        "errors from one window of rounds to the next, where 3.5 are allowed"
    )
    assert remedy == "raise simulation.histories"
    text = " ".join(printed(result).split())
    assert f"Not converged: {reason}." in text


@pytest.mark.parametrize(
    ("changes", "stopped_by", "reason", "remedy"),
    [
        (
            {"simulation.relative_error": 1e-3},
            "histories",
            "the asked error was not reached: 0.3 % of R, asked 0.1 %",
            "raise simulation.histories or simulation.relative_error",
        ),
        (
            {"simulation.relative_error": 0.01, "simulation.heat_share_error": 1e-3},
            "max_seconds",
            "the asked error was not reached: 0.001 of the lattice's share of I V",
            "raise simulation.max_seconds or simulation.heat_share_error",
        ),
        (
            {"simulation.heat_share_error": 1e-3},
            "windows",
            "the asked error was not reached: 0.001 of the lattice's share of I V",
            "this is the longest run of so many batches: raise simulation.batches or "
            "simulation.heat_share_error",
        ),
    ],
)
def test_a_settled_run_says_which_error_is_missing(changes, stopped_by, reason, remedy):
    result = relaxing_result(
        changes, residual=2.0, drift_sigma=2.0, stopped_by=stopped_by, **DRIFTING
    )
    assert report.unfinished(result) == (reason, remedy)


def test_drift_and_error_are_both_told():
    result = relaxing_result(
        {"simulation.relative_error": 1e-3}, residual=4.0, drift_sigma=4.0, stopped_by="windows",
        **DRIFTING,
    )  # fmt: skip
    reason = report.unfinished(result)[0]
    assert "still drift" in reason and "asked 0.1 %" in reason
    early = dataclasses.replace(result, residual=None, drift=None, drift_sigma=None)
    assert "too short to tell whether the fields are settled" in report.unfinished(early)[0]


# Relaxing runs.

PROBES = {"probes": [{"position_nm": 20, "coupling": 1.0}, {"position_nm": 70}]}


def block(text, title):
    return text.partition(f"\n{title}\n")[2].partition("\n\n")[0]


def test_conditions_of_a_relaxing_run():
    changes = PROBES | {
        "relaxation.bath_temperature_K": 70,
        "relaxation.mechanisms[1]": {"kind": "optical_phonon", "path_nm": 30, "energy_meV": 36},
    }
    changes["relaxation.mechanisms"] = [
        {"kind": "bath", "path_nm": 20, "direction": "randomised"},
        {"kind": "carriers", "path_nm": 5},
        changes.pop("relaxation.mechanisms[1]"),
    ]
    scenario = relaxing_result().scenario.replace(changes)
    assert report._conditions(scenario) == (
        "bias 100 mV, 77 K; relaxation by bath (path 20 nm, direction randomised), carriers "
        "(path 5 nm, direction kept), optical phonons of 36 meV (path 30 nm); 1 coupled probe; "
        "lattice 70 K"
    )
    probes = scenario.replace({"relaxation.mechanisms": []})
    assert report._conditions(probes) == "bias 100 mV, 77 K; 1 coupled probe; lattice 70 K"
    elastic = probes.replace({"probes": []})
    assert report._conditions(elastic) == "bias 100 mV, 77 K"


def test_probes_are_named_the_same_everywhere():
    text = printed(relaxing_result(PROBES), 100)
    rows = block(text, "Where the resistance sits").splitlines()
    assert any(row.split()[:4] == ["probe", "1", "20", "nm"] for row in rows)
    rows = block(text, "Voltage probes").splitlines()[1:]
    assert [row.split()[:4] for row in rows] == [
        ["probe", "1", "20", "nm"],
        ["probe", "2", "70", "nm"],
    ]
    assert "takes" not in rows[1] and rows[0].rstrip().endswith("takes 100.0 %")
    assert "heat in probe 1" in text and "heat in probe 2" not in text


def test_heat_shares_add_up():
    result = relaxing_result(PROBES)
    rows = block(printed(result, 100), "Heat").splitlines()
    assert rows[0].split() == ["share", "of", "I", "V"]
    shares = [float(row.partition(" %")[0].split()[-1]) for row in rows if " %" in row]
    assert len(shares) == 4 and sum(shares) == pytest.approx(100, abs=0.21)
    heat = result.heat_W
    power = result.scenario.contacts.bias_mV * 1e-3 * result.current_A.value
    (row,) = [row for row in rows if row.startswith("heat in the lattice")]
    assert f"{100 * heat.lattice.value / power:.1f} %" in row


@pytest.mark.parametrize(("share", "shown"), [(0.0, False), (0.09, False), (0.11, True)])
def test_a_shift_by_noise_is_shown_where_it_counts(share, shown):
    result = relaxing_result()
    known = result.current_A
    current = dataclasses.replace(known, systematic=share * known.error)
    text = printed(dataclasses.replace(result, current_A=current), 100)
    assert ("off ≤ " in text) == shown
    assert ("off ≤: the noise of the frozen fields" in text) == shown


def test_carriers_inside():
    result = relaxing_result()
    rows = block(printed(result, 100), "Carriers inside").splitlines()
    assert len(rows) == 4
    profiles = result.carrier_temperature_plus_K, result.carrier_temperature_minus_K
    for row, values in zip(rows[1:], (result.departure, *profiles), strict=True):
        cell = int(values.argmax())
        assert f"{result.x_nm[cell]:.4g} nm" in row
        assert float(row.split(" ± ")[0].split()[-1]) == pytest.approx(values[cell], rel=1e-2)
    assert "largest departure" in rows[1] and " K " in rows[2]
    linear = relaxing_result({"contacts.bias_mV": 0})
    assert "Carriers inside" not in printed(linear)


def test_noise_does_not_choose_the_hottest_cell():
    result = relaxing_result()
    kelvin, errors = result.carrier_temperature_K.copy(), dict(result.errors)
    spread = errors["carrier_temperature_K"].copy()
    kelvin[3], spread[3] = 2 * kelvin.max(), 3 * kelvin.max()
    errors["carrier_temperature_K"] = spread
    noisy = dataclasses.replace(result, carrier_temperature_K=kelvin, errors=errors)
    assert report._greatest(noisy, "carrier_temperature_K") == (
        report._greatest(result, "carrier_temperature_K")
    )


def test_rise_of_the_lattice():
    """P' / G' by hand: mean and greatest power per metre over 0.2 W/(K m)."""
    conductance = {"relaxation.substrate_conductance_W_per_K_m": 0.2}
    result = relaxing_result(conductance)
    text = " ".join(printed(result).split())
    found = re.search(
        r"With 0\.2 W/\(K m\) to the substrate this power would warm the lattice by ([\d.]+) ± "
        r"[\d.]+ K on the mean of the channel and by ([\d.]+) ± [\d.]+ K at most, near ([\d.]+) nm",
        text,
    )
    mean, most, place = map(float, found.groups())
    widths = np.diff(result.cell_edges_nm)
    power = result.lattice_power_W_per_nm
    assert mean == pytest.approx(result.heat_W.lattice.value / 100e-9 / 0.2, rel=1e-2)
    assert mean == pytest.approx((power @ widths) / 100 * 1e9 / 0.2, rel=0.05)
    assert most == pytest.approx(power.max() * 1e9 / 0.2, rel=1e-2)
    assert place == pytest.approx(result.x_nm[power.argmax()], rel=1e-3)
    assert "T_b itself stays fixed in the model" in text
    assert text.index("T_b itself") < text.index("not a design rating")


@pytest.mark.parametrize(
    "changes",
    [
        {},
        {"relaxation.substrate_conductance_W_per_K_m": 0.2, "contacts.bias_mV": 0},
        {"relaxation.substrate_conductance_W_per_K_m": 0.2, "relaxation.mechanisms": [
            {"kind": "carriers", "path_nm": 20}
        ]},
    ],
    ids=["not asked", "no bias", "no lattice"],
)  # fmt: skip
def test_no_rise_of_the_lattice(changes):
    assert "substrate" not in printed(relaxing_result(changes))


def test_no_rise_of_the_lattice_without_relaxation():
    changes = {"relaxation.substrate_conductance_W_per_K_m": 0.2}
    assert "substrate" not in printed(fake_result(changes=changes))


@pytest.mark.parametrize("width", [40, 60, 80, 140])
@pytest.mark.parametrize("encoding", ["utf-8", "ascii"])
def test_relaxing_runs_fit_any_width(width, encoding):
    changes = PROBES | {"relaxation.substrate_conductance_W_per_K_m": 0.2}
    result = relaxing_result(changes)
    current = dataclasses.replace(result.current_A, systematic=result.current_A.error)
    text = printed(dataclasses.replace(result, current_A=current), width, encoding)
    assert max(map(len, text.splitlines())) <= width
    assert text.isascii() == (encoding == "ascii")
    assert "off <= " in text or "off ≤ " in text


# Two and three dimensions.


def endless(result):
    text = printed(result, 120)
    return text.partition("An endless channel of this kind\n")[2].partition("\n\n")[0]


def test_conditions_tell_dimension_and_walls():
    bias = "bias 10 mV, 300 K; "
    ribbon, wire = space_result().scenario, space_result(WIRE).scenario
    assert report._conditions(ribbon) == f"{bias}d = 2, 30 nm wide, specularity 0"
    assert report._conditions(wire) == f"{bias}d = 3, 30 nm wide, 20 nm high, specularity 0.2"
    film = wire.replace({"channel.specularity": {"width": 1, "height": 0.1}})
    words = "specularity 1 (width) and 0.1 (height)"
    assert report._conditions(film) == f"{bias}d = 3, 30 nm wide, 20 nm high, {words}"
    bare = ribbon.replace({"channel.width_nm": None, "channel.specularity": None})
    assert report._conditions(bare) == f"{bias}d = 2 without walls"


def test_walls_are_a_mechanism_of_the_breakdown():
    rows = rows_of(space_result())
    assert [row[:2] for row in rows] == [
        ["left interface", "1.2934 ± 0.0039 kΩ"],
        ["elastic", "0 – 120 nm"],
        ["walls", "0 – 120 nm"],
        ["scatterer 1", "120 nm"],
        ["elastic", "120 – 300 nm"],
        ["walls", "120 – 300 nm"],
        ["right interface", "1.2888 ± 0.0039 kΩ"],
    ]


def test_hundreds_of_planes_take_one_row():
    places = [{"position_nm": 1.5 * (i + 1), "transmission": 0.9} for i in range(300)]
    rows = rows_of(space_result(WIRE, {"scattering.points": places}))
    names = [row[0] for row in rows]
    # 500 nm over 78 nm of the fake, and 300 planes of 1/9 each.
    assert set(names[1:4]) == {"300 scatterers", "elastic, 301 pieces", "walls, 301 pieces"}
    assert len(names) == 5


def test_resistance_times_width():
    result = space_result()
    text = printed(result, 100)
    ohm_um = result.resistance_ohm.value * 0.03
    (row,) = [row for row in text.splitlines() if row.startswith("resistance × width")]
    assert float(row.split()[3]) == pytest.approx(ohm_um, rel=1e-3)
    assert "Ω µm" in row and "0.3 %" in row
    assert "× width" not in printed(space_result(WIRE)) + printed(fake_result())


def test_an_endless_wire():
    lines = endless(space_result(WIRE)).splitlines()
    assert [re.split(r"\s{2,}", line.strip()) for line in lines[:4]] == [
        ["resistivity / that of the bulk", "1.5000 ± 0.0040", "0.27 %", "off ≤ 0.001"],
        ["resistivity", "3.0000 ± 0.0080 µΩ cm", "0.27 %"],
        ["sheet resistance", "60.00 ± 0.16 Ω", "0.27 %"],
        ["backscattering path", "80.00 ± 0.20 nm", "0.25 %"],
    ]
    assert lines[4:] == [
        "Bulk alone: 2 µΩ cm, computed from R_B A and the path in the bulk.",
        "Method: spread of 12800 carriers' walks of 900 nm.",
        "off ≤: what longer walks may still change, besides ±",
    ]


def test_where_the_resistivity_of_the_bulk_comes_from():
    given = space_result(WIRE, {"channel.bulk_resistivity_uohm_cm": 1.68})
    assert "Bulk alone: 1.68 µΩ cm, as given." in endless(given)
    sheet = "Bulk alone: 40 Ω a square, computed from R_B W and the path in the bulk."
    assert sheet in endless(space_result())
    block = endless(space_result())
    assert "µΩ cm" not in block
    ballistic = dataclasses.replace(space_result().long_channel, resistivity_ratio=None)
    assert "Bulk" not in endless(space_result(long_channel=ballistic))


def test_without_an_endless_channel_there_is_a_reason():
    why = {"long_channel": "interrupted", "resistance_width_ohm_um": "no width"}
    text = printed(space_result(long_channel=None, why=why))
    assert "An endless channel" not in text
    assert "long_channel: interrupted" in text and "resistance_width_ohm_um: no width" in text
    # In one dimension nobody asks.
    text = printed(fake_result(why=why))
    assert "long_channel" not in text and "resistance_width_ohm_um" not in text


@pytest.mark.parametrize("width", [40, 60, 80, 140])
@pytest.mark.parametrize("encoding", ["utf-8", "ascii"])
@pytest.mark.parametrize("text", [RIBBON, WIRE], ids=["ribbon", "wire"])
def test_more_dimensions_fit_any_width(text, width, encoding):
    lines = printed(space_result(text), width, encoding)
    assert max(map(len, lines.splitlines())) <= width
    assert lines.isascii() == (encoding == "ascii")
    assert "?" not in lines


def test_differential_resistance_only_if_it_differs():
    result = fake_result()
    same = dataclasses.replace(result, differential_resistance_ohm=result.resistance_ohm)
    assert "differential" not in printed(same)
    other = dataclasses.replace(result, differential_resistance_ohm=Estimate(1e3, 5.0))
    assert "differential resistance" in printed(other)


def test_missing_errors_and_values():
    result = fake_result(
        resistance_ohm=Estimate(2e4, None), conductance_S=Estimate(0.0, 0.0, 1e-7),
        differential_resistance_ohm=None, four_point=None,
        limits=(LimitRow("a", "b.resistance_ohm", 1.0, None, None, None, "s", "exact"),),
    )  # fmt: skip
    text = printed(result)
    assert "20 ± n/a kΩ" in text
    assert "20000 ± n/a Ω" in text
    assert "0 S exact" in text
    assert "off ≤ 100 nS" in text


@pytest.mark.parametrize(
    ("quantity", "unit"),
    [
        ("resistance_ohm", "Ω"),
        ("breakdown.resistance_ohm", "Ω"),
        ("probes[0].potential_mV", "mV"),
        ("probes[0].potential per unit of the bias", ""),
        ("heat_W.left_contact", "W"),
        ("thermal.seebeck_V_per_K", "V/K"),
        ("thermal.conductance_W_per_K", "W/K"),
        ("thermal.conductance_W_per_K / (conductance_S * T), W ohm/K^2", "W Ω/K²"),
        ("transmission", ""),
        ("resistance_width_ohm_um", "Ω µm"),
        ("long_channel.resistivity_uohm_cm", "µΩ cm"),
        ("long_channel.sheet_ohm", "Ω"),
        ("long_channel.backscatter_path_nm", "nm"),
        ("long_channel.resistivity_ratio", ""),
    ],
)
def test_units_of_limits(quantity, unit):
    assert report._unit(quantity) == unit


def test_far_from_an_exact_form_is_marked():
    row = LimitRow("a", "transmission", 0.2, 0.3, 0.01, 10.0, "s", "exact")
    text = printed(fake_result(limits=(row,)))
    assert "+10.0 !" in text
    assert "! more than 4 standard errors" in text
    rough = dataclasses.replace(row, holds="approximate")
    assert "!" not in printed(fake_result(limits=(rough,)))


def test_a_long_list_of_limits_is_cut():
    rng = np.random.default_rng(0)
    rows = tuple(limit_row(f"row {i}", "transmission", 0.2, 0.01, rng) for i in range(60))
    assert "and 20 more in summary.json" in printed(fake_result(limits=rows))


@pytest.mark.parametrize("width", [40, 80, 140])
def test_print_limits(width):
    scenario = fake_result().scenario
    stream = io.StringIO()
    print_limits(scenario, limits.limits_for(scenario), Console(file=stream, width=width))
    text = stream.getvalue()
    assert text.startswith("one defect: bias 20 mV, 300 K")
    assert "12.9064 kΩ" in text
    assert "[1] Landauer 1957" in text
    assert "approx." in text or "exact" in text
    assert max(map(len, text.splitlines())) <= width


def test_print_no_limits():
    stream = io.StringIO()
    print_limits(fake_result().scenario, (), Console(file=stream))
    assert "No closed form applies." in stream.getvalue()


def test_progress_is_silent_unless_watched(monkeypatch):
    stream = io.StringIO()
    progress = report.progress(Console(file=stream))
    assert isinstance(progress, report.NoProgress)
    progress.start(0.01)
    progress.update(1000, 0.05, 0.01, 1.0)
    progress.stop()
    assert stream.getvalue() == ""


def test_progress_is_one_line(monkeypatch):
    clock = iter(range(1000))
    monkeypatch.setattr(report.time, "monotonic", lambda: float(next(clock)))
    stream = io.StringIO()
    console = Console(file=stream, force_terminal=True, width=80, legacy_windows=False)
    progress = report.progress(console)
    progress.start(0.005)
    for i in range(1, 6):
        progress.update(100_000 * i, 0.02 / i, 0.005, 0.5 * i)
    assert "500 thousand" in stream.getvalue()
    progress.stop()
    progress.stop()
    text = stream.getvalue()
    assert text.replace("\x1b", "").count("\n") <= 1
    assert text.endswith(("\x1b[2K", "\x1b[?25h"))


def test_progress_waits_a_moment_and_survives_odd_numbers(monkeypatch):
    stream = io.StringIO()
    progress = report.Progress(Console(file=stream, force_terminal=True))
    progress.start(None)
    progress.update(10, math.inf, None, 0.1)
    assert stream.getvalue() == ""
    for error in (None, math.nan, math.inf, 0.0):
        assert report._progress_text(10, error, 0.01, 1.0) == "10 histories, 1 s"
    text = report._progress_text(1e6, 0.02, 0.01, 3.0)
    assert text == "1 million histories, 3 s; R ± 2 %, asked 1 %; about 9 s more"
