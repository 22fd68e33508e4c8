"""The current of a channel with optical phonons saturates at g M (e/h) w.

Source: Z. Yao, C. L. Kane and C. Dekker, Phys. Rev. Lett. 84 (2000) 2941: carriers that have gained
the energy of an optical phonon emit it at once, so that 25 uA is all that four channels carry at
160 meV. Limit: no elastic scattering, eV > w, l_op -> 0, kT -> 0. At finite L/l_op it is approached
from above (deterministic solution: 1.5e-4 at L/l_op = 50, eV/w = 2.5).
"""

import numpy as np
import pytest

from tests import reference_kinetic as reference
from tests.checks_of_numbers import QUANTUM_S, agree, simulate

PHONON, PATH, KELVIN = 160.0, 2.0, 40.0
SLOW = pytest.mark.slow


def channel(paths, bias, lam=None, modes=1, histories=64):
    elastic = "" if lam is None else f"backscatter_path_nm: {lam}"
    return simulate(
        f"""
channel: {{length_nm: {paths * PATH}, modes: {modes}}}
contacts: {{bias_mV: {bias}, temperature_K: {KELVIN}}}
scattering: {{{elastic}}}
relaxation: {{mechanisms: [{{kind: optical_phonon, path_nm: {PATH}, energy_meV: {PHONON}}}]}}
simulation: {{histories: {histories}, cells: 50}}
"""
    )


def saturated_A(modes=1):
    return modes * 2 * QUANTUM_S * PHONON * 1e-3


def test_twenty_five_microampere():
    assert saturated_A(modes=2) == pytest.approx(25e-6, rel=0.01)


@pytest.mark.parametrize(
    ("paths", "bias", "modes"),
    [
        (25, 400.0, 2),
        pytest.param(25, -400.0, 1, marks=SLOW),
        pytest.param(50, 400.0, 2, marks=SLOW),
    ],
)
def test_within_two_per_cent(paths, bias, modes):
    """The excess falls fast with the number of paths, as the deterministic solution tells."""
    result = channel(paths, bias, modes=modes)
    assert result.converged, result.drift
    current = np.sign(bias) * saturated_A(modes)
    assert abs(result.current_A.value / current - 1) < 0.02
    case = reference.Case(
        paths * PATH, abs(bias), KELVIN, mechanisms=(reference.Phonon(PATH, PHONON),)
    )
    expected = reference.solve(case).current / PHONON * current
    agree(result.current_A, expected, 0.0035, result.current_A.systematic)


@pytest.mark.parametrize("paths", [15, pytest.param(10, marks=SLOW)])
def test_approached_from_above(paths):
    result = channel(paths, 400.0)
    assert result.converged, result.drift
    case = reference.Case(paths * PATH, 400.0, KELVIN, mechanisms=(reference.Phonon(PATH, PHONON),))
    excess = reference.solve(case).current / PHONON - 1
    assert excess > 0.04
    agree(result.current_A, (1 + excess) * saturated_A(), 0.0035, result.current_A.systematic)
    assert result.current_A.value > 1.02 * saturated_A()


@pytest.mark.parametrize(("lam", "bias"), [(50.0, 400.0), pytest.param(25.0, 800.0, marks=SLOW)])
def test_elastic_scattering_keeps_it_below(lam, bias):
    result = channel(50, bias, lam)
    assert result.converged, result.drift
    assert result.current_A.value < 0.95 * saturated_A()
    case = reference.Case(
        50 * PATH,
        bias,
        KELVIN,
        backscatter_path=lam,
        mechanisms=(reference.Phonon(PATH, PHONON),),
    )
    expected = reference.solve(case).current * saturated_A() / PHONON
    agree(result.current_A, expected, 0.0035, result.current_A.systematic)
