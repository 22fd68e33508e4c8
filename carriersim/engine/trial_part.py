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
from carriersim.engine.space import cosine_at
from carriersim.engine.trial import number_and_energy

_GAUSS = 0.5 - 0.5 / np.sqrt(3.0), 0.5 + 0.5 / np.sqrt(3.0)  # h is linear in a cell: h^2 exact


def trial_part(problem, trial):
    """Tallies of the trial occupation alone: a dict as Rounds.run makes of the particles'."""
    relaxed, space = problem.relaxed, problem.space
    number, energy = number_and_energy(problem, trial.value, trial.slope)
    planes = None if space is None else space.planes
    given = problem.geometry, planes, relaxed.tables, relaxed.probes, trial
    outer = contact_integrals(*given, *_average(space, crossing=True))
    arrivals, departures = _at_nodes(problem, number, outer)
    n, u = number.mean(axis=-1), energy.mean(axis=-1)
    heat, turned = phonon_integrals(problem.geometry, relaxed.mechanisms, trial)
    widths = np.diff(problem.cell_edges_nm) * trial.oblique
    part = {
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
    if space is None:
        return part
    # h is the same for all directions of a half space, except for what leaves the channel.
    outer = contact_integrals(*given, *_average(space, crossing=False))
    dense = _at_nodes(problem, number, outer)
    flux = np.stack([departures[:, 0], arrivals[:, 1]], axis=-1)
    flux[-1] = arrivals[-1, 0], departures[-1, 1]
    return part | {
        "densities": np.stack(
            [dense[0][:, 0], dense[1][:, 1], dense[0][:, 1], dense[1][:, 0]], axis=-1
        ),
        "lost": _lost_to_walls(problem, n[0] - n[1]),
        "views": flux[space.view_nodes, :, None] * _flux_classes(space),
    }


def _average(space, crossing):
    """|u_x| and weights that average over a flux by the cosine law, or over a half space."""
    if space is None:
        return np.ones(1), np.ones(1)
    x, weight = np.polynomial.legendre.leggauss(24)
    return cosine_at(0.5 * (x + 1.0), space.dimension, crossing), 0.5 * weight


def _flux_classes(space):
    """Share of each class of direction in a flux by the cosine law, (D,)."""
    edges = space.planes.view_edges
    if space.dimension == 3:
        return -np.diff(edges**2)
    return np.diff(np.sqrt(np.maximum(1.0 - edges**2, 0.0)))


def _lost_to_walls(problem, difference):
    """u_x that walls take from h in each segment, (S,); difference: (C,) of the half spaces.

    Mean u_x of what falls on a wall: 4/(3 pi) in d = 3, 1/2 in d = 2.
    """
    space, geometry = problem.space, problem.geometry
    mean = 4.0 / (3.0 * np.pi) if space.dimension == 3 else 0.5
    amounts = difference * np.diff(problem.cell_edges_nm) * (space.wall_rate * mean)
    return np.add.reduceat(amounts, geometry.first_cell)


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
def contact_integrals(geometry, planes, tables, probes, trial, cosines, weights):
    """Number and energy about a common step, (4, 2): from and into the left, into and from the
    right contact; averaged over directions |u_x| = cosines."""
    result = np.zeros((4, 2))
    last = geometry.transmission.size - 1
    step = trial.step_meV / FINE
    values = np.empty(4)
    for i in range(trial.value.shape[1] * FINE):
        energy = trial.first_meV + (i + 0.5) * step
        full = 1.0 if energy < 0.0 else 0.0
        values[0] = fermi(energy, trial.mu_left, trial.left_kT)
        values[1] = values[2] = 0.0
        for n in range(cosines.size):
            c = cosines[n]
            into = leaving(1, energy, 0, c, geometry, planes, tables, probes, trial)
            values[1] += weights[n] * into
            into = leaving(0, energy, last, c, geometry, planes, tables, probes, trial)
            values[2] += weights[n] * into
        values[3] = fermi(energy, 0.0, trial.right_kT)
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
    # With directions u_x counts: an even half space loses 1/oblique of its flights' u_x, and twice
    # what goes over to the other half space.
    along = 1.0 if trial.oblique == 1.0 else 2.0 / trial.oblique
    for segment in range(geometry.cells.size):
        width = geometry.length_nm[segment] / geometry.cells[segment]
        first = geometry.first_cell[segment]
        for c in range(first, first + geometry.cells[segment]):
            for k in range(mechanisms.phonon_meV.size):
                w, n = mechanisms.phonon_meV[k], mechanisms.phonon_number[k]
                factor = 0.5 * mechanisms.phonon_rate[k] * 0.5 * width * step * trial.oblique
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
                    turned[c] += factor * swing * along
    return heat, turned
