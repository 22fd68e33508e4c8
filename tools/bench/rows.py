"""The lines of the bench, and how much is measured for them."""

import dataclasses


class FailedError(Exception):
    """What was to be measured ended with an error."""


@dataclasses.dataclass
class Row:
    """One line of the bench. `value` is None where it could not be measured; `note` says why."""

    name: str
    sense: str = ""  # ">=" or "<=" where there is a target
    target: float | None = None
    unit: str = ""
    value: float | None = None
    note: str = ""
    failed: bool = False  # what was to be measured ended with an error
    details: dict = dataclasses.field(default_factory=dict)

    @property
    def verdict(self) -> str:
        """One of "pass", "miss", "-" (no target), "not there" and "failed"."""
        if self.failed:
            return "failed"
        if self.value is None:
            return "not there"
        if self.target is None:
            return "-"
        met = self.value >= self.target if self.sense == ">=" else self.value <= self.target
        return "pass" if met else "miss"

    def line(self) -> str:
        target = "" if self.target is None else f"{self.sense} {self.target:g}{self.unit}"
        value = "" if self.value is None else f"{self.value:.3g}{self.unit}"
        return f"{self.name:<41} {target:>9} {value:>9}  {self.verdict:<9}  {self.note}".rstrip()


@dataclasses.dataclass(frozen=True)
class Effort:
    """How much is measured."""

    pairs: int
    flights: float  # a measurement, about


FULL = Effort(pairs=7, flights=2e7)
QUICK = Effort(pairs=3, flights=4e6)
