"""The closed forms that apply to a scenario in two or three dimensions.

Nothing may depend on energy and nothing relax: else only the ballistic resistance is listed. Then T
is a number, and everything follows from it as in one dimension.
"""

from collections.abc import Iterator
from dataclasses import replace
from functools import cached_property, partial
from typing import NamedTuple

import numpy as np

from carriersim.constants import BOLTZMANN_J_PER_K, ELEMENTARY_CHARGE_C
from carriersim.limits import selecting
from carriersim.limits.conductor import Conductor, Law, read
from carriersim.limits.formulas import LORENZ_NUMBER, point_resistance
from carriersim.limits.grains import (
    grain_alpha,
    mayadas_shatzkes_ratio,
    planes_parts,
    planes_transmission,
)
from carriersim.limits.landauer import contact_heat_W
from carriersim.limits.listing import (
    LANDAUER,
    MOST_LISTED,
    OHM,
    SERIES,
    THERMAL,
    WIEDEMANN_FRANZ,
    ballistic,
    conduction,
    heat,
)
from carriersim.limits.number_transport import has_coupled_probe
from carriersim.limits.rows import Limit, of_result
from carriersim.limits.slab import (
    BACKSCATTER,
    interface_part,
    slab_profile,
    slab_transmission,
)
from carriersim.limits.thermal import without_current
from carriersim.limits.walls import (
    film_conductivity_ratio,
    ribbon_conductivity_ratio,
    wire_conductivity_ratio,
)

SLAB = {
    2: "integral equation on a circle, as Heaslet & Warming 1965 on a sphere",
    3: "Heaslet & Warming, Int. J. Heat Mass Transfer 8 (1965) 979",
}
FILM = "Fuchs 1938; Sondheimer, Adv. Phys. 1 (1952) 1"
RIBBON = "Fuchs 1938, in two dimensions"
WIRE = "MacDonald & Sarginson, Proc. R. Soc. A 203 (1950) 223"
GRAINS = "Mayadas & Shatzkes, Phys. Rev. B 1 (1970) 1382"

FEWEST_PLANES = 10  # for which the channel counts as a long one with many planes
_UOHM_CM = 0.1  # micro-ohm cm in an ohm nm


def space_limits(scenario) -> Iterator[Limit]:
    """The closed forms of a scenario in d = 2 or 3."""
    case = _Case(scenario)
    yield ballistic(case.transparent)
    relaxes = has_coupled_probe(scenario) or bool(scenario.relaxation.mechanisms)
    if relaxes or read(scenario).depends_on_energy:
        return
    yield from _exact(case)
    yield from _simple(case)
    yield from _any_transmission(case)
    yield from _long_channel(case)


def space_profile(scenario, x_nm):
    """(mu_plus, mu_minus) in d = 2 and 3: meV, or per unit of the bias when the bias is 0.

    Where bulk scattering is alone, see slab_profile; otherwise ValueError. x_nm of any shape.
    """
    case = _Case(scenario)
    inelastic = has_coupled_probe(scenario) or bool(scenario.relaxation.mechanisms)
    if inelastic or case.rough or case.planes or read(scenario).depends_on_energy:
        raise ValueError("potentials have a closed form for bulk scattering alone")
    counted = np.array([case.thickness_up_to(x) for x in np.ravel(x_nm)]).reshape(np.shape(x_nm))
    fraction = counted / case.thickness if case.thickness else 0.0 * counted
    level = scenario.contacts.bias_mV or 1.0
    right, left = slab_profile(case.thickness, case.dimension, fraction)
    return level * right, level * left


