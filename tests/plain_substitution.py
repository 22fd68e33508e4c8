"""Optical phonons by plain substitution, as is common practice: the control that must fail.

A small Monte Carlo program of its own, d = 1, sharing no code with the package. Lengths in nm,
energies in meV from mu_R = 0, all at one temperature. Particles are the deviation from
F_r = F(E; mu_R, T_b). Between an upper state and the one of a phonon's energy w below it a carrier
goes down at the rate (N + 1 - f~_l)/(2 l_op) and up at (N + F_r(u))/(2 l_op) into each direction;
no pair source. The frozen f~ = F_r + d~ is replaced in full by each round's own tally. (Common
practice in ensemble Monte Carlo programs, which put the occupation last counted into the rejection
of final states: P. Lugli and D. K. Ferry, IEEE Trans. Electron Devices 32 (1985) 2431.) The fixed
point is right; noise and overshoot of the substitution keep it from being reached.
"""

from dataclasses import dataclass

import numpy as np
from numba import njit
from scipy import constants

BOLTZMANN = constants.k / constants.e * 1e3  # meV/K
REACH_KT = 14.0
CELLS = 100
BINS_PER_PHONON = 40


@dataclass(frozen=True)
class Channel:
    """length, backscattering path and path of phonons in nm (inf: none), bias and phonon in meV."""

    length: float
    backscatter_path: float
    phonon_path: float
    bias: float
    kelvin: float = 300.0
    phonon: float = 160.0

    @property
    def kT(self):
        return BOLTZMANN * self.kelvin

    @property
    def phonons(self):
        """Number of thermal phonons."""
        return 1.0 / np.expm1(self.phonon / self.kT)

    def edges(self):
        """Energy edges; a whole number of bins in a phonon's energy, zero on one of them."""
        step = self.phonon / BINS_PER_PHONON
        reach = self.phonon + REACH_KT * self.kT
        low = np.floor(-reach / step)
        high = np.ceil((self.bias + reach) / step)
        return step * np.arange(low, high + 1)

    def reference(self, energy):
        return 0.5 * (1.0 - np.tanh(0.5 * energy / self.kT))


@dataclass(frozen=True)
class Round:
    """T_tot, the lattice's share of I V, and the deviation (2, bins, cells) that was tallied."""

    transmission: float
    lattice_share: float
    deviation: np.ndarray


def substitute(channel, particles, rounds, seed, deviation=None):
    """Rounds from the deviation given (none), each with the tally of the one before."""
    edges = channel.edges()
    if deviation is None:
        deviation = np.zeros((2, edges.size - 1, CELLS))
    done = []
    for number in range(rounds):
        done.append(one_round(channel, particles, seed + number, deviation))
        deviation = done[-1].deviation
    return done


def one_round(channel, particles, seed, deviation):
    """One round at a frozen deviation."""
    edges = channel.edges()
    tally = np.zeros_like(deviation)
    middle = 0.5 * (edges[1:] + edges[:-1])
    # Noise may count more than a full state, or none: rates must not be negative.
    occupation = np.clip(channel.reference(middle)[:, None] + deviation, 0.0, 1.0)
    passed, lost = _fly(
        seed, particles, channel.length, 1.0 / channel.backscatter_path,
        1.0 / channel.phonon_path, channel.phonon, channel.phonons, channel.bias, channel.kT,
        edges[0], edges[1] - edges[0], occupation, tally,
    )  # fmt: skip
    cell, step = channel.length / CELLS, edges[1] - edges[0]
    return Round(
        passed / particles,
        lost / max(passed, 1) / channel.bias,
        tally * channel.bias / (particles * cell * step),
    )


@njit
def _occupation(side, energy, cell, kT, first, step, occupation):
    """f~ of the bin; beyond the bins F_r."""
    place = int(np.floor((energy - first) / step))
    if 0 <= place < occupation.shape[1]:
        return occupation[side, place, cell]
    return 1.0 / (1.0 + np.exp(energy / kT))


@njit(nogil=True)
def _fly(
    seed, particles, length, backscatter, rate, phonon, number, bias, kT, first, step, occupation,
    tally,
):  # fmt: skip
    np.random.seed(seed)  # noqa: NPY002 - numba's own generator
    cells = tally.shape[2]
    size = length / cells
    bound = rate * (2.0 * number + 2.0)
    total = backscatter + bound
    passed, lost = 0, 0.0
    for _ in range(particles):
        chance = np.random.random()  # noqa: NPY002
        energy = bias * np.random.random() + kT * np.log(chance / (1.0 - chance))  # noqa: NPY002
        x, side = 0.0, 0
        while True:
            flight = -np.log(1.0 - np.random.random()) / total if total > 0.0 else np.inf  # noqa: NPY002
            end = x + flight if side == 0 else x - flight
            stop = min(max(end, 0.0), length)
            place = int(np.floor((energy - first) / step))
            if 0 <= place < tally.shape[1]:
                low, high = min(x, stop), max(x, stop)
                for cell in range(int(low / size), min(int(high / size) + 1, cells)):
                    inside = min(high, (cell + 1) * size) - max(low, cell * size)
                    tally[side, place, cell] += max(inside, 0.0)
            if end >= length:
                passed += 1
                break
            if end <= 0.0:
                break
            x = end
            draw = np.random.random() * total  # noqa: NPY002
            if draw < backscatter:
                side = 1 - side
                continue
            draw -= backscatter
            cell = min(int(x / size), cells - 1)
            for final in range(2):
                blocked = _occupation(final, energy - phonon, cell, kT, first, step, occupation)
                down = 0.5 * rate * (number + 1.0 - blocked)
                up = 0.5 * rate * (number + 1.0 / (1.0 + np.exp((energy + phonon) / kT)))
                if draw < down:
                    energy, side, lost = energy - phonon, final, lost + phonon
                    break
                if draw < down + up:
                    energy, side, lost = energy + phonon, final, lost - phonon
                    break
                draw -= down + up
    return passed, lost
