"""Random scatterers: drawn once from their own seed, then as good as given."""

import numpy as np

from carriersim.faults import Fault, ScenarioError
from carriersim.scenario import Scenario
from carriersim.schema import MAX_POINTS, Point, RandomGroup, TransmissionRange

# Sets this stream apart from every other use of the same seed.
_STREAM = 0xD150_4DE4
_ATTEMPTS = 100


def draw_random_points(scenario: Scenario) -> Scenario:
    """Return the scenario with its random scatterers drawn.

    `scattering.points` then lists given and drawn points by position, and `scattering.random` is
    empty. The draw depends on the disorder seed (the seed unless given) and on `scattering` and the
    length of the channel alone; each group has its own stream.

    Raises:
        ScenarioError: too many scatterers were drawn, or a stretch is too short for its number.
    """
    scattering = scenario.scattering
    if not scattering.random:
        return scenario
    seed = scenario.simulation.resolved_disorder_seed
    points = list(scattering.points)
    taken = {point.position_nm for point in (*points, *scenario.probes)}
    for index, group in enumerate(scattering.random):
        sequence = np.random.SeedSequence(seed, spawn_key=(_STREAM, index))
        generator = np.random.Generator(np.random.PCG64(sequence))
        points += _draw(scenario, index, group, generator, taken, MAX_POINTS - len(points))
    points.sort(key=lambda point: point.position_nm)
    drawn = scattering.model_copy(update={"points": tuple(points), "random": ()})
    return scenario.model_copy(update={"scattering": drawn})


def _draw(
    scenario: Scenario,
    index: int,
    group: RandomGroup,
    generator: np.random.Generator,
    taken: set[float],
    room: int,
) -> list[Point]:
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
