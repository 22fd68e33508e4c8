"""Relaxation: the arrays that describe it to the kernel, and the energy axis it needs."""

from typing import NamedTuple

import numpy as np

from carriersim import fermi
from carriersim.constants import BOLTZMANN_MEV_PER_K

KEPT_BATH, RANDOM_BATH, KEPT_CARRIERS, RANDOM_CARRIERS = range(4)
_INDEX = {
    ("bath", "kept"): KEPT_BATH,
    ("bath", "randomised"): RANDOM_BATH,
    ("carriers", "kept"): KEPT_CARRIERS,
    ("carriers", "randomised"): RANDOM_CARRIERS,
}
SAFETY = 0.01  # of 1/path, added to a phonon's bound for rounding and interpolation
FINE = 16  # entries of the frozen reference per bin

REACH_KT = 14.0  # the axis ends so far beyond the contacts: exp(-14) = 8e-7
HOTTEST_CARRIERS = np.sqrt(0.75) / np.pi  # k T_e of a long wire over eV (Nagaev 1995)
FINEST_KT = 3.0  # bins per kT
MOST_BINS = 400
FEWEST_BINS = 100


class Mechanisms(NamedTuple):
    """Relaxation along the whole channel; P optical phonons."""

    rates: np.ndarray  # (4,) per nm, by kind and direction, see above
    phonon_meV: np.ndarray  # (P,)
    phonon_rate: np.ndarray  # (P,) per nm
    phonon_number: np.ndarray  # (P,) of the lattice, Bose-Einstein
    # (P+1, B+2) per nm: no event of a phonon is more frequent, for energies below the axis, in
    # each of its bins, and above it; the last row is their sum.
    phonon_bound: np.ndarray
    bath_meV: float  # k T_b


class Axis(NamedTuple):
    """Even energy bins; bin b is [first + b step, first + (b+1) step]."""

    first_meV: float
    step_meV: float
    bins: int


class Probes(NamedTuple):
    """Coupled voltage probes by node; a node without one absorbs nobody. Shapes (K,)."""

    from_left: np.ndarray  # chance to absorb a carrier that moves right
    from_right: np.ndarray
    emits_right: np.ndarray  # chance to emit it rightward


def mechanisms_of(scenario):
    """Mechanisms of a scenario; rates of equal kind add."""
    rates = np.zeros(4)
    phonons = []
    kT = BOLTZMANN_MEV_PER_K * scenario.bath_temperature_K
    for mechanism in scenario.relaxation.mechanisms:
        if mechanism.kind == "optical_phonon":
            energy = mechanism.energy_meV
            number = 1.0 / np.expm1(min(energy / kT, 700.0)) if kT > 0.0 else 0.0
            phonons.append((energy, 1.0 / mechanism.path_nm, number))
        else:
            direction = mechanism.direction or "kept"
            rates[_INDEX[mechanism.kind, direction]] += 1.0 / mechanism.path_nm
    energy, rate, number = np.array(phonons).reshape(-1, 3).T.copy()
    return Mechanisms(
        rates=rates,
        phonon_meV=energy,
        phonon_rate=rate,
        phonon_number=number,
        phonon_bound=np.zeros((1, 1)),
        bath_meV=kT,
    )


def with_bounds(mechanisms, axis, kelvin, deviation=None):
    """The same Mechanisms with phonon_bound, for occupations F_r + deviation (2, B, C, n).

    Rates sum to (2 N + 1 + f_upper - f_lower)/path, f the mean of both directions: at least the
    largest upper and the smallest lower occupation of the bins that a bin's energies reach.
    """
    edges = edges_of(axis)
    step = fermi.occupation(edges, 0.0, kelvin)
    if kelvin == 0.0:
        step = np.where(edges <= 0.0, 1.0, 0.0)
    deviation = np.zeros((2, axis.bins, 1)) if deviation is None else deviation
    mean = np.pad(deviation.mean(axis=0).reshape(axis.bins, -1), ((1, 1), (0, 0)))
    # Inside a bin the deviation is linear and stays in its neighbours' range.
    around = np.stack([mean[:-2], mean[1:-1], mean[2:]])
    least = np.pad(step[1:, None] + around.min(axis=0), ((1, 1), (0, 0)))
    most = np.pad(step[:-1, None] + around.max(axis=0), ((1, 1), (0, 0)))
    least[0], most[0] = 1.0, 1.0  # full below the axis
    bound = np.empty((mechanisms.phonon_meV.size + 1, axis.bins + 2))
    bins = np.arange(1, axis.bins + 1)
    for k, energy in enumerate(mechanisms.phonon_meV):
        shift = energy / axis.step_meV
        by = np.unique([np.floor(shift + 1e-9), np.ceil(shift - 1e-9)]).astype(int)
        up = most[np.minimum(bins[:, None] + by, axis.bins + 1)].max(axis=1)
        down = least[np.maximum(bins[:, None] - by, 0)].min(axis=1)
        swing = np.clip((up - down).max(axis=-1) + SAFETY, -1.0, 1.0)
        number, rate = mechanisms.phonon_number[k], mechanisms.phonon_rate[k]
        bound[k, 1:-1] = rate * (2.0 * number + 1.0 + swing)
        bound[k, [0, -1]] = rate * (2.0 * number + 2.0)
    bound[-1] = bound[:-1].sum(axis=0)
    return mechanisms._replace(phonon_bound=bound)


