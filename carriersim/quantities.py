"""The kinds of values that scenario keys hold: numbers, text, tables of energy, named paths."""

from typing import Annotated, Any, Literal

from pydantic import (
    AfterValidator,
    BaseModel,
    BeforeValidator,
    ConfigDict,
    Discriminator,
    Field,
    Tag,
)

_ALLOWED = " Allowed: "


def key(meaning: str, allowed: str, default: Any = ..., **limits: Any) -> Any:
    """Declare a key of the scenario file: what it means (with unit) and what may stand there."""
    text = f"{meaning}.{_ALLOWED}{allowed}." if allowed else f"{meaning}."
    return Field(default, description=text, **limits)


def allowed_in(description: str | None) -> str:
    """Return what a key may hold, out of its description."""
    return (description or "").partition(_ALLOWED)[2].removesuffix(".")


def _whole(value: Any) -> Any:
    """Take 1e6 for the integer 1000000."""
    return int(value) if isinstance(value, float) and value.is_integer() else value


def _line_of_text(value: str) -> str:
    if not value.strip() or not value.isprintable():
        raise ValueError("not one line of text")
    return value


def _form(value: Any) -> str:
    """Tell a number, a mapping and a list apart; the bar marks what is not a key in a path."""
    if isinstance(value, dict | BaseModel):
        return "|mapping"
    return "|list" if isinstance(value, list | tuple) else "|number"


Finite = Annotated[float, Field(strict=True, allow_inf_nan=False)]
Positive = Annotated[Finite, Field(gt=0)]
NotNegative = Annotated[Finite, Field(ge=0)]
Fraction = Annotated[Finite, Field(ge=0, le=1)]
Probability = Annotated[Finite, Field(gt=0, le=1)]
Whole = Annotated[int, Field(strict=True), BeforeValidator(_whole)]
Text = Annotated[str, Field(strict=True), AfterValidator(_line_of_text)]
Energies = Annotated[tuple[Finite, ...], Field(min_length=2)]

Number = Tag("|number")
Table = Tag("|mapping")
_List = Tag("|list")
Form = Discriminator(_form)


class Part(BaseModel):
    """A mapping of the scenario file: frozen, unknown keys refused."""

    model_config = ConfigDict(frozen=True, extra="forbid")


class EnergyTable(Part):
    """A quantity against total energy: linear between the entries, constant outside."""

    energy_meV: Energies = key(
        "Total energies in meV, counted from the right contact's potential",
        "a list of 2 or more strictly increasing numbers",
    )
    value: tuple[Finite, ...] = key(
        "The values at these energies", "a list of numbers, one for each energy", min_length=2
    )


class TransmissionTable(EnergyTable):
    """A transmission against energy."""

    value: tuple[Probability, ...] = key(
        "Transmissions at these energies",
        "a list of numbers in (0, 1], one for each energy",
        min_length=2,
    )


class PathTable(EnergyTable):
    """A path against energy."""

    value: tuple[Positive, ...] = key(
        "Paths in nm at these energies", "a list of numbers > 0, one for each energy", min_length=2
    )


class ModesTable(EnergyTable):
    """The number of modes against energy (subbands opening)."""

    value: tuple[NotNegative, ...] = key(
        "Orbital modes at these energies",
        "a list of numbers >= 0, at least one of them > 0, one for each energy",
        min_length=2,
    )


Transmission = Annotated[Annotated[Probability, Number] | Annotated[TransmissionTable, Table], Form]
Modes = Annotated[Annotated[Positive, Number] | Annotated[ModesTable, Table], Form]
Path = Annotated[Annotated[Positive, Number] | Annotated[PathTable, Table], Form]

Angular = Literal["constant", "tunnel"]
Reflection = Literal["specular", "diffuse"]

TEXT = "one line of text (in quotes if it looks like a number)"
TRANSMISSION = "a number in (0, 1], or a table {energy_meV, value}"
PATH = "a number > 0, or a table {energy_meV, value}"
PATHS = f"{PATH}, or a list of named paths [{{name, ..._path_nm}}]"
MEAN_FREE_PATH = "Mean free path in nm between collisions that make the direction random"
BACKSCATTER_PATH = "Mean free path in nm for backscattering"


def angular_key() -> Any:
    return key(
        "How the transmission depends on the angle (d = 2, 3)", "constant or tunnel", "constant"
    )


def reflection_key() -> Any:
    return key(
        "Whether reflection keeps or loses the direction (d = 2, 3)",
        "specular or diffuse",
        "specular",
    )


class NamedPath(Part):
    """One of several scattering mechanisms, which add as rates."""

    name: Text = key("Name of the mechanism, used once", TEXT)
    mean_free_path_nm: Path | None = key(MEAN_FREE_PATH, PATH, None)
    backscatter_path_nm: Path | None = key(BACKSCATTER_PATH, PATH, None)


Paths = Annotated[
    Annotated[Positive, Number]
    | Annotated[PathTable, Table]
    | Annotated[tuple[NamedPath, ...], Field(min_length=1), _List],
    Form,
]
