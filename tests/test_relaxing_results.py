"""Results of relaxing runs against an independent deterministic solution, and what they hold.

Tolerance: 4 standard errors; each standard error is small enough that 2 % of wrong physics fails.
"""

from dataclasses import fields, replace
from itertools import pairwise
from types import SimpleNamespace

import numpy as np
import pytest
from scipy.interpolate import CubicSpline

import carriersim as cs
from carriersim.assemble import assemble
from carriersim.assemble_relaxed import _departure
from carriersim.engine.iterate import relax
from carriersim.engine.mechanisms import temperatures
from carriersim.engine.observe_relaxed import (
    heat_share,
    in_parts,
    noise_bias,
)
from carriersim.engine.problem import build
from carriersim.engine.solve import Goal
from carriersim.fermi import mean_occupation, occupation
from carriersim.runner import as_done
from carriersim.scenario import read_text
from tests import reference_kinetic as reference
from tests.checks_of_numbers import QUANTUM_S, agree, part, profile

BIAS, KELVIN = 30.0, 20.0
WATT_PER_MEV2 = 2.0 * QUANTUM_S * 1e-6
LARGEST = 0.005  # standard error; times four it is the 2 % that must fail
BALLISTIC_OHM = 0.5 / QUANTUM_S


class Run:
    """A run, its result and the deterministic solution of the same problem."""

    def __init__(self, text, histories, case=None, workers=2):
        scenario = read_text(text)
        self.problem = build(scenario)
        self.totals = relax(self.problem, Goal(None, histories, None), workers)
        done = as_done(scenario, self.totals.all_histories)
        self.result = assemble(self.problem, self.totals, done)
        self.case = case
        self.expected = case and reference.solve(case)

    def beside(self, place_nm):
        """Mean potential just left and just right of a jump of the deterministic solution, meV."""
        s = self.expected
        i = np.flatnonzero(s.x == place_nm)[[0, -1]]
        return 0.5 * (s.mu_plus + s.mu_minus)[i]

    def drop_ohm(self, upper_meV, lower_meV):
        return (upper_meV - lower_meV) / self.expected.current * BALLISTIC_OHM


_made = {}


@pytest.fixture
def run_of():
    """Each named run is made once, when first asked for."""

    def get(name):
        if name not in _made:
            _made[name] = RUNS[name]()
        return _made[name]

    return get


def channel(mechanisms, length=400, path="200", points="", bias=BIAS, more="", probes="[]"):
    return f"""
name: relaxing
channel: {{length_nm: {length}}}
contacts: {{bias_mV: {bias}, temperature_K: {KELVIN}{more}}}
scattering:
  backscatter_path_nm: {path}
  points: [{points}]
relaxation: {{mechanisms: [{mechanisms}]}}
probes: {probes}
simulation: {{cells: 60}}
"""


FILTERS = """
    {position_nm: 100, transmission: {energy_meV: [0, 30], value: [0.2, 0.8]}},
    {position_nm: 250, transmission: {energy_meV: [0, 30], value: [0.9, 0.3]}}
"""


def case(**settings):
    return reference.Case(
        **({"length": 400.0, "bias": BIAS, "temperature_left": KELVIN} | settings)
    )


def filters():
    return (
        reference.Scatterer(100.0, ((0.0, 30.0), (0.2, 0.8))),
        reference.Scatterer(250.0, ((0.0, 30.0), (0.9, 0.3))),
    )


def kept():
    text = channel(
        "{kind: bath, path_nm: 100, direction: kept}",
        points=FILTERS,
        more=", left: {transmission: 0.5}",
        probes="[{position_nm: 50}, {position_nm: 180, weight_right: 1}]",
    )
    expected = case(
        backscatter_path=200.0,
        interface_left=0.5,
        scatterers=filters(),
        mechanisms=(reference.Bath(100.0),),
    )
    return Run(text, 4_000_000, expected)


