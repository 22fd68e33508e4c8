"""The parts of a scenario: one frozen model for each mapping of the YAML file.

Every key carries its meaning, unit and allowed values; messages and the JSON schema show them.
What spans several keys is in checks.py.
"""

import math
from typing import Annotated, Any, Literal

from pydantic import model_validator

from carriersim.quantities import (
    BACKSCATTER_PATH,
    MEAN_FREE_PATH,
    PATHS,
    TRANSMISSION,
    Angular,
    Finite,
    Form,
    Fraction,
    Modes,
    ModesTable,
    NotNegative,
    Number,
    Part,
    Paths,
    Positive,
    Probability,
    Reflection,
    Table,
    Transmission,
    Whole,
    angular_key,
    key,
    reflection_key,
)

MAX_POINTS = 10_000  # so that a saved scenario stays below the size limit of scenario files


def modes_of(wavenumber_per_nm: float, width_nm: float, height_nm: float | None = None) -> float:
    """Modes of a Fermi wavenumber k: k W/pi (d = 2), k^2 W H/(4 pi) (d = 3); inf on overflow.

    Datta, Electronic Transport in Mesoscopic Systems, 1995: half waves across the width; in three
    dimensions the cross-section of the Fermi sphere.
    """
    modes = wavenumber_per_nm * width_nm / math.pi
    if height_nm is None:
        return modes
    return modes * (wavenumber_per_nm * height_nm) / 4.0


class FaceSpecularity(Part):
    """Specularity for each pair of faces."""

    width: Fraction = key(
        "Specularity of the two faces that limit the width", "a number in 0..1", 1.0
    )
    height: Fraction = key(
        "Specularity of the two faces that limit the height", "a number in 0..1", 1.0
    )


class Channel(Part):
    """The conductor between the contacts."""

    length_nm: Positive = key("Length of the channel in nm", "a number > 0")
    dimension: Whole = key(
        "Dimension of the directions of motion: 1, 2 (circle), 3 (sphere)",
        "1, 2 or 3",
        1,
        ge=1,
        le=3,
    )
    modes: Modes | None = key(
        "Number of orbital modes (need not be whole), or a table of energy for elastic runs; "
        "1 unless fermi_wavenumber_per_nm gives it",
        "a number > 0, or a table {energy_meV, value}",
        None,
        json_schema_extra={"default": 1.0},
    )
    fermi_wavenumber_per_nm: Positive | None = key(
        "Fermi wavenumber in 1/nm, which gives the modes from the cross-section (d = 2, 3)",
        "a number > 0",
        None,
    )
    degeneracy: Positive = key("Degeneracy of each mode (2 for spin)", "a number > 0", 2.0)
    width_nm: Positive | None = key(
        "Width in nm between walls (d = 2, 3); without it there are no walls", "a number > 0", None
    )
    height_nm: Positive | None = key(
        "Height in nm between walls (d = 3, together with width_nm)", "a number > 0", None
    )
    specularity: Annotated[
        Annotated[Fraction, Number] | Annotated[FaceSpecularity, Table], Form
    ] = key(
        "Probability of mirror reflection at a wall, for all or for each pair of faces",
        "a number in 0..1, or a mapping {width, height} of such numbers",
        1.0,
    )
    bulk_resistivity_uohm_cm: Positive | None = key(
        "Resistivity of the bulk material in micro-ohm cm (d = 3), where R_B A and the mean free "
        "path shall not give it",
        "a number > 0",
        None,
    )

    @model_validator(mode="before")
    @classmethod
    def _one_mode(cls, data: Any) -> Any:
        if not isinstance(data, dict) or data.get("fermi_wavenumber_per_nm") is not None:
            return data
        return data if data.get("modes") is not None else data | {"modes": 1.0}

    @property
    def resolved_modes(self) -> float | ModesTable:
        """M, given or from the Fermi wavenumber; not rounded to whole modes."""
        if self.fermi_wavenumber_per_nm is None:
            return self.modes
        sides = (self.width_nm, self.height_nm)[: self.dimension - 1]
        return modes_of(self.fermi_wavenumber_per_nm, *sides)

    @property
    def face_specularity(self) -> tuple[float, float]:
        """Specularity of the faces that limit the width, and of those that limit the height."""
        if isinstance(self.specularity, FaceSpecularity):
            return self.specularity.width, self.specularity.height
        return self.specularity, self.specularity

    @property
    def area_nm2(self) -> float | None:
        """Cross-section W H in nm^2 (d = 3 with walls), else None."""
        if self.dimension != 3 or self.width_nm is None or self.height_nm is None:
            return None
        return self.width_nm * self.height_nm


