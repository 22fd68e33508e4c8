"""What a user may ask for: the scenario, typed, checked as a whole and frozen."""

import os
import re
import unicodedata
from collections.abc import Mapping
from typing import Any, Self

from pydantic import ValidationInfo, model_validator

from carriersim import yamlfile, yamlwrite
from carriersim.checks import cross_faults
from carriersim.faults import Fault, ScenarioError
from carriersim.keypaths import change, plain
from carriersim.quantities import TEXT, EnergyTable, NamedPath, Part, Text, key
from carriersim.schema import (
    Accuracy,
    Channel,
    Contact,
    Contacts,
    FaceSpecularity,
    Mechanism,
    Point,
    Probe,
    RandomGroup,
    Relaxation,
    Scattering,
    Section,
    Simulation,
    TransmissionRange,
)
from carriersim.unsupported import refuse_unsupported
from carriersim.validation import key_paths, parse
from carriersim.yamlfile import Document

__all__ = [
    "SCENARIO_KEYS",
    "Accuracy",
    "Channel",
    "Contact",
    "Contacts",
    "EnergyTable",
    "FaceSpecularity",
    "Fault",
    "Mechanism",
    "NamedPath",
    "Point",
    "Probe",
    "RandomGroup",
    "Relaxation",
    "Scattering",
    "Scenario",
    "ScenarioError",
    "Section",
    "Simulation",
    "TransmissionRange",
    "json_schema",
    "load",
    "read_text",
    "to_yaml",
]


class Scenario(Part):
    """A whole scenario: immutable, compared by value, the same tree as the YAML file."""

    name: Text = key("Name of the scenario; the file's unless given", TEXT, "scenario")
    channel: Channel = key("The conductor", "")
    contacts: Contacts = key("The contacts and the bias", "")
    scattering: Scattering = key("Elastic scattering", "", Scattering())
    relaxation: Relaxation = key("Energy relaxation", "", Relaxation())
    probes: tuple[Probe, ...] = key(
        "Voltage probes", "a list of mappings {position_nm, coupling, ...}", ()
    )
    noise: bool = key("Whether to compute noise", "true or false", False, strict=True)
    accuracy: Accuracy = key("What the user's instruments resolve", "", Accuracy())
    simulation: Simulation = key("How to simulate", "", Simulation())

    @model_validator(mode="after")
    def _consistent(self, info: ValidationInfo) -> Self:
        """Check scenarios built directly in Python; a document has its own, fuller checks."""
        if not isinstance(info.context, Document):
            document = Document("scenario", plain(self))
            faults = [*cross_faults(document), *refuse_unsupported(document)]
            if faults:
                raise ScenarioError(faults)
        return self

    @property
    def left_temperature_K(self) -> float:
        """Temperature of the left contact in K."""
        own, common = self.contacts.left.temperature_K, self.contacts.temperature_K
        return own if own is not None else common

    @property
    def right_temperature_K(self) -> float:
        """Temperature of the right contact in K."""
        own, common = self.contacts.right.temperature_K, self.contacts.temperature_K
        return own if own is not None else common

    @property
    def bath_temperature_K(self) -> float:
        """Temperature of the lattice in K."""
        own = self.relaxation.bath_temperature_K
        return own if own is not None else self.right_temperature_K

    @property
    def linear_response(self) -> bool:
        """Whether the bias is 0, which asks for derivatives at zero bias."""
        return self.contacts.bias_mV == 0

    @property
    def slug(self) -> str:
        """The name in small letters, digits, _ and -, for folders."""
        ascii_name = unicodedata.normalize("NFKD", self.name).encode("ascii", "ignore").decode()
        return re.sub(r"[^a-z0-9_]+", "-", ascii_name.lower()).strip("-")[:80] or "scenario"

    def with_defaults(self) -> "Scenario":
        """Fill in the defaults that follow from other keys, for the record of a run.

        These are the seed of the disorder, the relative error, and the temperatures of the lattice
        and the probes. What the scenario means does not change.
        """
        simulation = {
            "disorder_seed": self.simulation.resolved_disorder_seed,
            "relative_error": self.simulation.target_relative_error,
        }
        bath = self.bath_temperature_K
        update = {
            "simulation": self.simulation.model_copy(update=simulation),
            "relaxation": self.relaxation.model_copy(update={"bath_temperature_K": bath}),
            "probes": tuple(
                probe.model_copy(update={"temperature_K": bath})
                if probe.temperature_K is None
                else probe
                for probe in self.probes
            ),
        }
        return self.model_copy(update=update)

    def replace(self, changes: Mapping[str, Any], source: str | None = None) -> "Scenario":
        """Return a scenario with values set by key path, checked like a file.

        `replace({"channel.length_nm": 500, "scattering.points[0].transmission": 0.3})`. Values are
        Python values; None removes a key (its default holds again) or an entry of a list.
        `source` names the origin of the changes in messages.

        Raises:
            ScenarioError: a path that leads nowhere, or values that make no valid scenario.
        """
        document = Document(source or f"scenario '{self.name}'", plain(self))
        return _finish(document, change(document, changes, Scenario))


SCENARIO_KEYS: tuple[str, ...] = key_paths(Scenario)
"""Every key path of a scenario file, with [] for the entries of a list."""


def load(path: str | os.PathLike, changes: Mapping[str, Any] | None = None) -> Scenario:
    """Read a scenario file (YAML, at most 2 MB).

    `changes` are set by key path before anything is checked, as in `Scenario.replace`.

    Raises:
        ScenarioError: unreadable, not YAML or not a valid scenario; holds all faults found.
    """
    return _from_document(*yamlfile.read_file(path), changes)


def read_text(
    text: str, source: str = "scenario", changes: Mapping[str, Any] | None = None
) -> Scenario:
    """Read a scenario from YAML text; `source` is the file named in messages. See `load`."""
    return _from_document(*yamlfile.read(text, source), changes)


def to_yaml(scenario: Scenario) -> str:
    """Write a scenario as YAML with every default filled in; it reads back equal."""
    return yamlwrite.to_yaml(plain(scenario))


def json_schema() -> dict[str, Any]:
    """Return the JSON schema of a scenario file, for editors."""
    from pydantic.json_schema import GenerateJsonSchema

    class Untitled(GenerateJsonSchema):
        """Leaves out titles made from keys, which spoil their units."""

        def field_title_should_be_set(self, schema: Any) -> bool:
            return False

    schema = Scenario.model_json_schema(schema_generator=Untitled)
    return {"$schema": "https://json-schema.org/draft/2020-12/schema", **schema}


def _from_document(
    document: Document, faults: list[Fault], changes: Mapping[str, Any] | None
) -> Scenario:
    document.data.setdefault("name", yamlfile.default_name(document.file))
    faults = [*faults, *change(document, changes or {}, Scenario)]
    return _finish(document, faults)


def _finish(document: Document, faults: list[Fault]) -> Scenario:
    scenario, wrong = parse(document, Scenario)
    faults = [*faults, *wrong, *cross_faults(document), *refuse_unsupported(document)]
    if faults or scenario is None:
        raise ScenarioError(sorted(faults, key=lambda fault: fault.line or 0))
    return scenario
