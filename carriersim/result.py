"""What a run gives back: estimates with errors, profiles, and how they are written and read.

Files of one run (names and meanings are fixed, see the README): scenario.yaml, summary.json,
fields.npz, profile.csv. A result directory appears as a whole or not at all.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace
from pathlib import Path
from typing import Any

import numpy as np

FORMAT = 1  # of the files in a result directory; raised when a reader must know the difference


@dataclass(frozen=True)
class Estimate:
    """A value with its standard error (None: unknown), and the bias where one was estimated."""

    value: float
    error: float | None
    systematic: float | None = None


@dataclass(frozen=True)
class Part:
    """One part of the resistance. kind: interface, point, probe or piece.

    A piece lies between from_nm and to_nm and belongs to one mechanism: the name of a path,
    'ballistic' where nothing scatters, or for relaxation that turns carriers round 'bath',
    'carriers' or 'optical phonon'. Every other kind sits at position_nm.
    """

    name: str
    kind: str
    resistance_ohm: Estimate
    position_nm: float | None = None
    from_nm: float | None = None
    to_nm: float | None = None
    mechanism: str | None = None


@dataclass(frozen=True)
class PartSum:
    """All parts of one kind together: point scatterers, probes, or the pieces of one mechanism."""

    kind: str
    mechanism: str | None
    count: int
    resistance_ohm: Estimate


@dataclass(frozen=True)
class ProbeReading:
    """potential_mV, or potential per unit of the bias when the bias is 0 (linear response)."""

    position_nm: float
    potential: Estimate


@dataclass(frozen=True)
class FourPoint:
    """(mu_from - mu_to)/e over the current, for one pair of probes."""

    from_nm: float
    to_nm: float
    resistance_ohm: Estimate


@dataclass(frozen=True)
class LimitRow:
    """A closed form beside the simulation. holds: exact or approximate; z = (sim - exp)/error."""

    name: str
    quantity: str
    expected: float
    simulated: float | None
    error: float | None
    z: float | None
    source: str
    holds: str


@dataclass(frozen=True)
class Heat:
    """Power in W that lands in each place; the sum is I V."""

    left_contact: Estimate
    right_contact: Estimate
    lattice: Estimate
    probes: tuple[Estimate, ...] = ()


@dataclass(frozen=True)
class Thermal:
    """conductance and seebeck at I = 0; heat currents at the run's bias, None when meaningless."""

    conductance_W_per_K: Estimate | None
    seebeck_V_per_K: Estimate | None
    heat_current_left_W: Estimate | None
    heat_current_right_W: Estimate | None


@dataclass(frozen=True)
class Noise:
    """Zero-frequency noise of the current."""

    fano: Estimate | None = None
    spectral_density_A2_per_Hz: Estimate | None = None
    third_cumulant: Estimate | None = None


@dataclass(frozen=True)
class LongChannel:
    """What an endless channel of the same kind does, d = 2 and 3; None where it has no meaning.

    resistivity_ratio: to the resistivity of bulk scattering alone. method: how it was found.
    """

    resistivity_ratio: Estimate | None
    resistivity_uohm_cm: Estimate | None
    sheet_ohm: Estimate | None
    backscatter_path_nm: Estimate | None
    method: str


@dataclass(frozen=True)
class Trajectory:
    """One carrier's way: places in nm, shape (n, 3), and what happened there, (n,) int64.

    kinds: indices into TRAJECTORY_EVENTS.
    """

    places_nm: np.ndarray
    kinds: np.ndarray


TRAJECTORY_EVENTS = (
    "start", "collision", "mirror reflection at a wall", "diffuse reflection at a wall",
    "passage", "reflection at a plane", "end",
)  # fmt: skip


@dataclass(frozen=True)
class Result:
    """Everything one run found. A quantity without meaning is None and `why[key]` says why.

    Profile arrays have shape (cells,), f_plus and f_minus (energies, cells); every array has a
    partner in `errors` under the same name. With bias 0 potentials are per unit of the bias and
    f_* are df/d(eV) in 1/meV.
    """

    scenario: Any
    version: str
    histories: int
    events: int
    seconds: float
    iterations: int
    converged: bool
    residual: float | None
    stopped_by: str
    linear_response: bool

    transmission: Estimate | None
    current_A: Estimate | None
    conductance_S: Estimate | None
    resistance_ohm: Estimate | None
    differential_resistance_ohm: Estimate | None
    ballistic_resistance_ohm: float
    breakdown: tuple[Part, ...] | None
    four_point: tuple[FourPoint, ...] | None
    probes: tuple[ProbeReading, ...]
    heat_W: Heat | None
    thermal: Thermal
    noise: Noise | None
    limits: tuple[LimitRow, ...]
    why: dict[str, str]

    x_nm: np.ndarray
    cell_edges_nm: np.ndarray
    energy_meV: np.ndarray
    energy_edges_meV: np.ndarray
    f_plus: np.ndarray
    f_minus: np.ndarray
    mu_plus_meV: np.ndarray
    mu_minus_meV: np.ndarray
    mu_meV: np.ndarray
    carrier_temperature_plus_K: np.ndarray
    carrier_temperature_minus_K: np.ndarray
    carrier_temperature_K: np.ndarray
    departure: np.ndarray
    lattice_power_W_per_nm: np.ndarray
    errors: dict[str, np.ndarray] = field(default_factory=dict)
    # Two and three dimensions: places, angles to the axis (D,), and (V, 2, D) the current in A per
    # degree (at bias 0, and at unequal temperatures without relaxation, dI/dV in S) of carriers
    # moving right, left.
    view_nm: np.ndarray | None = None
    direction_deg: np.ndarray | None = None
    current_by_direction: np.ndarray | None = None
    resistance_width_ohm_um: Estimate | None = None
    long_channel: LongChannel | None = None
    trajectories: tuple[Trajectory, ...] = ()
    breakdown_sums: tuple[PartSum, ...] | None = None  # None where `breakdown` is
    trouble: str | None = None  # which carrier used up its events and where, if one did
    drift: str | None = None  # which frozen field drifted most at the end, and where, in words
    drift_sigma: float | None = None  # by how many standard errors

    @property
    def relaxes(self):
        """Whether energies change inside the channel: relaxation or a probe that takes carriers."""
        coupled = any(probe.coupling > 0.0 for probe in self.scenario.probes)
        return coupled or bool(self.scenario.relaxation.mechanisms)

    @property
    def sums(self):
        """breakdown_sums, without errors where an older file does not have them."""
        if self.breakdown_sums is not None:
            return self.breakdown_sums
        found = {}
        for part in self.breakdown or ():
            if part.kind != "interface" and part.mechanism != "ballistic":
                found.setdefault((part.kind, part.mechanism), []).append(part.resistance_ohm.value)
        return tuple(
            PartSum(*key, len(values), Estimate(sum(values), None)) for key, values in found.items()
        )

    def with_limits(self, rows):
        """The same result with other rows of closed forms."""
        return replace(self, limits=tuple(rows))

    def save(self, directory, figures=False):
        """Write the result's files into directory, which appears as a whole; returns its Path.

        An existing directory is replaced only if it holds nothing but a result of ours.
        figures: write them too. Raises storage.PlaceError (an OSError) if the place is no good.
        """
        from carriersim import storage

        return storage.save(self, Path(directory), figures=figures)
