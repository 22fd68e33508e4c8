"""Random scatterers: drawn once from their own seed, then as good as given."""

import numpy as np

from carriersim.faults import Fault, ScenarioError
from carriersim.scenario import Scenario
from carriersim.schema import MAX_POINTS, Point, TransmissionRange

# Sets this stream apart from every other use of the same seed.
_STREAM = 0xD150_4DE4
_ATTEMPTS = 100


def draw_random_points(scenario: Scenario) -> Scenario:
    """Return the scenario with its random scatterers drawn; those drawn before stay as they are.

    `scattering.points` then lists given and drawn points by position, the drawn ones with the
    number of their group, and the groups in `scattering.random` are marked as drawn. The draw
    depends on the disorder seed (the seed unless given) and on `scattering`, the probes' places
    and the length of the channel alone; each group has its own stream.

    Raises:
        ScenarioError: too many scatterers were drawn, or a stretch is too short for its number.
    """
    scattering = scenario.scattering
    if not scattering.undrawn:
        return scenario
    seed = scenario.simulation.resolved_disorder_seed
    points = list(scattering.points)
    taken = _taken(scenario, points)
    for index, group in enumerate(scattering.random):
        if not group.drawn:
            sequence = np.random.SeedSequence(seed, spawn_key=(_STREAM, index))
            generator = np.random.Generator(np.random.PCG64(sequence))
            points += _draw(scenario, index, generator, taken, MAX_POINTS - len(points))
    groups = (group.model_copy(update={"drawn": True}) for group in scattering.random)
    update = {"points": _by_place(points), "random": tuple(groups)}
    drawn = scattering.model_copy(update=update)
    return scenario.model_copy(update={"scattering": drawn})


def _taken(scenario: Scenario, points: list[Point]) -> set[float]:
    """Places in nm where no random scatterer may be."""
    return {owner.position_nm for owner in (*points, *scenario.probes)}


def _by_place(points: list[Point]) -> tuple[Point, ...]:
    return tuple(sorted(points, key=lambda point: point.position_nm))


def _draw(
    scenario: Scenario,
    index: int,
    generator: np.random.Generator,
    taken: set[float],
    room: float,
) -> list[Point]:
    """Draw the scatterers of one group, at most `room`; `taken` grows by their places."""
    group = scenario.scattering.random[index]
    low = 0.0 if group.from_nm is None else group.from_nm
    high = scenario.channel.length_nm if group.to_nm is None else group.to_nm
    if group.count is not None:
        count = group.count
    else:
        count = int(generator.poisson(group.density_per_um * (high - low) / 1000))
    if count > room:
        raise _refusal(scenario, index, f"{count} were drawn, with room for {room}; lower it")
    places = _places(generator, low, high, count, taken)
    if len(places) < count:
        raise _refusal(scenario, index, f"no room for {count} places in {low!r}..{high!r} nm")
    if isinstance(group.transmission, TransmissionRange):
        bounds = (group.transmission.low, group.transmission.high)
        transmissions = generator.uniform(*bounds, count).tolist()
    else:
        transmissions = [group.transmission] * count
    return [
        Point(
            position_nm=place,
            transmission=transmission,
            angular=group.angular,
            reflection=group.reflection,
            group=index,
        )
        for place, transmission in zip(places, transmissions, strict=True)
    ]


def _places(
    generator: np.random.Generator, low: float, high: float, count: int, taken: set[float]
) -> list[float]:
    """Draw places strictly inside a stretch that differ from all in `taken`, which grows."""
    places: list[float] = []
    for _ in range(_ATTEMPTS):
        for place in generator.uniform(low, high, count - len(places)).tolist():
            if low < place < high and place not in taken:
                taken.add(place)
                places.append(place)
        if len(places) == count:
            break
    return places


def _refusal(scenario: Scenario, index: int, message: str) -> ScenarioError:
    key = f"scattering.random[{index}]"
    return ScenarioError([Fault(f"scenario '{scenario.name}'", None, key, None, "", message)])
