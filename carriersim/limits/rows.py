"""One closed form as a row: what it predicts, and its comparison with a run."""

from collections.abc import Callable, Iterable
from dataclasses import dataclass
from functools import partial

from carriersim.limits import selecting
from carriersim.result import Estimate, LimitRow, Result

ROUNDING = 1e-8  # relative difference between two exact ways to the same number


@dataclass(frozen=True)
class Limit:
    """A closed form that applies to a scenario.

    quantity is the key in summary.json, with its unit. holds: exact or approximate. select takes
    the number out of a Result, None where the run has none. scale: natural size of the quantity, in
    the unit of expected, against which a difference counts as rounding where expected is 0.
    """

    name: str
    quantity: str
    expected: float
    source: str
    holds: str
    select: Callable[[Result], Estimate | None]
    scale: float = 0.0


def of_result(name, quantity, expected, source, holds="exact", scale=0.0):
    """A limit on the number that a Result holds under the same name as summary.json."""
    select = partial(selecting.attribute, quantity)
    return Limit(name, quantity, expected, source, holds, select, scale)


def compare(limits: Iterable[Limit], result: Result) -> tuple[LimitRow, ...]:
    """One LimitRow for each limit: z = (simulated - expected)/error.

    z is None without a simulated value or without an error; where the error is 0 because the method
    gives the number exactly, agreement to 1e-8 of its size shows as z = 0.
    """
    return tuple(_row(limit, limit.select(result)) for limit in limits)


def _row(limit, estimate):
    value = error = z = None
    if estimate is not None:
        value, error = estimate.value, estimate.error
        z = _z(limit, value, error)
    return LimitRow(
        limit.name, limit.quantity, limit.expected, value, error, z, limit.source, limit.holds
    )


def _z(limit, value, error):
    if error is None:
        return None
    size = max(abs(limit.expected), limit.scale)
    if error > 1e-12 * size:
        return (value - limit.expected) / error
    return 0.0 if abs(value - limit.expected) <= ROUNDING * size else None