class _Case:
    """A scenario, and what the closed forms ask about it."""

    def __init__(self, scenario):
        self.scenario = scenario
        self.channel = scenario.channel
        self.dimension = scenario.channel.dimension
        self.length_nm = scenario.channel.length_nm

    @cached_property
    def planes(self):
        """Planes that reflect, by place; the interfaces are at 0 and L."""
        contacts, points = self.scenario.contacts, self.scenario.scattering.points
        places = [(0.0, contacts.left), (self.length_nm, contacts.right)]
        places += [(point.position_nm, point) for point in points]
        return [
            _Plane(place_nm, plane.transmission, *_kind(plane))
            for place_nm, plane in sorted(places, key=lambda place: place[0])
            if plane.transmission != 1.0
        ]

    @cached_property
    def inside(self):
        """Those of the planes that are no interfaces."""
        return [plane for plane in self.planes if 0.0 < plane.place_nm < self.length_nm]

    @cached_property
    def rough(self):
        """(size_nm, specularity) of each pair of faces that scatters."""
        sizes = (self.channel.width_nm, self.channel.height_nm)
        pairs = zip(sizes, self.channel.face_specularity, strict=True)
        return [(size, p) for size, p in pairs if size is not None and p < 1.0]

    @cached_property
    def rates(self):
        """{name: 1/l in 1/nm} of the channel outside sections."""
        return self._rates(self.scenario.scattering)

    @cached_property
    def thickness(self):
        """Mean free paths in the channel."""
        return self.thickness_up_to(self.length_nm)

    def thickness_up_to(self, x_nm):
        """Mean free paths between the left contact and x."""
        sections = self.scenario.scattering.sections
        spans = [(min(s.from_nm, x_nm), min(s.to_nm, x_nm), s) for s in sections]
        rest = max(0.0, x_nm - sum(to_nm - from_nm for from_nm, to_nm, _ in spans))
        total = sum(self.rates.values()) * rest
        for from_nm, to_nm, section in spans:
            total += sum(self._rates(section).values()) * (to_nm - from_nm)
        return total

    @property
    def uniform(self):
        """Whether it scatters, and everywhere alike."""
        return bool(self.rates) and not self.scenario.scattering.sections

    @property
    def path_nm(self):
        """Mean free path outside sections, where there is one."""
        return 1.0 / sum(self.rates.values())

    @cached_property
    def transparent(self):
        """A Conductor with the modes, but without scattering."""
        return self.as_conductor(1.0)

    def as_conductor(self, transmission):
        """A Conductor of this transmission, for everything that follows from it alone."""
        channel = self.channel.model_copy(update={"modes": self.channel.resolved_modes})
        return Conductor(
            scenario=self.scenario.model_copy(update={"channel": channel}),
            laws=(Law(),),
            place_nm=np.array([0.0, self.length_nm]),
            point_law=np.zeros(2, int),
            point_amount=np.array([float(point_resistance(transmission)), 0.0]),
            stretches=(),
        )

    def _rates(self, level):
        """{name: 1/l} of the paths given for the channel or a section; rates add."""
        given, factor = level.mean_free_path_nm, 1.0
        if given is None:
            given, factor = level.backscatter_path_nm, BACKSCATTER[self.dimension]
        if given is None:
            return {}
        if isinstance(given, tuple):
            return {path.name: rate for path in given for rate in self._rates(path).values()}
        return {None: factor / given}


class _Plane(NamedTuple):
    place_nm: float
    transmission: float  # at normal incidence if it is a tunnel barrier
    tunnel: bool
    diffuse: bool


def _kind(plane):
    return plane.angular == "tunnel", plane.reflection == "diffuse"


# --- exact for a channel of finite length


def _exact(case):
    """What follows from T where it is known: without walls, for bulk scattering or planes alone."""
    if case.rough:
        return
    if not case.thickness:
        if _angles_apart(case.planes):
            yield from _of_planes(case)
    elif not case.planes:
        yield from _of_slab(case)


def _of_slab(case):
    d, source = case.dimension, SLAB[case.dimension]
    transmission = slab_transmission(case.thickness, d)
    interface = interface_part(case.thickness, d)
    yield from _transport(case, transmission, "slab between black contacts", source)
    yield from _interfaces(case, interface, source)
    if case.uniform:
        inside = (1.0 / transmission - 2.0 * interface) / sum(case.rates.values())
        for mechanism, rate in case.rates.items():
            label = f", {mechanism}" if mechanism else ""
            select = partial(selecting.piece, 0.0, case.length_nm, mechanism)
            name = f"0 to {case.length_nm:g} nm{label}"
            yield from _part(case, name, rate * inside, source, select)


def _angles_apart(planes):
    """Whether each |mu| keeps to itself, or all have the same occupation.

    Diffuse reflection mixes angles. That does not matter where no transmission depends on them, nor
    at a single plane.
    """
    if any(plane.tunnel for plane in planes) and any(plane.diffuse for plane in planes):
        return len(planes) == 1
    return True


def _of_planes(case):
    planes, source = case.planes, SERIES if case.planes else LANDAUER
    transmissions, tunnel = _columns(planes)
    law = "series law for each angle" if any(tunnel) else "series law"
    transmission = planes_transmission(transmissions, tunnel, case.dimension)
    interface, parts = planes_parts(transmissions, tunnel, case.dimension)
    yield from _transport(case, transmission, law, source)
    yield from _interfaces(case, interface, source)
    if len(planes) > MOST_LISTED:
        select = partial(selecting.sum_of_kind, "point")
        yield from _part(case, f"{len(planes)} planes, sum", parts.sum(), source, select)
        return
    barriers = {0.0: "left contact barrier", case.length_nm: "right contact barrier"}
    for plane, part in zip(planes, parts, strict=True):
        name = barriers.get(plane.place_nm, f"plane at {plane.place_nm:g} nm")
        select = partial(selecting.part_at, "point", plane.place_nm)
        yield from _part(case, name, part, source, select)


def _columns(planes):
    return [plane.transmission for plane in planes], [plane.tunnel for plane in planes]


def _transport(case, transmission, law, source):
    """Current, conductance, heat of a channel of this transmission."""
    conductor = case.as_conductor(transmission)
    for row in conduction(conductor, law):
        yield replace(row, source=source)
    yield from heat(conductor, *contact_heat_W(conductor), THERMAL)
    name, quantity = "thermal conductance at I = 0", "thermal.conductance_W_per_K"
    yield of_result(name, quantity, without_current(conductor)[1], THERMAL)


def _interfaces(case, part, source):
    for name, place_nm in (("left interface", 0.0), ("right interface", case.length_nm)):
        select = partial(selecting.part_at, "interface", place_nm)
        yield from _part(case, name, part, source, select)


