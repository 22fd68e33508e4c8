"""What particles stand for: the deviation from a known occupation, or its change with the bias.

Each class tells the kernel what its particles meet (frozen fields), where they come from (sources),
and what to add to its tallies (`part`).
"""

from dataclasses import dataclass

import numpy as np

from carriersim.constants import BOLTZMANN_MEV_PER_K
from carriersim.engine import sources as w
from carriersim.engine.mechanisms import (
    FINE,
    KEPT_CARRIERS,
    RANDOM_CARRIERS,
    heat_strength,
    reference,
    temperatures,
    with_bounds,
)
from carriersim.engine.residual import Strengths, strengths
from carriersim.engine.trial import Trial, solve_trial
from carriersim.engine.trial_part import trial_part

TINY = 1e-6  # relative step of a temperature that stands for its derivative


@dataclass(frozen=True)
class State:
    """The state of the channel about which its change with the bias is followed."""

    mu: np.ndarray  # (3, C) meV
    kT: np.ndarray  # (3, C) meV
    probe_mu: np.ndarray  # (K,) meV
    trial: Trial | None


class FromReference:
    """f = F(E; mu_R, T_b) + d: sources in the contacts, and where something is hotter than T_b."""

    part: dict = {}  # noqa: RUF012
    strengths = None
    tangent = False

    def __init__(self, problem, trial=None):
        """trial: a Trial that phonons meet in place of the reference."""
        self.problem, self.trial = problem, trial
        self.widths = np.diff(problem.cell_edges_nm)
        relaxed = problem.relaxed
        self.bath = problem.scenario.bath_temperature_K
        self.fine = reference(relaxed.axis, self.bath, FINE)
        away = None
        if trial is not None:
            away = trial.value
            # Nothing starts from its residual unless a class asks for it.
            self.strengths = Strengths(*(np.ones(1) for _ in Strengths._fields))
        self.mechanisms = with_bounds(relaxed.mechanisms, relaxed.axis, self.bath, away)
        self.probe_kT = BOLTZMANN_MEV_PER_K * relaxed.probe_kelvin
        shape = (3, problem.cells)
        self.base = w.Base(
            mu=np.zeros(shape),
            mu_step=np.zeros(shape),
            kT=np.full(shape, relaxed.setting.bath_kT),
            probe_mu=np.zeros(self.probe_kT.size),
            probe_kT=np.full(self.probe_kT.size, relaxed.setting.bath_kT),
        )

    def start(self, fields):
        """Fields before the first round."""

    def mu_and_kT(self, cells):
        """Potentials and temperatures (3, C) that tallies (C, 2, 3) tell."""
        number = cells[..., 0]
        energy = cells[..., 2 if self.problem.relaxed.setting.exact_energy else 1]
        kelvin = np.empty((3, number.shape[0]))
        kelvin[:2] = temperatures(number, energy, self.bath).T
        mean = number.mean(axis=1)
        kelvin[2] = temperatures(mean, energy.mean(axis=1), self.bath)
        return np.vstack([number.T, mean]), BOLTZMANN_MEV_PER_K * kelvin

    def frozen(self, cells, probes):
        """From a batch's fields: w.Frozen, and by how much carriers are warmer than the base."""
        mu, kT = self.mu_and_kT(cells)
        frozen = w.Frozen(
            mu, self.steps(mu), kT, probes.copy(), self.probe_kT, self.base, self.fine
        )
        return frozen, kT - self.base.kT

    def steps(self, mu):
        """Change of mu (3, C) across each cell, from its neighbours in the same segment."""
        result = np.zeros_like(mu)
        first, cells = self.problem.geometry.first_cell, self.problem.geometry.cells
        for start, count in zip(first, cells, strict=True):
            if count > 1:
                result[:, start : start + count] = np.gradient(mu[:, start : start + count], axis=1)
        return result

    def emitters(self, warmer):
        """Strengths in meV of all sources, and how those of probes and carriers are spread."""
        window = self.problem.window
        strength = np.zeros(w.SOURCES)
        strength[w.LEFT_NUMBER] = abs(window.mu_left_meV)
        strength[w.LEFT_HEAT] = heat_strength(window.temperature_left_K, self.bath)
        strength[w.RIGHT_HEAT] = heat_strength(window.temperature_right_K, self.bath)
        return self.warm(strength, warmer)

    def warm(self, strength, warmer):
        """The same with what probes and carriers emit because they are warmer than the base."""
        probes = self.problem.relaxed.probes
        taken = probes.from_left + probes.from_right
        probe = taken * np.abs(self.probe_kT - self.base.probe_kT) * np.log(2.0)
        carriers = self.by_carriers(np.abs(warmer))
        strength[w.PROBE_HEAT], strength[w.CARRIER_HEAT] = probe.sum(), carriers.sum()
        return strength, probe, carriers

    def by_carriers(self, difference):
        """Pairs that carriers events emit in each cell for a difference of k T_e, (3, C)."""
        rates = self.problem.relaxed.mechanisms.rates
        oblique = 1.0 if self.problem.space is None else self.problem.space.oblique
        result = difference * np.log(2.0) * self.widths * oblique
        result[:2] *= rates[KEPT_CARRIERS]
        result[2] *= 2.0 * rates[RANDOM_CARRIERS]
        return result