TABLE = ((0.0, 30.0), (150.0, 900.0))


def randomised():
    table = "{energy_meV: [0, 30], value: [150, 900]}"
    text = channel(
        "{kind: bath, path_nm: 250, direction: randomised}",
        path=f"[{{name: a, backscatter_path_nm: 400}}, {{name: b, backscatter_path_nm: {table}}}]",
        points="{position_nm: 150, transmission: 0.5}",
    )
    expected = case(
        backscatter_path=lambda energy, x: 1 / (1 / 400 + 1 / np.interp(energy, *TABLE)),
        scatterers=(reference.Scatterer(150.0, 0.5),),
        mechanisms=(reference.Bath(250.0, randomised=True),),
    )
    return Run(text, 4_000_000, expected)


def probe():
    text = channel(
        "",
        path="400",
        points="{position_nm: 100, transmission: 0.5}, {position_nm: 300, transmission: 0.7}",
        probes="[{position_nm: 150}, {position_nm: 250}, "
        "{position_nm: 200, coupling: 0.6, weight_right: 0.7}]",
    )
    expected = case(
        backscatter_path=400.0,
        scatterers=(reference.Scatterer(100.0, 0.5), reference.Scatterer(300.0, 0.7)),
        probes=(reference.Probe(200.0, 0.84, 0.36),),
    )
    return Run(text, 2_000_000, expected)


def hot():
    text = channel("{kind: carriers, path_nm: 40}", length=600, path="100")
    expected = case(length=600.0, backscatter_path=100.0, mechanisms=(reference.Carriers(40.0),))
    return Run(text, 4_000_000, expected)


def linear():
    text = channel("{kind: bath, path_nm: 100, direction: kept}", points=FILTERS, bias=0)
    expected = case(
        bias=0.02,
        backscatter_path=200.0,
        scatterers=filters(),
        mechanisms=(reference.Bath(100.0),),
    )
    return Run(text, 2_000_000, expected)


def unequal():
    """Contacts at 60 and 20 K, lattice at 40 K: heat flows, and nothing has a resistance."""
    text = channel(
        "{kind: bath, path_nm: 100, direction: kept}",
        points=FILTERS,
        bias=10,
        more=", left: {temperature_K: 60}",
    ).replace("{mechanisms", "{bath_temperature_K: 40, mechanisms")
    expected = case(
        bias=10.0,
        temperature_left=60.0,
        temperature_right=KELVIN,
        lattice_temperature=40.0,
        backscatter_path=200.0,
        scatterers=filters(),
        mechanisms=(reference.Bath(100.0),),
    )
    return Run(text, 2_000_000, expected)


def everything():
    """Whatever a channel without energy dependence may hold, and a bias from right to left."""
    text = channel(
        "{kind: bath, path_nm: 150, direction: kept}, {kind: carriers, path_nm: 200}, "
        "{kind: carriers, path_nm: 300, direction: randomised}, "
        "{kind: bath, path_nm: 400, direction: randomised}",
        bias=-BIAS,
        points="{position_nm: 100, transmission: 0.5}",
        probes="[{position_nm: 50}, {position_nm: 200, coupling: 0.3, weight_right: 0.7}, "
        "{position_nm: 300, coupling: 0.1, temperature_K: 60}]",
    )
    return Run(text, 100_000)


RUNS = {
    "kept": kept,
    "randomised": randomised,
    "probe": probe,
    "hot": hot,
    "linear": linear,
    "unequal": unequal,
    "everything": everything,
}


# --- against the deterministic solution -----------------------------------------------------------