def _part(case, name, part, source, select):
    """A part of the resistance, given in units of R_B; there are none at unequal temperatures."""
    if case.transparent.same_temperature:
        expected = float(part) * _ballistic_ohm(case)
        yield Limit(name, "breakdown.resistance_ohm", expected, source, "exact", select)


def _ballistic_ohm(case):
    return ballistic(case.transparent).expected


def _any_transmission(case):
    """What holds for any transmission that does not depend on energy."""
    if case.transparent.mean_K == 0.0:
        return
    name, quantity = "Seebeck coefficient at I = 0", "thermal.seebeck_V_per_K"
    scale = BOLTZMANN_J_PER_K / ELEMENTARY_CHARGE_C
    yield of_result(name, quantity, 0.0, THERMAL, scale=scale)
    yield Limit(
        "Wiedemann-Franz ratio K/(G T)",
        "thermal.conductance_W_per_K / (conductance_S * T), W ohm/K^2",
        LORENZ_NUMBER,
        WIEDEMANN_FRANZ,
        "exact",
        partial(selecting.wiedemann_franz, case.transparent.mean_K),
    )


# --- long channels, and what their formulas give for a finite one


def _simple(case):
    """R/R_B = 1 + L/lam + sum of (1 - T_i)/T_i, which leaves out how these depend on each other.

    lam is that of an endless channel with walls and many planes; else T_i of a tunnel barrier is
    that of the flux that the contacts emit.
    """
    exact = len(case.planes) < 2 or not any(plane.tunnel for plane in case.planes)
    if (not case.thickness and exact) or not case.transparent.same_temperature:
        return
    endless, planes = _endless(case), case.planes
    if endless is None and case.rough:
        return
    stretch = case.thickness / BACKSCATTER[case.dimension]
    if endless is not None:
        stretch /= endless.ratio
        planes = [plane for plane in planes if plane not in case.inside]
    resistance = 1.0 + stretch
    for plane in planes:
        own = planes_transmission([plane.transmission], [plane.tunnel], case.dimension)
        resistance += float(point_resistance(own))
    name = "resistance, ballistic + long channel + planes"
    expected = resistance * _ballistic_ohm(case)
    yield of_result(name, "resistance_ohm", expected, SERIES, "approximate")


def _long_channel(case):
    """The rows of result.long_channel."""
    endless = _endless(case)
    if endless is None:
        return
    backscatter_nm = BACKSCATTER[case.dimension] * case.path_nm
    ohm_per_nm = _ballistic_ohm(case) / backscatter_nm
    rows = [
        ("resistivity over bulk", "resistivity_ratio", 1.0 / endless.ratio),
        ("backscattering path", "backscatter_path_nm", backscatter_nm * endless.ratio),
    ]
    if case.dimension == 2 and case.channel.width_nm is not None:
        sheet_ohm = ohm_per_nm * case.channel.width_nm
        rows.append(("sheet resistance", "sheet_ohm", sheet_ohm / endless.ratio))
    if case.channel.area_nm2 is not None:
        given = case.channel.bulk_resistivity_uohm_cm
        bulk = ohm_per_nm * case.channel.area_nm2 * _UOHM_CM if given is None else given
        rows.append(("resistivity", "resistivity_uohm_cm", bulk / endless.ratio))
    for label, key, expected in rows:
        name = f"{label}, {endless.name}"
        yield of_result(name, f"long_channel.{key}", expected, endless.source, endless.holds)


class _Endless(NamedTuple):
    ratio: float  # sigma/sigma0
    name: str
    source: str
    holds: str = "exact"


def _endless(case):
    """An endless channel of the same kind; None where there is no formula."""
    if not case.uniform:
        return None
    if case.inside:
        many = len(case.inside) >= FEWEST_PLANES
        if not many or case.rough or any(plane.diffuse for plane in case.inside):
            return None
        return _Endless(_many_planes(case), "many planes", GRAINS, "approximate")
    if not case.rough:
        return _Endless(1.0, "bulk alone", OHM)
    (kappa, p), *other = [(size_nm / case.path_nm, p) for size_nm, p in case.rough]
    if case.dimension == 2:
        return _Endless(float(ribbon_conductivity_ratio(kappa, p)), "ribbon", RIBBON)
    if not other:
        return _Endless(float(film_conductivity_ratio(kappa, p)), "film", FILM)
    ((second, q),) = other
    return _Endless(wire_conductivity_ratio(kappa, second, p, q), "rectangular wire", WIRE)


def _many_planes(case):
    """sigma/sigma0 of bulk scattering with planes that reflect like mirrors."""
    transmissions, tunnel = _columns(case.inside)
    resistance, spacing_nm = point_resistance(transmissions), case.length_nm / len(tunnel)
    means = np.mean(np.where(tunnel, resistance, 0.0)), np.mean(np.where(tunnel, 0.0, resistance))
    alpha, constant = (grain_alpha(case.path_nm, spacing_nm, mean) for mean in means)
    return float(mayadas_shatzkes_ratio(alpha, case.dimension, constant))