def probes_of(scenario, nodes_nm):
    """Coupled probes of a scenario at its nodes."""
    from_left, from_right = np.zeros(nodes_nm.size), np.zeros(nodes_nm.size)
    emits_right = np.full(nodes_nm.size, 0.5)
    for probe in scenario.probes:
        node = np.searchsorted(nodes_nm, probe.position_nm)
        from_left[node] = min(1.0, 2.0 * probe.weight_right * probe.coupling)
        from_right[node] = min(1.0, 2.0 * (1.0 - probe.weight_right) * probe.coupling)
        if probe.coupling > 0.0:  # as it absorbs, or equilibrium would not last
            emits_right[node] = from_left[node] / (from_left[node] + from_right[node])
    return Probes(from_left, from_right, emits_right)


def axis_of(scenario, window, phonons_meV):
    """Even bins over all energies that matter; their step divides the first phonon's energy."""
    mu = window.mu_left_meV
    kelvin = [window.temperature_left_K, window.temperature_right_K, scenario.bath_temperature_K]
    hottest = BOLTZMANN_MEV_PER_K * max(kelvin)
    reach = hottest
    if any(m.kind == "carriers" for m in scenario.relaxation.mechanisms):
        reach = np.hypot(hottest, HOTTEST_CARRIERS * abs(mu))
    low, high = min(mu, 0.0) - REACH_KT * reach, max(mu, 0.0) + REACH_KT * reach
    if phonons_meV.size:
        low, high = low - phonons_meV.max(), high + phonons_meV.max()
    elif mu:
        low, high = low - 0.3 * abs(mu), high + 0.3 * abs(mu)
    if low == high:
        low, high = -1.0, 1.0
    asked = scenario.simulation.energy_bins
    wanted = asked or min(
        MOST_BINS, max(FEWEST_BINS, (high - low) * FINEST_KT / max(hottest, 1e-9))
    )
    step = (high - low) / wanted
    if phonons_meV.size:
        step = _dividing(phonons_meV[0], mu, step)
    elif mu and abs(mu) > 4 * step:
        step = abs(mu) / round(abs(mu) / step)  # an edge at each contact's potential
    first = np.floor(low / step) * step
    return Axis(float(first), float(step), int(np.ceil((high - first) / step)))


def _dividing(phonon_meV, mu_meV, step):
    """A step that divides a phonon's energy and, as nearly as it can, the bias as well.

    At low temperatures occupations are steps at both contacts' potentials and whole phonons from
    there: they should lie between bins.
    """
    fewest = max(1, round(phonon_meV / step))
    numbers = np.arange(fewest, int(1.3 * fewest) + 3)
    places = abs(mu_meV) / phonon_meV * numbers
    misfit = np.abs(places - np.rint(places))
    return phonon_meV / numbers[np.argmin(np.maximum(misfit, 0.01))]


def edges_of(axis, parts=1):
    """Edges of an Axis' bins, each cut into parts; (B parts + 1,)."""
    return axis.first_meV + axis.step_meV / parts * np.arange(axis.bins * parts + 1)


def reference(axis, kelvin, parts=1):
    """F_r averaged over parts of bins, (B parts,): right contact's mu, lattice temperature."""
    return fermi.mean_occupation(edges_of(axis, parts), 0.0, kelvin)


def heat_strength(kelvin, bath_kelvin):
    """Pairs per mode and energy of F(mu, T) - F(mu, T_b): k |T - T_b| ln 2, in meV."""
    return BOLTZMANN_MEV_PER_K * np.abs(kelvin - bath_kelvin) * np.log(2.0)


def temperatures(number_meV, energy_meV2, bath_kelvin):
    """T_e in K from the deviations' number and energy about the reference."""
    background = (np.pi * BOLTZMANN_MEV_PER_K * bath_kelvin) ** 2 / 6.0
    return fermi.carrier_temperature(number_meV, background + energy_meV2)