@pytest.mark.slow
def test_kept_bath_between_filters_in_numbers(run_of):
    run = run_of("kept")
    result, expected = run.result, run.expected
    assert result.converged, result.drift
    agree(result.transmission, expected.transmission)
    agree(result.resistance_ohm, BALLISTIC_OHM / expected.transmission)
    agree(result.current_A, expected.current * 2e-3 * QUANTUM_S)
    heat = result.heat_W
    for estimate, one in (
        (heat.left_contact, expected.heat_left),
        (heat.right_contact, expected.heat_right),
        (heat.lattice, expected.lattice),
    ):
        agree(estimate, one * WATT_PER_MEV2, LARGEST)
    share = heat_share(run.problem, run.totals)
    agree(share, expected.lattice_share, LARGEST)
    assert share.systematic < 2 * share.error
    for estimate in (result.current_A, result.resistance_ohm, result.transmission, heat.lattice):
        assert 0.0 < estimate.systematic < 3 * estimate.error
    assert result.current_A.systematic / result.current_A.value == pytest.approx(
        result.transmission.systematic / result.transmission.value
    )


def test_kept_bath_between_filters_in_parts(run_of):
    run = run_of("kept")
    result = run.result
    levels = [run.beside(x) for x in (0.0, 100.0, 250.0, 400.0)]
    drop = run.drop_ohm
    agree(part(result, "interface", 0.0), drop(BIAS, levels[0][0]))
    agree(part(result, "interface", 400.0), drop(levels[3][1], 0.0))
    for place, (before, after) in zip((0.0, 100.0, 250.0), levels, strict=False):
        agree(part(result, "point", place), drop(before, after), LARGEST)
    for place, (start, stop) in zip((50.0, 150.0, 300.0), pairwise(levels), strict=True):
        agree(part(result, "piece", place), drop(start[1], stop[0]), LARGEST)
    # A kept bath turns nobody round: the pieces belong to the elastic path, R_B L/lam.
    assert {p.mechanism for p in result.breakdown if p.kind == "piece"} == {"elastic"}
    agree(part(result, "piece", 300.0), 150 / 200 * BALLISTIC_OHM, LARGEST)


def test_kept_bath_between_filters_along_the_channel(run_of):
    run = run_of("kept")
    result, expected = run.result, run.expected
    for place in (20.0, 90.0, 110.0, 180.0, 240.0, 260.0, 320.0):
        x = profile_place(result, place)
        agree(profile(result, "mu_plus_meV", place), expected.at("mu_plus", x), LARGEST)
        agree(profile(result, "mu_minus_meV", place), expected.at("mu_minus", x), LARGEST)
        kelvin = profile(result, "carrier_temperature_plus_K", place)
        agree(kelvin, expected.at("T_plus", x), 0.01)
    middle, right = result.probes  # the second one sees right-moving carriers only
    ends = (expected.at(name, 50.0) for name in ("mu_plus", "mu_minus"))
    agree(middle.potential, 0.5 * sum(ends))
    agree(right.potential, expected.at("mu_plus", 180.0))
    # Power per nm, with errors of single cells: over a quarter of the channel at a time.
    power, error = result.lattice_power_W_per_nm, result.errors["lattice_power_W_per_nm"]
    z = (power - expected.lattice_density(result.x_nm) * WATT_PER_MEV2) / error
    assert np.abs(z).max() < 5 and np.sqrt(np.mean(z**2)) < 1.4
    assert (power * np.diff(result.cell_edges_nm)).sum() == pytest.approx(
        result.heat_W.lattice.value, rel=1e-12
    )


def profile_place(result, place_nm):
    """Middle of the cell that holds a place."""
    return result.x_nm[np.searchsorted(result.cell_edges_nm, place_nm, side="right") - 1]


@pytest.mark.parametrize(
    "name", ["kept", pytest.param("randomised", marks=pytest.mark.slow), "hot"]
)
def test_occupations(run_of, name):
    """f± at all energies around the contacts' potentials, and the distance from equilibrium."""
    run = run_of(name)
    result, expected = run.result, run.expected
    energy = result.energy_meV
    assert energy.size >= 200 and energy[0] < -10 * 1.7235 and energy[-1] > BIAS + 10 * 1.7235
    near = (energy > -3) & (energy < BIAS + 3)
    for side in ("f_plus", "f_minus"):
        f = CubicSpline(expected.energy, expected.at(side, result.x_nm), axis=1)(energy).T
        error = result.errors[side]
        assert np.median(error[near]) < 0.01
        z = (getattr(result, side) - f)[near] / error[near]
        assert np.sqrt(np.mean(z**2)) < 1.5, side
    assert_departure(result, expected)


