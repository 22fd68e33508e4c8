"""How the tests compare a simulated number with the one it should be.

Every checked value must be known to a third of a per cent, and may then lie four of its own
standard errors from the expectation, no more: chance gives that to about one check in 10 000.
"""

from itertools import pairwise
from pathlib import Path

import numpy as np
from scipy import constants, integrate

import carriersim as cs
from carriersim.result import Estimate
from carriersim.scenario import read_text

LARGEST_RELATIVE_ERROR = 0.0035
STANDARD_ERRORS = 4.0
# Relative. Numbers without noise come with the error 0; the engine's energies end 20 kT beyond the
# contacts, which leaves out some 1e-8.
ROUNDING = 1e-7

BOLTZMANN_MEV_PER_K = constants.k / constants.e * 1e3
QUANTUM_S = constants.e**2 / constants.h  # one mode, one spin


class TooNoisy(AssertionError):
    """A number is not known well enough to be checked."""


class Disagreement(AssertionError):
    """A number is not what it should be."""


def simulate(text):
    """Result of a scenario given as YAML."""
    return cs.simulate(read_text(text, Path("published.yaml")), workers=2)


def agree(estimate, expected, largest_relative_error=LARGEST_RELATIVE_ERROR, systematic=0.0):
    """Check an estimate (value, error) against the exact value.

    systematic: known difference of the two, in the units of the value, that comes on top of the
    noise.
    """
    _known(estimate, largest_relative_error)
    systematic += ROUNDING * abs(expected)
    _within(estimate.value - expected, estimate.error, systematic, expected)


def agree_each(values, errors, expected, **settings):
    """The same for arrays of one shape; a number as `expected` serves all."""
    values = np.asarray(values)
    for value, error, one in zip(
        values.ravel(),
        np.ravel(errors),
        np.broadcast_to(expected, values.shape).ravel(),
        strict=True,
    ):
        agree(Estimate(value, error), one, **settings)


def agree_together(one, other):
    """Check that two independent estimates are of the same number."""
    for estimate in (one, other):
        _known(estimate, LARGEST_RELATIVE_ERROR)
    noise = np.hypot(one.error, other.error)
    _within(one.value - other.value, noise, ROUNDING * abs(other.value), other.value)


def exactly(value, expected):
    """Check a number that has no noise."""
    if not abs(value - expected) <= ROUNDING * abs(expected):
        raise Disagreement(f"{value:.12g}, not {expected:.12g}")


def _within(difference, error, systematic, expected):
    if not abs(difference) <= STANDARD_ERRORS * error + systematic:
        raise Disagreement(
            f"{difference:+.3g} off {expected:.8g}, with a standard error of {error:.2g}"
            f" and a known difference of {systematic:.2g}"
        )


def _known(estimate, largest_relative_error):
    value, error = estimate.value, estimate.error
    if not error <= largest_relative_error * abs(value):
        raise TooNoisy(f"{value:.8g} has the error {error:.2g}: {error / abs(value):.2%} of it")


def profile(result, name, place_nm):
    """Estimate of a profile, such as mu_plus_meV, in the cell that holds a place."""
    cell = np.searchsorted(result.cell_edges_nm, place_nm, side="right") - 1
    return Estimate(getattr(result, name)[cell], result.errors[name][cell])


def centre(result, place_nm):
    """Middle of the cell that holds a place, in nm: a cell gives the mean over itself."""
    cell = np.searchsorted(result.cell_edges_nm, place_nm, side="right") - 1
    return result.x_nm[cell]


def part(result, kind, place_nm=None, mechanism=None):
    """Resistance of the part of the breakdown of one kind that is at, or covers, a place."""
    found = [
        p.resistance_ohm
        for p in result.breakdown
        if p.kind == kind
        and (mechanism is None or p.mechanism == mechanism)
        and (p.position_nm == place_nm if kind != "piece" else p.from_nm < place_nm < p.to_nm)
    ]
    assert len(found) == 1, f"{len(found)} parts of kind {kind} at {place_nm} nm"
    return found[0]


def fermi(energy_meV, mu_meV, kelvin):
    """F(E; mu, T) at one energy."""
    if kelvin == 0.0:
        return 0.5 * (1.0 - np.sign(energy_meV - mu_meV))
    return 0.5 * (1.0 - np.tanh(0.5 * (energy_meV - mu_meV) / (BOLTZMANN_MEV_PER_K * kelvin)))


def minus_slope(energy_meV, mu_meV, kelvin):
    """-dF/dE at one energy, in 1/meV."""
    kT = BOLTZMANN_MEV_PER_K * kelvin
    return 0.25 / kT / np.cosh(0.5 * (energy_meV - mu_meV) / kT) ** 2


def integral(integrand, *breaks):
    """Integral over all energies by scipy's quad, cut at the breaks.

    breaks: energies in meV, or pairs (mu in meV, T in K) of a Fermi function that the integrand
    holds; the outermost must be where it vanishes.
    """
    cuts = set()
    for place in breaks:
        if isinstance(place, tuple):
            mu, kelvin = place
            kT = BOLTZMANN_MEV_PER_K * kelvin
            cuts.update(mu + kT * n for n in (-45, -20, -10, -4, 0, 4, 10, 20, 45))
        else:
            cuts.add(place)
    cuts = sorted(cuts)
    return sum(
        integrate.quad(integrand, a, b, epsabs=1e-10, epsrel=1e-9)[0] for a, b in pairwise(cuts)
    )
