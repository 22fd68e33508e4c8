"""What a trial occupation itself adds to every tally of a round; the particles add the rest."""

import numpy as np
from numba import njit

from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.engine.mechanisms import (
    FINE,
    KEPT_BATH,
    RANDOM_BATH,
)
from carriersim.engine.residual import fermi, leaving, occupation
from carriersim.engine.trial import number_and_energy

_GAUSS = 0.5 - 0.5 / np.sqrt(3.0), 0.5 + 0.5 / np.sqrt(3.0)  # h is linear in a cell: h^2 exact


def trial_part(problem, trial):
    """Tallies of the trial occupation alone: a dict as Rounds.run makes of the particles'."""
    relaxed = problem.relaxed
    number, energy = number_and_energy(problem, trial.value, trial.slope)
    outer = contact_integrals(problem.geometry, relaxed.tables, relaxed.probes, trial)
    arrivals, departures = _at_nodes(problem, number, outer)
    n, u = number.mean(axis=-1), energy.mean(axis=-1)
    heat, turned = phonon_integrals(problem.geometry, relaxed.mechanisms, trial)
    widths = np.diff(problem.cell_edges_nm)
    return {
        "current": departures[-1, 0],
        "energy": np.array([outer[0, 1] - outer[1, 1], outer[2, 1] - outer[3, 1]]),
        "arrivals": arrivals,
        "departures": departures,
        "cells": np.stack([n, u, u], axis=-1).swapaxes(0, 1),
        "heat": heat + widths * _bath_heat(relaxed.mechanisms.rates, number, u),
        "probe_heat": _probe_heat(problem, energy, trial),
        "turned": turned,
        "field": trial.value.mean(axis=-1),
    }


def _at_nodes(problem, number, outer):
    """Numbers that arrive at each node and depart from it, (K, 2) each."""
    first, cells = problem.geometry.first_cell, problem.geometry.cells
    behind = first + cells - 1
    nodes = first.size + 1
    arrivals, departures = np.zeros((nodes, 2)), np.zeros((nodes, 2))
    arrivals[1:, 0], departures[1:, 1] = number[0, behind, 1], number[1, behind, 1]
    arrivals[:-1, 1], departures[:-1, 0] = number[1, first, 0], number[0, first, 0]
    arrivals[0, 0], departures[0, 1] = problem.window.mu_left_meV, outer[1, 0]
    departures[-1, 0] = outer[2, 0]
    return arrivals, departures


@njit(cache=True, error_model="numpy")
def contact_integrals(geometry, tables, probes, trial):
    """Number and energy about a common step, (4, 2): from and into the left, into and from the
    right contact."""
    result = np.zeros((4, 2))
    last = geometry.transmission.size - 1
    step = trial.step_meV / FINE
    for i in range(trial.value.shape[1] * FINE):
        energy = trial.first_meV + (i + 0.5) * step
        full = 1.0 if energy < 0.0 else 0.0
        values = (
            fermi(energy, trial.mu_left, trial.left_kT),
            leaving(1, energy, 0, geometry, tables, probes, trial),
            leaving(0, energy, last, geometry, tables, probes, trial),
            fermi(energy, 0.0, trial.right_kT),
        )
        for k in range(4):
            result[k, 0] += (values[k] - full) * step
            result[k, 1] += (values[k] - full) * step * energy
    return result


def _bath_heat(rates, number, energy):
    """Energy per nm that the bath takes from h, (C,); F(mu, T_b) carries mu^2/2.

    number: (2, C, 2) at the edges of cells, between which it is linear.
    """
    heat = np.zeros(energy.shape[1])
    if rates[KEPT_BATH]:
        heat += rates[KEPT_BATH] * (energy - 0.5 * _mean_square(number)).sum(axis=0)
    if rates[RANDOM_BATH]:
        heat += rates[RANDOM_BATH] * (energy.sum(axis=0) - _mean_square(number.mean(axis=0)))
    return heat


def _mean_square(edges):
    """Mean square of a linear function, from its values at both ends along the last axis."""
    left, right = edges[..., 0], edges[..., 1]
    return (left * left + left * right + right * right) / 3.0


def _probe_heat(problem, energy, trial):
    """Energy that each probe takes from h, (K,)."""
    probes, first, cells = (
        problem.relaxed.probes,
        problem.geometry.first_cell,
        problem.geometry.cells,
    )
    bath = problem.scenario.bath_temperature_K
    result = np.zeros(probes.from_left.size)
    for k in range(1, result.size - 1):
        a, b = probes.from_left[k], probes.from_right[k]
        if a + b > 0.0:
            kelvin = problem.relaxed.probe_kelvin[k]
            warm = (np.pi * BOLTZMANN_MEV_PER_K) ** 2 / 6.0 * (kelvin**2 - bath**2)
            before, after = first[k - 1] + cells[k - 1] - 1, first[k]
            emitted = (a + b) * (0.5 * trial.probe_mu[k] ** 2 + warm)
            result[k] = a * energy[0, before, 1] + b * energy[1, after, 0] - emitted
    return result


@njit(cache=True, error_model="numpy")
def phonon_integrals(geometry, mechanisms, trial):
    """Energy that h gives to the lattice and directed flux that phonons destroy, (C,) each."""
    bins, cells = trial.value.shape[1:3]
    heat, turned = np.zeros(cells), np.zeros(cells)
    step = trial.step_meV / FINE
    for segment in range(geometry.cells.size):
        width = geometry.length_nm[segment] / geometry.cells[segment]
        first = geometry.first_cell[segment]
        for c in range(first, first + geometry.cells[segment]):
            for k in range(mechanisms.phonon_meV.size):
                w, n = mechanisms.phonon_meV[k], mechanisms.phonon_number[k]
                factor = 0.5 * mechanisms.phonon_rate[k] * 0.5 * width * step
                for place in range(2):
                    down = swing = 0.0
                    for i in range(bins * FINE):
                        energy = trial.first_meV + (i + 0.5) * step
                        l0 = occupation(0, energy, c, _GAUSS[place], trial)
                        l1 = occupation(1, energy, c, _GAUSS[place], trial)
                        u0 = occupation(0, energy + w, c, _GAUSS[place], trial)
                        u1 = occupation(1, energy + w, c, _GAUSS[place], trial)
                        down += (n + 1.0) * (u0 + u1) * (2.0 - l0 - l1)
                        down -= n * (l0 + l1) * (2.0 - u0 - u1)
                        swing += (n + 1.0) * (u0 * (1.0 - l1) - u1 * (1.0 - l0))
                        swing += n * (l0 * (1.0 - u1) - l1 * (1.0 - u0))
                    heat[c] += w * factor * down
                    turned[c] += factor * swing
    return heat, turned