def assert_departure(result, expected):
    """int (f - F)^2 dE / kT of the mean of both directions, to 3 % and four errors."""
    f = 0.5 * (expected.f_plus + expected.f_minus)
    energy = expected.energy
    step = energy[1] - energy[0]
    mu = 0.5 * (expected.mu_plus + expected.mu_minus)
    kT0 = reference.BOLTZMANN * KELVIN
    u = (f - occupation(energy, 0.0, KELVIN)) @ energy * step + (np.pi * kT0) ** 2 / 6
    kT = np.sqrt(6 * (u - mu**2 / 2)) / np.pi
    local = occupation(energy, mu[:, None], kT[:, None] / reference.BOLTZMANN)
    exact = np.sqrt(((f - local) ** 2).sum(axis=1) * step / kT)
    for place in (90.0, 180.0, 260.0):
        x = profile_place(result, place)
        estimate = profile(result, "departure", place)
        one = np.interp(x, expected.x, exact)
        assert abs(estimate.value - one) < 4 * estimate.error + 0.03 * one + 0.002


def test_randomised_bath_shares_the_pieces_with_the_paths(run_of):
    run = run_of("randomised")
    result, s = run.result, run.expected
    agree(result.transmission, s.transmission)
    agree(part(result, "point", 150.0), run.drop_ohm(*run.beside(150.0)), LARGEST)
    step = s.energy[1] - s.energy[0]
    flux = (s.f_plus - s.f_minus) * step
    turned = {
        "a": flux.sum(axis=1) / 400,
        "b": flux @ (1 / np.interp(s.energy, *TABLE)),
        "bath": flux.sum(axis=1) / 500,
    }
    cut = np.flatnonzero(s.x == 150.0)
    for place, nodes in ((75.0, slice(0, cut[0] + 1)), (300.0, slice(cut[-1], None))):
        for name, density in turned.items():
            drop = np.trapezoid(density[nodes], s.x[nodes])
            agree(part(result, "piece", place, name), run.drop_ohm(drop, 0.0), LARGEST)


def test_energies_of_the_net_flux_add_to_the_error_of_the_split(run_of):
    """Windows that disagree about where carriers are turned widen the shares, and R not."""
    run = run_of("randomised")
    tilt = np.linspace(0.8, 1.2, run.totals.field_sum.shape[1])[:, None]
    windows = [
        replace(w, field_sum=w.field_sum * (tilt if i % 2 else tilt[::-1]))
        for i, w in enumerate(run.totals.windows)
    ]
    tilted = assemble(run.problem, replace(run.totals, windows=windows), run.result.scenario)
    for name in ("a", "b"):
        one, other = (part(r, "piece", 300.0, name) for r in (run.result, tilted))
        assert other.value == one.value and other.error > 1.5 * one.error
    assert tilted.resistance_ohm.error == run.result.resistance_ohm.error