class FromTrial(FromReference):
    """f = h + e about a trial occupation h: the source is what h lacks."""

    def __init__(self, problem):
        super().__init__(problem, solve_trial(problem))
        self.part = trial_part(problem, self.trial)
        self.strengths, *self.emitted = strengths(problem, self.trial)
        mu, kT = (field_.mean(axis=-1) for field_ in (self.trial.mu, self.trial.kT))
        step = np.diff(self.trial.mu, axis=-1)[..., 0]
        self.base = w.Base(mu, step, kT, self.trial.probe_mu, self.probe_kT)

    def start(self, fields):
        fields.cells[:] = self.part["cells"]
        fields.probes[:] = self.trial.probe_mu
        fields.occupation[:] = self.part["field"]

    def emitters(self, warmer):
        strength = np.zeros(w.SOURCES)
        strength[w.TRIAL_INSIDE], strength[w.TRIAL_NODE], strength[w.TRIAL_WALL] = self.emitted
        return self.warm(strength, warmer)


class Tangent(FromReference):
    """df/d(mu_L) about a state: one carrier at the left contact's energies, all else linear."""

    tangent = True

    def __init__(self, problem, state=None):
        super().__init__(problem, None if state is None else state.trial)
        if state is None:  # equilibrium
            state = State(self.base.mu, self.base.kT, self.base.probe_mu, None)
        step = self.steps(state.mu)
        self.base = w.Base(state.mu, step, state.kT, state.probe_mu, self.probe_kT)

    def frozen(self, cells, probes):
        column = 2 if self.problem.relaxed.setting.exact_energy else 1
        number, energy = cells[..., 0].T, cells[..., column].T
        number, energy = (np.vstack([x, x.mean(axis=0)]) for x in (number, energy))
        # (pi k T)^2/6 = u - mu^2/2, differentiated.
        kT = self.base.kT
        warmer = np.zeros_like(kT)
        excess = 3.0 * (energy - self.base.mu * number) / np.pi**2
        np.divide(excess, kT, out=warmer, where=kT > 0.0)
        # The kernel draws the shape of dF/d(kT) from the difference of two close temperatures.
        shape = kT * (1.0 + TINY * np.sign(warmer))
        base = self.base
        frozen = w.Frozen(
            base.mu, base.mu_step, shape, base.probe_mu, self.probe_kT, base, self.fine
        )
        return frozen, warmer

    def emitters(self, warmer):
        strength = np.zeros(w.SOURCES)
        strength[w.LEFT_NUMBER] = 1.0
        return self.warm(strength, warmer)


def deviation_of(problem):
    """What the particles of a problem stand for in a run of its own."""
    if problem.window.linear:
        return Tangent(problem)
    exact = problem.relaxed.setting.exact_energy
    return FromReference(problem) if exact else FromTrial(problem)
