"""One scatterer of transmission 0.2 in a ballistic channel.

Source: R. Landauer, IBM J. Res. Dev. 1 (1957) 223 and Phil. Mag. 21 (1970) 863; Y. Imry in
Directions in Condensed Matter Physics (1986), who puts the rest of the resistance, h/2e^2, at the
interfaces with the contacts. The numbers are common practice, worked out here by hand.
"""

from types import SimpleNamespace

import numpy as np
import pytest

from tests.checks_of_numbers import (
    QUANTUM_S,
    agree,
    agree_each,
    exactly,
    fermi,
    part,
    profile,
    simulate,
)

T = 0.2
G_B = 2 * QUANTUM_S
R_B = 1 / G_B
LEFT_OF_IT, RIGHT_OF_IT = 30.0, 80.0


@pytest.fixture(scope="module", params=[20.0, 0.0, -350.0])
def run(request):
    """The run at one bias, and the unit of its potentials."""
    result = simulate(
        f"""
channel: {{length_nm: 120}}
contacts: {{bias_mV: {request.param}, temperature_K: 4.2}}
scattering: {{points: [{{position_nm: 70, transmission: {T}}}]}}
simulation: {{histories: 4e+6, cells: 24}}
"""
    )
    return SimpleNamespace(result=result, bias=request.param, unit=request.param or 1.0)


def test_a_fifth_of_the_ballistic_conductance(run):
    agree(run.result.transmission, T)
    agree(run.result.conductance_S, T * G_B)
    agree(run.result.resistance_ohm, 5 * R_B)
    agree(run.result.differential_resistance_ohm, 5 * R_B)
    if run.bias:
        agree(run.result.current_A, T * G_B * run.bias * 1e-3)
    else:
        assert run.result.linear_response and run.result.current_A is None


def test_four_parts_at_the_scatterer_and_one_at_the_interfaces(run):
    agree(part(run.result, "point", 70.0), 4 * R_B)
    agree(part(run.result, "interface", 0.0), R_B / 2)
    agree(part(run.result, "interface", 120.0), R_B / 2)
    for place in (LEFT_OF_IT, RIGHT_OF_IT):
        assert abs(part(run.result, "piece", place).value) < 1e-9 * R_B
    total = sum(p.resistance_ohm.value for p in run.result.breakdown)
    exactly(total, run.result.resistance_ohm.value)


def test_each_quasi_fermi_level_drops_by_four_fifths_of_the_bias(run):
    for name, before, after in (
        ("mu_plus_meV", 1.0, 0.2),
        ("mu_minus_meV", 0.8, 0.0),
        ("mu_meV", 0.9, 0.1),
    ):
        upstream = profile(run.result, name, LEFT_OF_IT)
        downstream = profile(run.result, name, RIGHT_OF_IT)
        agree(upstream, before * run.unit)
        if after:
            agree(downstream, after * run.unit)
        else:
            assert downstream.value == 0.0
        drop = upstream.value - downstream.value
        # Both sides come from the same carriers: the sum of the errors covers any correlation.
        error = upstream.error + downstream.error
        assert error <= 0.0035 * abs(drop)
        assert abs(drop - 0.8 * run.unit) <= 4 * error


def test_levels_are_flat_on_either_side(run):
    """Nothing scatters there; so every cell must hold the same number."""
    for name in ("mu_plus_meV", "mu_minus_meV"):
        levels = getattr(run.result, name)
        left = run.result.x_nm < 70.0
        for side in (levels[left], levels[~left]):
            assert np.ptp(side) <= 1e-12 * abs(run.unit)


def test_right_movers_beyond_it_keep_the_shape_of_the_left_contact(run):
    """f+ = F_R + T (F_L - F_R): two steps, where an equilibrium would have one."""
    result, energy = run.result, run.result.energy_meV
    cell = np.searchsorted(result.cell_edges_nm, RIGHT_OF_IT) - 1
    right = np.array([fermi(e, 0.0, 4.2) for e in energy])
    kT = 8.617333262e-5 * 1e3 * 4.2  # meV; k in eV/K as CODATA prints it
    if run.bias:
        expected = right + T * (np.array([fermi(e, run.bias, 4.2) for e in energy]) - right)
    else:
        expected = T * right * (1 - right) / kT  # df/d(eV)
    seen = (expected > 1e-3) & (expected < 0.999)
    assert seen.sum() > 50
    agree_each(result.f_plus[seen, cell], result.errors["f_plus"][seen, cell], expected[seen])


def test_half_of_the_power_lands_in_each_contact(run):
    """With a transmission that is the same at all energies."""
    if not run.bias:
        assert run.result.heat_W is None
        return
    power = T * G_B * (run.bias * 1e-3) ** 2
    agree(run.result.heat_W.left_contact, power / 2)
    agree(run.result.heat_W.right_contact, power / 2)
    exactly(run.result.heat_W.lattice.value, 0.0)