def test_coupled_probe_between_scatterers(run_of):
    run = run_of("probe")
    result, s = run.result, run.expected
    agree(result.transmission, s.transmission)
    agree(result.probes[2].potential, s.probe_mu[0])
    agree(part(result, "probe", 200.0), run.drop_ohm(*run.beside(200.0)), LARGEST)
    agree(part(result, "point", 100.0), BALLISTIC_OHM, LARGEST)
    heat = result.heat_W
    agree(heat.probes[2], s.probe_heat[0] * WATT_PER_MEV2, LARGEST)
    agree(heat.left_contact, s.heat_left * WATT_PER_MEV2, LARGEST)
    zero = (heat.probes[0], heat.probes[1], heat.lattice)
    assert all(one.value == one.error == 0.0 for one in zero)
    means = [0.5 * (s.at("mu_plus", x) + s.at("mu_minus", x)) for x in (150.0, 250.0)]
    outer = next(f for f in result.four_point if (f.from_nm, f.to_nm) == (150.0, 250.0))
    agree(outer.resistance_ohm, run.drop_ohm(*means), LARGEST)
    names = [p.name for p in result.breakdown if p.kind in ("point", "probe")]
    assert names == ["scatterer 1", "probe 3", "scatterer 2"]
    # Without energies that matter the current is proportional to the bias.
    agree(result.conductance_S, s.transmission / BALLISTIC_OHM)
    assert result.conductance_S.value == pytest.approx(1 / result.resistance_ohm.value, rel=1e-12)


def test_hot_carriers(run_of):
    run = run_of("hot")
    result, s = run.result, run.expected
    agree(result.transmission, 1 / 7, LARGEST)
    for place in (150.0, 300.0, 450.0):
        x = profile_place(result, place)
        plus = profile(result, "carrier_temperature_plus_K", place)
        minus = profile(result, "carrier_temperature_minus_K", place)
        agree(plus, s.at("T_plus", x), LARGEST)
        agree(minus, s.at("T_minus", x), LARGEST)
        drift = (s.at("mu_plus", x) - s.at("mu_minus", x)) / reference.BOLTZMANN
        square = 0.5 * (s.at("T_plus", x) ** 2 + s.at("T_minus", x) ** 2)
        mean = np.sqrt(square + 0.75 / np.pi**2 * drift**2)
        agree(profile(result, "carrier_temperature_K", place), mean, LARGEST)
    # From the energies that carriers events keep, which hang on no frozen temperature.
    cells = run.totals.sums["cells"].sum(axis=0) / run.totals.histories.sum()
    plus, drawn = (temperatures(cells[:, 0, 0], cells[:, 0, i], KELVIN) for i in (2, 1))
    np.testing.assert_allclose(result.carrier_temperature_plus_K, plus, rtol=1e-12)
    assert np.abs(drawn / plus - 1).max() > 1e-4
    assert result.heat_W.lattice.value == result.heat_W.lattice.error == 0.0
    assert {p.mechanism for p in result.breakdown if p.kind == "piece"} == {"elastic"}


def test_linear_response(run_of):
    run = run_of("linear")
    result, s = run.result, run.expected
    agree(result.transmission, s.transmission)
    agree(result.conductance_S, s.transmission / BALLISTIC_OHM)
    agree(result.differential_resistance_ohm, BALLISTIC_OHM / s.transmission)
    agree(part(result, "point", 100.0), run.drop_ohm(*run.beside(100.0)), LARGEST)
    for place in (50.0, 150.0, 300.0):
        x = profile_place(result, place)
        agree(profile(result, "mu_plus_meV", place), s.at("mu_plus", x) / s.case.bias, LARGEST)
    total = (result.f_plus * np.diff(result.energy_edges_meV)[:, None]).sum(axis=0)
    np.testing.assert_allclose(total, result.mu_plus_meV, rtol=1e-4)
    slope = (s.at("f_plus", result.x_nm) - occupation(s.energy, 0.0, KELVIN)) / s.case.bias
    slope = np.array([np.interp(result.energy_meV, s.energy, one) for one in slope]).T
    z = (result.f_plus - slope) / result.errors["f_plus"]
    assert np.sqrt(np.mean(z[np.abs(result.energy_meV) < 8] ** 2)) < 1.5
    assert result.linear_response and result.current_A is None and result.heat_W is None
    assert (
        np.isnan(result.lattice_power_W_per_nm).all() and result.thermal.heat_current_left_W is None
    )
    assert (result.carrier_temperature_K == KELVIN).all() and (result.departure == 0.0).all()
    assert heat_share(run.problem, run.totals) is None


