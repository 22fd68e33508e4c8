"""Random scatterers: where they fall, what they depend on, how they are distributed."""

import math

import numpy as np
import pytest

from carriersim.disorder import draw_random_points
from carriersim.keypaths import plain
from carriersim.memory_check import cuts
from carriersim.scenario import ScenarioError, read_text, to_yaml
from carriersim.yamlfile import Document

START = "channel: {length_nm: %s}\ncontacts: {bias_mV: 1, temperature_K: 4}\nscattering: {%s}\n"


def drawn(random: str, **changes):
    changes = {key.replace("__", "."): value for key, value in changes.items()}
    points = "points: [{position_nm: 100, transmission: 0.5}]"
    text = START % (200, f"{points}, random: [{random}]")
    return draw_random_points(read_text(text, changes=changes))


def test_drawn_points():
    random = "{count: 5, transmission: 0.5}, {count: 2, transmission: 1, from_nm: 10, to_nm: 20}"
    scenario = drawn(random)
    places = [point.position_nm for point in scenario.scattering.points]
    assert places == sorted(places)
    assert len(set(places)) == 8
    assert 100.0 in places
    assert all(0 < place < 200 for place in places)
    strong = [p.position_nm for p in scenario.scattering.points if p.transmission == 1]
    assert len(strong) == 2
    assert all(10 < place < 20 for place in strong)
    assert scenario.scattering.undrawn == ()
    assert draw_random_points(scenario) is scenario
    assert read_text(to_yaml(scenario)) == scenario


def test_groups_are_remembered():
    random = "{count: 5, transmission: 0.5}, {count: 2, transmission: 1, from_nm: 10, to_nm: 20}"
    scattering = drawn(random).scattering
    assert [group.drawn for group in scattering.random] == [True, True]
    assert [group.count for group in scattering.random] == [5, 2]
    groups = {number: [] for number in (None, 0, 1)}
    for point in scattering.points:
        groups[point.group].append(point)
    assert [point.position_nm for point in groups[None]] == [100.0]
    assert [point.transmission for point in groups[0]] == [0.5] * 5
    assert [point.transmission for point in groups[1]] == [1.0] * 2
    assert all(10 < point.position_nm < 20 for point in groups[1])


def test_saved_yaml_of_a_draw():
    text = to_yaml(drawn("{count: 1, transmission: 0.5, to_nm: 50}"))
    begin, end = text.index("scattering:"), text.index("relaxation:")
    first, second = text[begin:end].splitlines()[3:5]
    assert first.endswith("transmission: 0.5, angular: constant, reflection: specular, group: 0}")
    assert second.endswith("transmission: 0.5, angular: constant, reflection: specular}")
    assert text[begin:end].endswith(
        "  random:\n    - {count: 1, transmission: 0.5, angular: constant, reflection: specular, "
        "to_nm: 50.0, drawn: true}\n"
    )


def test_drawn_scatterers_count_once():
    """For the most that a scenario may hold, and for the cells that they cut."""
    scenario = drawn("{count: 6000, transmission: 0.5}, {density_per_um: 15000, transmission: 1}")
    assert read_text(to_yaml(scenario)) == scenario
    undrawn = read_text(START % (200, "random: [{density_per_um: 1000, transmission: 1}]"))
    assert cuts(Document("s.yaml", plain(undrawn))) == 201
    points = len(scenario.scattering.points)
    assert cuts(Document("s.yaml", plain(scenario))) == points + 1


def test_a_group_added_after_the_draw():
    """What was drawn before stays, and the new group is as if all had been drawn together."""
    first, second = "{count: 5, transmission: 0.5}", "{density_per_um: 40, transmission: 0.8}"
    together = drawn(f"{first}, {second}")
    assert {point.group for point in together.scattering.points} == {None, 0, 1}
    both = [*drawn(first).scattering.random, together.scattering.random[1]]
    both[1] = both[1].model_copy(update={"drawn": False})
    later = drawn(first).replace({"scattering.random": both})
    assert draw_random_points(later) == together


def test_a_drawn_group_that_is_taken_away():
    with pytest.raises(ScenarioError) as caught:
        drawn("{count: 2, transmission: 0.5}").replace({"scattering.random": []})
    lines = str(caught.value).splitlines()
    assert len(lines) == 2
    assert all(
        "].group: found 0; there is no such group; allowed: no such key, or" in x for x in lines
    )


def test_draw_depends_on_the_disorder_seed_alone():
    random = "{count: 5, transmission: {low: 0.1, high: 0.2}}"
    first = drawn(random).scattering
    assert drawn(random, simulation__cells=9, contacts__bias_mV=7).scattering == first
    assert drawn(random, simulation__seed=4, simulation__disorder_seed=1).scattering == first
    assert drawn(random, simulation__seed=4).scattering != first
    assert drawn(random, simulation__disorder_seed=4).scattering != first
    # A further group leaves those before it where they are.
    more = drawn(f"{random}, {{count: 3, transmission: 1}}").scattering
    assert set(first.points) < set(more.points)


def test_drawn_numbers_and_transmissions_are_distributed_as_asked():
    numbers, places, transmissions = [], [], []
    random = "{density_per_um: 10, transmission: {low: 0.2, high: 0.6}, from_nm: 500, to_nm: 1500}"
    scenario = read_text(START % (2000, f"random: [{random}]"))
    for seed in range(2000):
        given_seed = scenario.simulation.model_copy(update={"seed": seed})
        found = draw_random_points(scenario.model_copy(update={"simulation": given_seed}))
        numbers.append(len(found.scattering.points))
        places += [point.position_nm for point in found.scattering.points]
        transmissions += [point.transmission for point in found.scattering.points]
    # Mean and variance of a Poisson number of mean 10: errors sqrt(10/n), sqrt((10 + 200)/n).
    assert abs(np.mean(numbers) - 10) < 4 * math.sqrt(10 / 2000)
    assert abs(np.var(numbers) - 10) < 4 * math.sqrt(210 / 2000)
    for values, low, high in ((places, 500, 1500), (transmissions, 0.2, 0.6)):
        scaled = (np.array(values) - low) / (high - low)
        assert scaled.min() > 0
        assert scaled.max() < 1
        assert abs(scaled.mean() - 1 / 2) < 4 * math.sqrt(1 / 12 / scaled.size)
        assert abs((scaled**2).mean() - 1 / 3) < 4 * math.sqrt(4 / 45 / scaled.size)


def test_no_room_for_the_places():
    end = math.nextafter(math.nextafter(50.0, 60.0), 60.0)
    random = f"{{count: 2, transmission: 1, from_nm: 50, to_nm: {end!r}}}"
    with pytest.raises(ScenarioError, match=r"random\[0\]: no room for 2 places in 50.0"):
        drawn(random)
    assert len(drawn(random.replace("2", "1", 1)).scattering.points) == 2


def test_more_points_drawn_than_a_saved_scenario_may_hold():
    text = START % (1000, "random: [{density_per_um: 10000, transmission: 1}]")
    with pytest.raises(ScenarioError, match="were drawn, with room for 10000"):
        for seed in range(20):
            draw_random_points(read_text(text, changes={"simulation.seed": seed}))
