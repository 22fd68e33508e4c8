"""Optical phonons: L = 500, lam = 300, l_op = 15 nm, w = 160 meV, everything at 300 K.

Source of the numbers: an independent deterministic solution of the kinetic equation with Pauli
blocking (the channel is a metallic nanotube as in Z. Yao, C. L. Kane and C. Dekker, Phys. Rev.
Lett. 84 (2000) 2941), printed to four digits; tests/reference_kinetic.py solves it once more. The
control is common practice: plain substitution of the occupation last counted
(tests/plain_substitution.py), which wanders where the package must not.
"""

import numpy as np
import pytest

from carriersim.result import Estimate
from tests import reference_kinetic as reference
from tests.checks_of_numbers import QUANTUM_S, agree, simulate
from tests.plain_substitution import CELLS, Channel, one_round, substitute

LENGTH, LAM, PATH, PHONON = 500.0, 300.0, 15.0, 160.0
CURRENT_WITHIN = 0.005  # relative
SHARE_WITHIN = 0.005  # absolute
HALF_A_DIGIT = 0.5e-4
# bias: T_tot, the lattice's share of I V
TABLE = {100.0: (0.3269, 0.4206), 400.0: (0.2338, 0.7156), 800.0: (0.1632, 0.81245)}


def share_of(result):
    """Lattice's share of I V; the errors of both add up, which is no less than the truth."""
    power = result.current_A.value * result.scenario.contacts.bias_mV * 1e-3
    heat, current = result.heat_W.lattice, result.current_A
    share = heat.value / power
    parts = [
        abs(share) * (getattr(heat, name) / abs(heat.value) + getattr(current, name) / abs(i))
        for name in ("error", "systematic")
        for i in (current.value,)
    ]
    return Estimate(share, *parts)


def passes(transmission, share, bias):
    """What a run must do: I to half a per cent, the share to 0.005."""
    expected = TABLE[bias]
    return (
        abs(transmission / expected[0] - 1) <= CURRENT_WITHIN
        and abs(share - expected[1]) <= SHARE_WITHIN
    )


SLOW = pytest.mark.slow


@pytest.mark.parametrize(
    "bias", [400.0, pytest.param(100.0, marks=SLOW), pytest.param(800.0, marks=SLOW)]
)
def test_current_and_share_of_the_lattice(bias):
    result = simulate(
        f"""
channel: {{length_nm: {LENGTH}}}
contacts: {{bias_mV: {bias}, temperature_K: 300}}
scattering: {{backscatter_path_nm: {LAM}}}
relaxation: {{mechanisms: [{{kind: optical_phonon, path_nm: {PATH}, energy_meV: {PHONON}}}]}}
simulation: {{histories: 400000, cells: 50}}
"""
    )
    assert result.converged, result.drift
    transmission, share = result.transmission, share_of(result)
    assert passes(transmission.value, share.value, bias)
    expected = TABLE[bias]
    agree(transmission, expected[0], CURRENT_WITHIN / 4, transmission.systematic + HALF_A_DIGIT)
    agree(share, expected[1], SHARE_WITHIN / 4 / expected[1], share.systematic + HALF_A_DIGIT)
    current = 2 * QUANTUM_S * expected[0] * bias * 1e-3
    rounded = current * HALF_A_DIGIT / expected[0]
    agree(result.current_A, current, CURRENT_WITHIN / 4, result.current_A.systematic + rounded)


@pytest.fixture(scope="module")
def solution():
    case = reference.Case(
        length=LENGTH,
        bias=400.0,
        backscatter_path=LAM,
        mechanisms=(reference.Phonon(PATH, PHONON),),
        energy_step=2.0,  # the control's occupations are read off here
    )
    return reference.solve(case)


def test_the_table_solved_once_more(solution):
    assert abs(solution.transmission - TABLE[400.0][0]) <= HALF_A_DIGIT
    assert abs(solution.lattice_share - TABLE[400.0][1]) <= HALF_A_DIGIT


# --- the control --------------------------------------------------------------------------------

CHANNEL = Channel(LENGTH, LAM, PATH, 400.0)


@pytest.mark.parametrize(
    ("particles", "seed"), [(20_000, 1), (20_000, 2), pytest.param(100_000, 3, marks=SLOW)]
)
def test_plain_substitution_fails_where_the_package_passes(particles, seed):
    rounds = substitute(CHANNEL, particles, 11, seed)[7:]
    failed = [not passes(r.transmission, r.lattice_share, 400.0) for r in rounds]
    assert all(failed)
    # By far more than the noise of a round.
    worst = max(abs(r.lattice_share - TABLE[400.0][1]) for r in rounds)
    assert worst > 2 * SHARE_WITHIN


def test_control_is_right_where_the_frozen_occupation_is(solution):
    """At the deterministic solution's occupation the same code gives the table: no slip in it."""
    edges = CHANNEL.edges()
    energy = 0.5 * (edges[1:] + edges[:-1])
    x = (np.arange(CELLS) + 0.5) * LENGTH / CELLS
    both = [solution.at(name, x) for name in ("f_plus", "f_minus")]
    exact = np.array([[np.interp(energy, solution.energy, f) for f in one] for one in both])
    deviation = exact.swapaxes(1, 2) - CHANNEL.reference(energy)[:, None]
    rounds = [one_round(CHANNEL, 25_000, seed, deviation) for seed in range(40)]
    expected = TABLE[400.0]
    for name, one in zip(("transmission", "lattice_share"), expected, strict=True):
        each = np.array([getattr(r, name) for r in rounds])
        error = each.std(ddof=1) / np.sqrt(each.size)
        assert error < 0.005 * one
        assert abs(each.mean() - one) < 4 * error + HALF_A_DIGIT


def test_control_without_phonons():
    """Elastic: T = 1/(1 + L/lam) in every round, substitution or not."""
    rounds = substitute(Channel(LENGTH, LAM, np.inf, 400.0), 100_000, 5, 1)
    mean, chance = np.mean([r.transmission for r in rounds]), 1 / (1 + LENGTH / LAM)
    error = np.sqrt(chance * (1 - chance) / 500_000)
    assert error < 0.005 * chance
    assert abs(mean - chance) < 4 * error
    assert all(r.lattice_share == 0.0 for r in rounds)


def test_control_at_a_tiny_bias():
    """Linear: the tally hardly enters, and substitution does no harm."""
    bias = 0.05
    case = reference.Case(
        length=LENGTH,
        bias=bias,
        backscatter_path=LAM,
        mechanisms=(reference.Phonon(PATH, PHONON),),
    )
    expected = reference.solve(case).transmission
    rounds = substitute(Channel(LENGTH, LAM, PATH, bias), 50_000, 6, 1)[1:]
    each = np.array([r.transmission for r in rounds])
    error = np.sqrt(expected * (1 - expected) / 250_000)
    assert error < 0.005 * expected
    assert abs(each.mean() - expected) < 4 * error + 1e-3 * expected