def test_contacts_of_different_temperature(run_of):
    result, s = run_of("unequal").result, run_of("unequal").expected
    agree(result.current_A, s.current * 2e-3 * QUANTUM_S, LARGEST)
    agree(result.thermal.heat_current_left_W, -s.heat_left * WATT_PER_MEV2, LARGEST)
    agree(result.thermal.heat_current_right_W, s.heat_right * WATT_PER_MEV2, LARGEST)
    agree(result.heat_W.lattice, s.lattice * WATT_PER_MEV2, LARGEST)
    x = profile_place(result, 180.0)
    agree(profile(result, "carrier_temperature_plus_K", 180.0), s.at("T_plus", x), LARGEST)
    f = np.interp(result.energy_meV, s.energy, s.at("f_plus", np.array([x]))[0])
    cell = np.searchsorted(result.x_nm, x)
    z = (result.f_plus[:, cell] - f) / result.errors["f_plus"][:, cell]
    assert np.sqrt(np.mean(z**2)) < 1.6
    for name in ("transmission", "resistance_ohm", "breakdown", "four_point"):
        assert getattr(result, name) is None and "temperatures" in result.why[name]


@pytest.mark.slow
def test_optical_phonons_and_the_elastic_path():
    """In one dimension the net flux is the same everywhere: the path's part is R_B L/lam."""
    text = """
channel: {length_nm: 500}
contacts: {bias_mV: 100, temperature_K: 300}
scattering: {backscatter_path_nm: 300}
relaxation: {mechanisms: [{kind: optical_phonon, path_nm: 15, energy_meV: 160}]}
simulation: {cells: 50}
"""
    run = Run(text, 400_000)
    elastic = part(run.result, "piece", 250.0, "elastic")
    agree(elastic, 500 / 300 * BALLISTIC_OHM, 0.01)
    phonon = part(run.result, "piece", 250.0, "optical phonon")
    agree(phonon, (1 / 0.326927 - 1 - 500 / 300) * BALLISTIC_OHM, 0.02)


# --- what must hold exactly -----------------------------------------------------------------------


@pytest.mark.parametrize("name", RUNS)
def test_sums(run_of, name):
    """The parts add up to R, the heat to I V, the parts' names are in order."""
    result = run_of(name).result
    if result.breakdown is not None:
        total = sum(p.resistance_ohm.value for p in result.breakdown)
        assert total == pytest.approx(result.resistance_ohm.value, rel=1e-12)
        places = [p.position_nm if p.from_nm is None else p.from_nm for p in result.breakdown]
        assert places == sorted(places)
    heat = result.heat_W
    if heat is not None:
        powers = [heat.left_contact, heat.right_contact, heat.lattice, *heat.probes]
        power = result.current_A.value * result.scenario.contacts.bias_mV * 1e-3
        assert sum(p.value for p in powers) == pytest.approx(power, rel=1e-9)
        assert result.thermal.heat_current_left_W.value == -heat.left_contact.value
        assert result.thermal.heat_current_right_W == heat.right_contact


@pytest.mark.parametrize("name", RUNS)
def test_saved_and_opened(run_of, name, tmp_path):
    result = run_of(name).result
    again = cs.open_result(result.save(tmp_path / "place"))
    for field in fields(result):
        one, other = getattr(result, field.name), getattr(again, field.name)
        if field.name == "errors":
            assert one.keys() == other.keys()
            assert all(np.array_equal(one[k], other[k], equal_nan=True) for k in one)
        elif isinstance(one, np.ndarray):
            assert np.array_equal(one, other, equal_nan=True), field.name
        else:
            assert one == other, field.name
    assert all(np.isfinite(one).all() or one_name in result.why for one_name, one in arrays(result))