class Contact(Part):
    """One contact and its interface to the channel."""

    temperature_K: NotNegative | None = key(
        "Temperature of this contact in K, instead of contacts.temperature_K", "a number >= 0", None
    )
    transmission: Transmission = key("Transmission of the interface", TRANSMISSION, 1.0)
    angular: Angular = angular_key()
    reflection: Reflection = reflection_key()


class Contacts(Part):
    """The two contacts, black-body reservoirs."""

    bias_mV: Finite = key("Bias in mV, left against right; 0 asks for linear response", "a number")
    temperature_K: NotNegative | None = key(
        "Temperature in K of each contact that gives none of its own", "a number >= 0", None
    )
    left: Contact = key("The contact at x = 0", "", Contact())
    right: Contact = key("The contact at x = length_nm, at potential 0", "", Contact())


class Section(Part):
    """A stretch of the channel with a path of its own; without one it is ballistic."""

    from_nm: NotNegative = key(
        "Where the section begins, in nm", "a number in 0..channel.length_nm"
    )
    to_nm: Positive = key("Where it ends, in nm", "a number above from_nm, up to channel.length_nm")
    mean_free_path_nm: Paths | None = key(MEAN_FREE_PATH, PATHS, None)
    backscatter_path_nm: Paths | None = key(BACKSCATTER_PATH, PATHS, None)


class Point(Part):
    """A scatterer at one place (a plane across the channel in d = 2, 3)."""

    position_nm: Positive = key("Place in nm", "a number between 0 and channel.length_nm")
    transmission: Transmission = key("Transmission", TRANSMISSION)
    angular: Angular = angular_key()
    reflection: Reflection = reflection_key()
    group: Whole | None = key(
        "Number, from 0, of the group in scattering.random that it was drawn from; written by runs",
        "the number of a drawn group",
        None,
        ge=0,
    )


class TransmissionRange(Part):
    """Transmissions drawn uniformly from a range."""

    low: Probability = key("Lowest transmission", "a number in (0, 1]")
    high: Probability = key("Highest transmission", "a number in (0, 1], not below low")


class RandomGroup(Part):
    """Scatterers at random places, drawn once. Once drawn, they are among the points."""

    count: Whole | None = key(
        "How many, exactly", f"an integer in 0..{MAX_POINTS}", None, ge=0, le=MAX_POINTS
    )
    density_per_um: NotNegative | None = key(
        "Mean number per micrometre; the number drawn is Poisson distributed", "a number >= 0", None
    )
    transmission: Annotated[
        Annotated[Probability, Number] | Annotated[TransmissionRange, Table], Form
    ] = key("Transmission of each", "a number in (0, 1], or a range {low, high}")
    angular: Angular = angular_key()
    reflection: Reflection = reflection_key()
    from_nm: NotNegative | None = key(
        "Where they may begin, in nm (0)", "a number in 0..channel.length_nm", None
    )
    to_nm: Positive | None = key(
        "Where they end, in nm (channel.length_nm)",
        "a number above from_nm, up to channel.length_nm",
        None,
    )
    drawn: bool = key(
        "Whether its scatterers stand in scattering.points already, with this group's number; "
        "written by runs",
        "true or false",
        False,
        strict=True,
    )


class Scattering(Part):
    """Elastic scattering; without any key the channel is ballistic."""

    mean_free_path_nm: Paths | None = key(MEAN_FREE_PATH, PATHS, None)
    backscatter_path_nm: Paths | None = key(BACKSCATTER_PATH, PATHS, None)
    sections: tuple[Section, ...] = key(
        "Stretches whose path overrides that of the channel; none may overlap",
        "a list of mappings {from_nm, to_nm, ..._path_nm}",
        (),
    )
    points: tuple[Point, ...] = key(
        "Scatterers at given places",
        f"a list of at most {MAX_POINTS} mappings {{position_nm, transmission}}",
        (),
        max_length=MAX_POINTS,
    )
    random: tuple[RandomGroup, ...] = key(
        "Scatterers at random places",
        "a list of mappings {count or density_per_um, transmission}",
        (),
    )

    @property
    def undrawn(self) -> tuple[RandomGroup, ...]:
        """The random groups whose scatterers are not among the points yet."""
        return tuple(group for group in self.random if not group.drawn)


