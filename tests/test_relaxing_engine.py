"""The relaxing kernel and its rounds against an independent deterministic solution.

Tolerance: 4 standard errors; each standard error is small enough that 2 % of wrong physics fails.
"""

from dataclasses import replace

import numpy as np
import pytest

from carriersim.engine.iterate import relax
from carriersim.engine.mechanisms import temperatures
from carriersim.engine.problem import build
from carriersim.engine.solve import Goal
from carriersim.scenario import read_text
from tests import reference_kinetic as reference

TWO_BARRIERS = """
    points:
      - {position_nm: 100, transmission: {energy_meV: [0, 30], value: [0.2, 0.8]}}
      - {position_nm: 250, transmission: {energy_meV: [0, 30], value: [0.9, 0.3]}}
"""


def run(text, histories, workers=2):
    problem = build(read_text(text))
    return problem, relax(problem, Goal(None, histories, None), workers)


def channel(mechanisms, length=400, path=200, points="", bias=30, kelvin=20, probes="[]"):
    return f"""
channel: {{length_nm: {length}}}
contacts: {{bias_mV: {bias}, temperature_K: {kelvin}}}
scattering:
    backscatter_path_nm: {path}
{points}
relaxation: {{mechanisms: [{mechanisms}]}}
probes: {probes}
simulation: {{cells: 60}}
"""


def estimate(each):
    """Mean over batches and its standard error, along the first axis."""
    return each.mean(axis=0), each.std(axis=0, ddof=1) / np.sqrt(each.shape[0])


def agree(each, expected, largest):
    """largest: of the standard error, absolute."""
    value, error = estimate(each)
    assert error <= largest, f"standard error {error}"
    assert abs(value - expected) <= 4 * error + 1e-6, f"{value} +- {error}, expected {expected}"


def transmission(problem, totals):
    return totals.sums["current"] / totals.histories / problem.window.mu_left_meV


def lattice_share(problem, totals):
    return totals.sums["heat"].sum(axis=1) / totals.sums["current"] / problem.window.mu_left_meV


def hold(text, case, histories, largest=(0.0035, 0.005)):
    """Current and lattice share of a run against the deterministic solution."""
    problem, totals = run(text, histories)
    expected = reference.solve(case)
    assert totals.converged, totals.drift
    agree(transmission(problem, totals), expected.transmission, largest[0] * expected.transmission)
    agree(lattice_share(problem, totals), expected.lattice_share, largest[1])
    return problem, totals, expected


BARRIERS = (
    reference.Scatterer(100.0, ((0.0, 30.0), (0.2, 0.8))),
    reference.Scatterer(250.0, ((0.0, 30.0), (0.9, 0.3))),
)


@pytest.mark.parametrize("direction", ["kept", pytest.param("randomised", marks=pytest.mark.slow)])
def test_bath_between_two_energy_filters(direction):
    """Relaxation between barriers that pass different energies changes the current."""
    text = channel(f"{{kind: bath, path_nm: 100, direction: {direction}}}", points=TWO_BARRIERS)
    case = reference.Case(
        length=400.0,
        bias=30.0,
        temperature_left=20.0,
        backscatter_path=200.0,
        scatterers=BARRIERS,
        mechanisms=(reference.Bath(100.0, randomised=direction == "randomised"),),
    )
    hold(text, case, 2_000_000)


PHONONS = [
    # length, bias, K, T_tot and lattice share of the independent deterministic solution
    pytest.param(500, 400, 300),
    pytest.param(200, 800, 4),
    pytest.param(500, 100, 300, marks=pytest.mark.slow),
    pytest.param(500, 800, 300, marks=pytest.mark.slow),
    pytest.param(200, 100, 300, marks=pytest.mark.slow),
    pytest.param(200, 400, 300, marks=pytest.mark.slow),
    pytest.param(200, 800, 300, marks=pytest.mark.slow),
    pytest.param(500, 100, 4, marks=pytest.mark.slow),
    pytest.param(500, 400, 4, marks=pytest.mark.slow),
    pytest.param(500, 800, 4, marks=pytest.mark.slow),
    pytest.param(200, 400, 4, marks=pytest.mark.slow),
]


@pytest.mark.parametrize(("length", "bias", "kelvin"), PHONONS)
def test_optical_phonons(length, bias, kelvin):
    """Current, its slope, and lattice share of a channel with optical phonons of 160 meV."""
    text = channel(
        "{kind: optical_phonon, path_nm: 15, energy_meV: 160}",
        length=length,
        path=300,
        bias=bias,
        kelvin=kelvin,
    ).replace("cells: 60", "cells: 100")
    case = reference.Case(
        length=float(length),
        bias=float(bias),
        temperature_left=float(kelvin),
        backscatter_path=300.0,
        mechanisms=(reference.Phonon(15.0, 160.0),),
    )
    _, totals, _ = hold(text, case, 400_000, (0.00125, 0.00125))
    if kelvin == 300:
        steps = [reference.solve(replace(case, bias=bias + d)).current for d in (2.0, -2.0)]
        slope = totals.tangent.sums["current"] / totals.tangent.histories
        agree(slope, (steps[0] - steps[1]) / 4.0, 0.006)