def arrays(result):
    """(name, array) of every field and error."""
    for field in fields(result):
        value = getattr(result, field.name)
        if isinstance(value, np.ndarray):
            yield field.name, value
    yield from result.errors.items()


def test_everything_at_once(run_of):
    """Mechanisms that leave the direction random share each piece in proportion to their rates."""
    run = run_of("everything")
    result = run.result
    expected = 1 + 400 / 200 + 1 + 400 / 600 + 400 / 800 + probe_ohm(0.42, 0.18, 0.7)
    expected += probe_ohm(0.1, 0.1, 0.5)
    agree(result.resistance_ohm, expected * BALLISTIC_OHM, 0.01)
    for place, length in ((50.0, 100), (150.0, 100), (250.0, 100), (350.0, 100)):
        shares = [part(result, "piece", place, m) for m in ("elastic", "carriers", "bath")]
        for share, path in zip(shares, (200, 600, 800), strict=True):
            agree(share, length / path * BALLISTIC_OHM, 0.03)
    names = [p.name for p in result.breakdown if p.kind != "piece"]
    assert names == ["left interface", "scatterer 1", "probe 2", "probe 3", "right interface"]
    assert result.current_A.value < 0.0 < result.resistance_ohm.value
    # Nothing frozen enters what doesn't depend on energy: no bias.
    assert result.current_A.systematic == result.heat_W.lattice.systematic == 0.0


def probe_ohm(from_left, from_right, right):
    """(1 - T)/T of a probe that draws no current, by its couplings and share emitted rightward."""
    # A carrier that comes from the left passes, or is taken and comes out rightward.
    through = 1 - from_left * (1 - right)
    assert through == pytest.approx(1 - from_right * right)  # the same from the other side
    return (1 - through) / through


def test_what_is_missing_has_a_reason(run_of):
    for name in RUNS:
        result = run_of(name).result
        why = result.why
        for key in ("conductance_S", "resistance_ohm", "breakdown", "heat_W", "current_A"):
            assert (getattr(result, key) is None) == (key in why), (name, key)
        for key in ("conductance_W_per_K", "seebeck_V_per_K"):
            assert getattr(result.thermal, key) is None and why[f"thermal.{key}"]
        assert result.residual == result.drift_sigma > 0.0 and " " in result.drift
        assert result.iterations == run_of(name).totals.rounds


def test_slope_from_a_run_of_its_own(run_of):
    """The run that follows a small change of the bias brings its own batches."""
    run = run_of("kept")
    sums = {"current": 0.5 * run.totals.sums["current"] / BIAS}
    tangent = SimpleNamespace(histories=run.totals.histories, sums=sums)
    totals = replace(run.totals)
    totals.tangent = tangent
    result = assemble(run.problem, totals, run.result.scenario)
    expected = 0.5 / run.result.resistance_ohm.value
    assert result.conductance_S.value == pytest.approx(expected, rel=1e-12)
    relative = run.result.current_A.error / run.result.current_A.value
    assert result.conductance_S.error == pytest.approx(expected * relative, rel=1e-6)
    assert result.differential_resistance_ohm.value == pytest.approx(1 / expected, rel=1e-12)
    assert result.conductance_S.systematic > 0.0 and "conductance_S" not in result.why


def test_too_few_windows(run_of):
    """A run that was stopped early knows neither drift nor bias."""
    run = run_of("kept")
    totals = replace(run.totals, windows=run.totals.windows[-2:], residual=None, drift="")
    result = assemble(run.problem, totals, run.result.scenario)
    assert result.residual is None and result.drift is None and result.why["residual"]
    assert result.current_A.systematic is None and result.heat_W.lattice.systematic is None


# --- the means to it ------------------------------------------------------------------------------