class Mechanism(Part):
    """One way in which carriers lose or share energy."""

    kind: Literal["bath", "carriers", "optical_phonon"] = key(
        "bath: energy goes to the lattice; carriers: energy is shared among carriers; "
        "optical_phonon: quanta of energy_meV go to and come from the lattice",
        "bath, carriers or optical_phonon",
    )
    path_nm: Positive = key("Mean distance between events, in nm", "a number > 0")
    direction: Literal["kept", "randomised"] | None = key(
        "Whether an event keeps the direction; required for bath, kept for carriers unless given, "
        "refused for optical_phonon",
        "kept or randomised",
        None,
    )
    energy_meV: Positive | None = key(
        "Energy of the optical phonon in meV, for optical_phonon only", "a number > 0", None
    )

    @model_validator(mode="before")
    @classmethod
    def _carriers_keep(cls, data: Any) -> Any:
        if not isinstance(data, dict) or data.get("kind") != "carriers":
            return data
        return data if data.get("direction") is not None else data | {"direction": "kept"}


class Relaxation(Part):
    """Energy relaxation and the lattice."""

    bath_temperature_K: NotNegative | None = key(
        "Lattice temperature in K; the right contact's unless given", "a number >= 0", None
    )
    mechanisms: tuple[Mechanism, ...] = key(
        "Mechanisms, any number together", "a list of mappings {kind, path_nm, ...}", ()
    )
    substrate_conductance_W_per_K_m: Positive | None = key(
        "Thermal conductance to the substrate in W/(K m), per length of the channel; prints the "
        "rise of the lattice temperature that the power would cause, which itself stays fixed",
        "a number > 0",
        None,
    )


class Probe(Part):
    """A voltage probe."""

    position_nm: Positive = key("Place in nm", "a number between 0 and channel.length_nm")
    coupling: Fraction = key(
        "Probability to absorb a passing carrier; 0 reads without disturbing",
        "a number in 0..1",
        0.0,
    )
    weight_right: Fraction = key(
        "Weight of the right-moving carriers in the reading", "a number in 0..1", 0.5
    )
    temperature_K: NotNegative | None = key(
        "Temperature in K; the lattice's unless given", "a number >= 0", None
    )


class Accuracy(Part):
    """What the user's instruments resolve, as standard errors."""

    potential_mV: Positive | None = key("Of a potential, in mV", "a number > 0", None)
    occupation: Positive | None = key("Of an occupation", "a number > 0", None)
    heat_share: Positive | None = key("Of a share of the heat", "a number > 0", None)
    fano: Positive | None = key("Of a Fano factor", "a number > 0", None)
    resistance_relative: Positive | None = key(
        "Of a resistance, relative to it", "a number > 0", None
    )


class Simulation(Part):
    """How long and how finely to simulate."""

    seed: Whole = key("Seed of all random numbers", "an integer >= 0", 1, ge=0)
    disorder_seed: Whole | None = key(
        "Seed that draws the random scatterers; the seed unless given",
        "an integer >= 0",
        None,
        ge=0,
    )
    relative_error: Positive | None = key(
        "Stop at this relative standard error of the resistance; 0.005 if neither this nor "
        "heat_share_error nor histories nor max_seconds is given",
        "a number > 0",
        None,
    )
    fano_error: Positive | None = key(
        "Stop at this standard error of the Fano factor", "a number > 0", None
    )
    heat_share_error: Positive | None = key(
        "Stop at this standard error of the lattice's share of I V, as a fraction of 1 (with "
        "relative_error: when both are reached); needs relaxation and a bias",
        "a number > 0",
        None,
    )
    histories: Whole | None = key(
        "Stop after this number of carriers", "an integer >= simulation.batches", None, ge=1
    )
    max_seconds: Positive | None = key("Stop after this time in s", "a number > 0", None)
    cells: Whole = key(
        "Number of cells along the channel, before cuts at scatterers",
        "an integer in 1..100000",
        200,
        ge=1,
        le=100_000,
    )
    energy_bins: Whole | None = key(
        "Number of energy bins, nearly; automatic unless given",
        "an integer in 1..5000",
        None,
        ge=1,
        le=5000,
    )
    batches: Whole = key(
        "Number of batches that give the errors", "an integer in 8..4096", 64, ge=8, le=4096
    )
    trajectories: Whole = key(
        "Number of sample trajectories kept for the figure (d = 2, 3)",
        "an integer in 0..50",
        6,
        ge=0,
        le=50,
    )

    @property
    def resolved_disorder_seed(self) -> int:
        """Seed that draws the random scatterers."""
        return self.seed if self.disorder_seed is None else self.disorder_seed

    @property
    def target_relative_error(self) -> float | None:
        """Relative error of the resistance to stop at, or None if only other limits are given."""
        others = (self.histories, self.max_seconds, self.heat_share_error)
        if self.relative_error is None and all(limit is None for limit in others):
            return 0.005
        return self.relative_error