@pytest.mark.parametrize("path", [100, pytest.param(40, marks=pytest.mark.slow)])
def test_carriers_between_two_energy_filters(path):
    """Carriers that share their energy between barriers that pass different energies."""
    text = channel(f"{{kind: carriers, path_nm: {path}}}", points=TWO_BARRIERS)
    case = reference.Case(
        length=400.0,
        bias=30.0,
        temperature_left=20.0,
        backscatter_path=200.0,
        scatterers=BARRIERS,
        mechanisms=(reference.Carriers(float(path)),),
        energy_step=1.5,
    )
    hold(text, case, 500_000, (0.001, 0.005))


def test_phonons_bath_and_a_probe_together():
    """All at once, at three temperatures."""
    text = """
channel: {length_nm: 300}
contacts: {bias_mV: 300, left: {temperature_K: 300}, right: {temperature_K: 200}}
scattering:
    backscatter_path_nm: 250
    points:
      - {position_nm: 80, transmission: {energy_meV: [0, 300], value: [0.5, 0.9]}}
relaxation:
    bath_temperature_K: 250
    mechanisms:
      - {kind: optical_phonon, path_nm: 60, energy_meV: 120}
      - {kind: bath, path_nm: 400, direction: kept}
      - {kind: carriers, path_nm: 500}
probes: [{position_nm: 180, coupling: 0.4}]
simulation: {cells: 100}
"""
    case = reference.Case(
        length=300.0,
        bias=300.0,
        temperature_left=300.0,
        temperature_right=200.0,
        lattice_temperature=250.0,
        backscatter_path=250.0,
        scatterers=(reference.Scatterer(80.0, ((0.0, 300.0), (0.5, 0.9))),),
        mechanisms=(
            reference.Phonon(60.0, 120.0),
            reference.Bath(400.0),
            reference.Carriers(500.0),
        ),
        probes=(reference.Probe(180.0, 0.4),),
    )
    _, totals, expected = hold(text, case, 500_000, (0.001, 0.002))
    probe = totals.sums["probe_heat"].sum(axis=1) / totals.sums["current"] / 300.0
    share = np.sum(expected.probe_heat) / expected.current / 300.0
    agree(probe, share, 0.002)


def test_carriers_heat_up_in_the_middle():
    """Hot carriers, L/lam = 6, path L/3: T_e in the middle, and no heat for the lattice."""
    text = channel("{kind: carriers, path_nm: 200}", length=600, path=100)
    problem, totals = run(text, 1_500_000)
    agree(transmission(problem, totals), 1 / 7, 0.0035 / 7)
    assert totals.sums["heat"].sum() == 0.0
    cells = totals.sums["cells"] / totals.histories[:, None, None, None]
    middle = np.searchsorted(problem.cell_edges_nm, 300.0) - 1
    for side in (0, 1):
        each = cells[:, middle - 1 : middle + 3, side].mean(axis=1)
        kelvin = temperatures(each[:, 0].mean(), each[:, 2].mean(), 20.0)
        one_out = [
            temperatures(*(np.delete(each[:, i], b).mean() for i in (0, 2)), 20.0)
            for b in range(len(each))
        ]
        error = np.sqrt((len(each) - 1) * np.var(one_out))
        assert error < 0.0035 * kelvin
        assert abs(kelvin - 97.06705) < 4 * error + 0.05  # mean of four cells beside the middle


def test_coupled_probe():
    """A probe of coupling eps: T = 1 - eps/2 in a clean channel (Buttiker 1986), and its heat."""
    text = """
channel: {length_nm: 100}
contacts: {bias_mV: 30, temperature_K: 20}
probes: [{position_nm: 40, coupling: 0.6}]
simulation: {cells: 20}
"""
    problem, totals = run(text, 1_000_000)
    agree(transmission(problem, totals), 0.7, 0.002)
    share = totals.sums["probe_heat"].sum(axis=1) / totals.sums["current"] / 30.0
    case = reference.Case(
        length=100.0,
        bias=30.0,
        temperature_left=20.0,
        probes=(reference.Probe(40.0, 0.6),),
    )
    agree(share, np.sum(reference.solve(case).probe_heat) / (0.7 * 30.0**2), 0.003)


def test_energy_is_conserved_and_workers_do_not_matter():
    """Contacts, lattice and probes share I V to rounding; one and three workers give equal bits."""
    text = channel(
        "{kind: bath, path_nm: 150, direction: kept}, {kind: bath, path_nm: 300, "
        "direction: randomised}",
        probes="[{position_nm: 120, coupling: 0.3}]",
    )
    runs = [run(text, 60_000, workers)[1] for workers in (1, 3)]
    for totals in runs:
        left, right = totals.sums["energy"].T
        rest = left - right - totals.sums["heat"].sum(axis=1)
        rest = rest - totals.sums["probe_heat"].sum(axis=1)
        assert np.abs(rest).max() < 1e-9 * np.abs(left).max()
    for key in runs[0].sums:
        assert np.array_equal(runs[0].sums[key], runs[1].sums[key]), key
    assert np.array_equal(runs[0].field_sum, runs[1].field_sum)


def test_kept_bath_leaves_the_resistance_of_an_energy_independent_channel():
    """Direction-keeping relaxation adds no resistance: the series law holds unchanged."""
    points = "    points: [{position_nm: 150, transmission: 0.4}]"
    for path in (20, 2000):
        problem, totals = run(
            channel(f"{{kind: bath, path_nm: {path}, direction: kept}}", points=points), 1_200_000
        )
        expected = 1 / (1 + 400 / 200 + 0.6 / 0.4)
        agree(transmission(problem, totals), expected, 0.0035 * expected)