def test_bias_of_noise():
    """q + b v is found in windows of different noise level v."""
    generator = np.random.default_rng(3)
    problem = SimpleNamespace(
        window=SimpleNamespace(linear=False),
        relaxed=SimpleNamespace(setting=SimpleNamespace(exact_energy=False)),
    )

    def window(size, level, value):
        histories = np.full(64, size)
        each = value + 1e-3 * generator.normal(size=(64, 2)) / np.sqrt(size)
        return SimpleNamespace(
            histories=histories, sums={"q": each * size}, noise=level * histories.sum()
        )

    q, b = np.array([2.0, -3.0]), np.array([40.0, -70.0])
    levels = (8e-3, 4e-3, 2e-3, 1e-3)
    windows = [window(100 * 2**i, v, q + b * v) for i, v in enumerate(levels)]

    def function(sums):
        return {"q": sums["q"] / sums["histories"]}

    def found(windows):
        totals = SimpleNamespace(windows=windows)
        return noise_bias(problem, totals, function, {"q": q})

    level = (400 * 2e-3 + 800 * 1e-3) / 1200  # of the last two windows
    np.testing.assert_allclose(found(windows)["q"], np.abs(b) * level, rtol=5e-3)
    assert found(windows[:2]) == {}
    problem.window.linear = True
    assert (found(windows[:3])["q"] == 0.0).all()


def test_noise_is_taken_off_the_departure():
    """Cells in equilibrium whose occupations are noisy: what is left is covered by its error."""
    generator = np.random.default_rng(8)
    edges = np.linspace(-60.0, 60.0, 121)
    mu, kelvin = np.full(500, 4.0), np.full(500, 50.0)
    local = mean_occupation(edges, mu, kelvin)
    variance = np.full(local.shape, 1e-4)
    observer = SimpleNamespace(
        window=SimpleNamespace(linear=False),
        edges_meV=edges,
        relaxed=SimpleNamespace(reference=local[:, 0]),
    )
    noise = np.sqrt(variance) * generator.normal(size=local.shape)
    value, error = _departure(observer, noise, variance, mu, kelvin)
    floor = (variance * np.diff(edges)[:, None]).sum(axis=0) / (reference.BOLTZMANN * kelvin)
    assert np.mean(value**2) < 0.15 * np.mean(floor)
    assert np.mean(value > 2 * error) < 0.1


def test_parts_of_bins():
    """Straight lines stay straight, means stay, and no value leaves the range of neighbours."""
    x = np.arange(12.0)[:, None] * np.array([1.0, -2.0])
    fine = in_parts(x, 4)
    inner = slice(4, -4)
    np.testing.assert_allclose(np.diff(fine, axis=0)[inner], [[0.25, -0.5]] * (fine.shape[0] - 9))
    step = np.where(np.arange(12) < 5, 1.0, 0.0)[:, None]
    assert (in_parts(step, 3) == np.repeat(step, 3, axis=0)).all()
    rough = np.random.default_rng(1).normal(size=(2, 30, 3))
    fine = in_parts(rough, 5)
    np.testing.assert_allclose(fine.reshape(2, 30, 5, 3).mean(axis=2), rough, atol=1e-14)
    assert fine.max() <= rough.max() and fine.min() >= rough.min()
    assert (in_parts(rough, 1) == rough).all()


def test_mean_of_a_fermi_function_over_bins():
    edges = np.linspace(-40.0, 60.0, 41)
    mu, kelvin = np.array([3.0, 11.0, 12.0, 13.5]), np.array([20.0, 300.0, 0.0, 1e-4])
    fine = np.linspace(0.0, 1.0, 4001)
    inner = edges[:-1, None] + np.diff(edges)[:, None] * 0.5 * (fine[1:] + fine[:-1])
    means = occupation(inner[..., None], mu, kelvin).mean(axis=1)
    np.testing.assert_allclose(mean_occupation(edges, mu, kelvin), means, atol=2e-4)
    exact = mean_occupation(edges, mu, kelvin)
    smooth = means[:, :2]
    np.testing.assert_allclose(exact[:, :2], smooth, atol=1e-7)
