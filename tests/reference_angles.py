"""Reference solutions in two and three dimensions: a deterministic solver and a plain Monte Carlo.

Written from the equations alone; they share no code with the package. Lengths in nm. One energy:
the left contact is full, the right one empty. With mu = |cos| of the angle to the channel,

    +- mu df±(x, mu)/dx = (fm(x) - f±(x, mu))/l,    fm = (<f+> + <f->)/2,

<> the mean over the solid angle of a half space: int dmu (d = 3), (2/pi) int dtheta (d = 2). A
plane passes T, or mu^2/(mu^2 + gamma) with gamma = (1-T)/T, in the same direction; it reflects like
a mirror, or diffusely: f = (1-T(mu)) int mu (1-T) f_in / int mu (1-T). Planes at 0 and L are
interfaces. f- is f of left movers at the same mu.

`solve`: no walls, or mirrors, which is the same. Discrete ordinates on Gauss points of s, with
mu = s^2 (d = 3) or an angle to the plane of (pi/2) s^2 (d = 2), because f is not smooth at mu = 0.
Along the channel everything is exact: at N directions the equations of a homogeneous piece have 2N
solutions in closed form (Chandrasekhar, Radiative Transfer, 1950), namely a constant,
f± = x/l ∓ mu, and exp(∓kx/l) with f± = 1/(1 ∓ k mu), where the k are the roots of
<1/(1 - k^2 mu^2)> = 1. They give matrices of reflection and transmission of the piece; pieces and
planes are joined from left to right by f+ = P f- + h, which is stable for any length. The number of
directions is thus the only approximation. (f- is f of left movers at the same mu.)

`plain_wire`: side walls, by following carriers, all at once in arrays.
"""

from dataclasses import dataclass, replace
from functools import cached_property
from itertools import pairwise
from math import inf, pi
from typing import NamedTuple

import numpy as np
from numpy.polynomial import legendre

# Power of s. A term mu ln mu of f becomes s^4 ln s under the integral.
GRADING = 2
BISECTIONS = 100


@dataclass(frozen=True)
class Plane:
    """Plane across the channel; transmission: of a tunnel barrier the one at normal incidence."""

    position: float
    transmission: float
    tunnel: bool = False
    diffuse: bool = False

    def passes(self, cosine):
        """Transmission at these cosines."""
        return 1.0 - self.reflects(cosine)

    def reflects(self, cosine):
        """1 - T at these cosines."""
        back = 1.0 - self.transmission
        if not self.tunnel:
            return np.full(np.shape(cosine), back)
        return back / (back + self.transmission * np.square(cosine))


@dataclass(frozen=True)
class Section:
    """Part of the channel with a mean free path of its own; None: ballistic."""

    start: float
    end: float
    mean_free_path: float | None


@dataclass(frozen=True)
class Case:
    """What `solve` solves. mean_free_path holds outside the sections; None: ballistic."""

    length: float
    dimension: int
    mean_free_path: float | None = None
    sections: tuple = ()
    planes: tuple = ()
    directions: int = 32  # of each half space

    @property
    def mirrored(self):
        """The same channel seen from the other end."""
        turned = [replace(p, position=self.length - p.position) for p in reversed(self.planes)]
        sections = [
            replace(s, start=self.length - s.end, end=self.length - s.start) for s in self.sections
        ]
        return replace(self, planes=tuple(turned), sections=tuple(sections))


def solve(case):
    """Solution of a Case."""
    if case.dimension not in (2, 3) or not case.length > 0:
        raise ValueError(f"{case}: dimension must be 2 or 3, and length > 0")
    return Solution(case, _Directions(case.dimension, case.directions))


class Solution:
    """f+ and f- at any place. Fluxes are parts of what the left contact emits.

    side: at a plane, whether towards the "left" or the "right" of it; elsewhere both are the same.
    (0, "right") and (L, "left") lie inside the interfaces.
    """

    def __init__(self, case, directions):
        self.case = case
        self.directions = directions
        self._elements = _elements(case)
        self._places = [0.0]  # of the cuts between elements
        for one in self._elements:
            self._places.append(one.end if isinstance(one, Section) else one.position)
        matrices = [directions.matrices(one) for one in self._elements]
        self._plus, self._minus = _join(matrices, directions.count)

    @property
    def transmission(self):
        """Flux into the right contact, as part of what the left one emits."""
        return self.directions.flux @ self._plus[-1]

    def occupations(self, x, side="left"):
        """f+ and f- at the cosines `directions.cosine`."""
        at = self._cut(x, side)
        if at is not None:
            return self._plus[at], self._minus[at]
        at = next(k for k, place in enumerate(self._places) if place > x) - 1
        one = self._elements[at]
        # Cut the piece in two and join: plus = t1 plus(left) + r1 minus, and so on.
        r1, t1 = self.directions.matrices(replace(one, end=x))
        r2, t2 = self.directions.matrices(replace(one, start=x))
        come, back = t1 @ self._plus[at], t2 @ self._minus[at + 1]
        plus = np.linalg.solve(np.eye(come.size) - r1 @ r2, come + r1 @ back)
        return plus, back + r2 @ plus

    def f_plus(self, x, side="left"):
        """Mean over the solid angle of right-moving states."""
        return self.directions.weight @ self.occupations(x, side)[0]

    def f_minus(self, x, side="left"):
        """Mean over the solid angle of left-moving states."""
        return self.directions.weight @ self.occupations(x, side)[1]

    def current(self, x, side="left"):
        """Net flux: the same everywhere, and the transmission."""
        plus, minus = self.occupations(x, side)
        return self.directions.flux @ (plus - minus)

    def fluxes(self, x, edges, side="left"):
        """Flux to the right and to the left, (2, D), in classes of the cosine between D+1 edges."""
        return np.array([self.directions.flux_between(f, edges) for f in self.occupations(x, side)])

    def _cut(self, x, side):
        if side not in ("left", "right") or not 0 <= x <= self.case.length:
            raise ValueError(f"{x}, {side}: not a place in the channel")
        found = [k for k, place in enumerate(self._places) if place == x]
        if not found:
            return None
        return found[0 if side == "left" else -1]


def _elements(case):
    """Pieces (Section) and planes from left to right."""
    edges = {0.0, case.length}
    edges.update(x for s in case.sections for x in (s.start, s.end))
    edges.update(p.position for p in case.planes)
    edges = sorted(edges)
    if edges[0] < 0.0 or edges[-1] > case.length:
        raise ValueError(f"{case}: a plane or section outside the channel")
    elements = []
    for start, end in zip(edges, [*edges[1:], None], strict=True):
        elements += [p for p in case.planes if p.position == start]
        if end is not None:
            path = case.mean_free_path
            for section in case.sections:
                if section.start <= start and end <= section.end:
                    path = section.mean_free_path
            elements.append(Section(start, end, path))
    return elements


def _join(matrices, size):
    """f+ and f- at every cut, from reflection and transmission of what lies between.

    Left to right: f+ = P f- + h at each cut. Then back from the empty right contact.
    """
    reflected, given = np.zeros((size, size)), np.ones(size)
    steps = []
    for r, t in matrices:
        inner = np.linalg.inv(np.eye(size) - reflected @ r)
        from_left, from_right = inner @ given, inner @ (reflected @ t)
        steps.append((from_left, from_right))
        reflected, given = r + t @ from_right, t @ from_left
    plus, minus = [given], [np.zeros(size)]
    for (from_left, from_right), (r, t) in zip(reversed(steps), reversed(matrices), strict=True):
        plus.append(from_left + from_right @ minus[-1])
        minus.append(t @ minus[-1] + r @ plus[-1])
    return plus[::-1], minus[::-1]


class _Directions:
    """Discrete directions of a half space, and what they do in pieces and at planes."""

    def __init__(self, dimension, count):
        self.dimension, self.count = dimension, count
        node, weight = legendre.leggauss(count)
        s = 0.5 * (1.0 + node)
        self.cosine = self._cosine(s)  # ascending
        self.weight = 0.5 * weight * GRADING * s ** (GRADING - 1)  # of the solid angle, sum 1
        self.flux = self.weight * self.cosine / (self.weight @ self.cosine)  # of what is emitted
        self._known = {}

    def _cosine(self, s):
        return s**GRADING if self.dimension == 3 else np.sin(0.5 * pi * s**GRADING)

    def matrices(self, element):
        """Reflection and transmission, both the same from the left and from the right."""
        if isinstance(element, Plane):
            key = replace(element, position=0.0)
        elif element.mean_free_path is None:
            key = 0.0
        else:
            # Rounded, so that equal pieces are known again.
            key = float(f"{(element.end - element.start) / element.mean_free_path:.12e}")
        if key not in self._known:
            made = self._plane(element) if isinstance(element, Plane) else self._piece(key)
            self._known[key] = made
        return self._known[key]

    def _plane(self, plane):
        back = plane.reflects(self.cosine)
        passing = np.diag(1.0 - back)
        if not plane.diffuse or not np.any(back):
            return np.diag(back), passing
        arriving = self.flux * back
        return np.outer(back, arriving / arriving.sum()), passing

    def _piece(self, thickness):
        """The equations' own solutions, even and odd about the middle, in mean free paths.

        Columns: the constant or the linear one, then the exponentials. `into`: f+ at the left end;
        `out`: f- there; at the right end the same, or the opposite.
        """
        if thickness == 0.0:
            return np.zeros((self.count, self.count)), np.eye(self.count)
        plus, minus, rates = self._modes
        far = np.exp(-rates * thickness)
        cosine, one = self.cosine[:, None], np.ones((self.count, 1))
        halves = []
        for first_in, first_out, sign in (
            (one, one, 1.0),
            (-0.5 * thickness - cosine, -0.5 * thickness + cosine, -1.0),
        ):
            into = np.hstack([first_in, plus + sign * far * minus])
            out = np.hstack([first_out, minus + sign * far * plus])
            halves.append(np.linalg.solve(into.T, out.T).T)
        even, odd = halves
        return 0.5 * (even + odd), 0.5 * (even - odd)

    @cached_property
    def _modes(self):
        """f+ and f- of the exponentials that decrease to the right, (N, N-1), and their rates k.

        <1/(1 - k^2 mu^2)> = 1 is <mu^2/(1 - k^2 mu^2)> = 0 without the root k = 0. Between two
        poles there is one root, close to the pole of the smaller cosine c: delta = 1 - k^2 c^2.
        """
        square = self.cosine**2
        pole, last = square[:-1], square[1:]
        difference = (pole - square[:, None]) / pole  # (mu, root)
        low, high = np.zeros(pole.size), 1.0 - pole / last
        for _ in range(BISECTIONS):
            delta = 0.5 * (low + high)
            gap = difference + delta * square[:, None] / pole  # 1 - k^2 mu^2
            positive = (self.weight * square) @ (1.0 / gap) > 0.0
            low, high = np.where(positive, delta, low), np.where(positive, high, delta)
        rates = np.sqrt((1.0 - delta) / pole)
        slant = rates * self.cosine[:, None]
        plus, minus = (1.0 + slant) / gap, (1.0 - slant) / gap
        size = np.abs(plus).max(axis=0)
        return plus / size, minus / size, rates

    def flux_between(self, f, edges):
        """Flux of an occupation in classes of the cosine, by interpolation in s, (D,)."""
        node, weight = legendre.leggauss(self.count)
        order = np.arange(self.count)
        terms = (order + 0.5) * ((weight * f) @ legendre.legvander(node, self.count - 1))
        angle = np.asarray(edges) if self.dimension == 3 else np.arcsin(edges) / (0.5 * pi)
        ends = np.sort(angle) ** (1.0 / GRADING)
        fluxes = []
        for low, high in pairwise(ends):
            s = 0.5 * (low + high) + 0.5 * (high - low) * node
            share = 0.5 * (high - low) * weight * GRADING * s ** (GRADING - 1)
            fluxes.append(share * self._cosine(s) @ legendre.legval(2.0 * s - 1.0, terms))
        emitted = self.weight @ self.cosine
        ascending = np.asarray(edges)[0] < np.asarray(edges)[-1]
        return np.array(fluxes if ascending else fluxes[::-1]) / emitted


# --- side walls -------------------------------------------------------------------------------


class Wire(NamedTuple):
    """What `plain_wire` finds, each with its standard error; path: mean path in the wire, nm."""

    transmission: float
    error: float
    path: float
    path_error: float


def plain_wire(
    length,
    width,
    height=None,
    specularity=0.0,
    mean_free_path=inf,
    planes=(),
    histories=200_000,
    seed=1,
):
    """Follow carriers from the left contact through a wire with walls.

    height None: d = 2. specularity: a number, or one for the faces of the width and one for those
    of the height. planes: as for Case, from left to right.
    """
    random = np.random.default_rng(seed)
    sizes = np.array([width] if height is None else [width, height], float)
    mirror = np.broadcast_to(specularity, sizes.shape)
    d = 1 + sizes.size
    nodes = np.array([0.0, *(p.position for p in planes), length])
    n = histories
    place = np.zeros((d, n))
    place[1:] = sizes[:, None] * random.random((d - 1, n))
    direction = lambert(random, d, n)
    free = mean_free_path * random.exponential(size=n)
    piece = np.zeros(n, int)  # between nodes[piece] and nodes[piece + 1]
    path = np.zeros(n)
    who = np.arange(n)
    transmitted, paths = 0, np.zeros(histories)
    while who.size:
        # Distances: to a collision, to the node ahead, to the walls.
        n = who.size
        right = direction[0] > 0.0
        node = piece + right
        target = np.empty((d, n))
        target[0] = nodes[node]
        target[1:] = np.where(direction[1:] > 0.0, sizes[:, None], 0.0)
        distance = np.vstack([free, np.maximum((target - place) / direction, 0.0)])
        first = np.argmin(distance, axis=0)
        step = distance[first, np.arange(n)]
        place += step * direction
        path += step
        free = free - step
        axis = first - 1
        stopped = np.flatnonzero(axis >= 0)
        place[axis[stopped], stopped] = target[axis[stopped], stopped]

        hit = np.flatnonzero(first == 0)
        direction[:, hit] = isotropic(random, d, hit.size)
        free[hit] = mean_free_path * random.exponential(size=hit.size)

        for face in range(1, d):
            hit = np.flatnonzero(axis == face)
            diffuse = random.random(hit.size) >= mirror[face - 1]
            direction[face, hit[~diffuse]] *= -1.0
            hit = hit[diffuse]
            inward = -np.sign(direction[face, hit])
            fresh = lambert(random, d, hit.size)
            fresh[0] *= inward
            fresh[[0, face]] = fresh[[face, 0]]
            direction[:, hit] = fresh

        for k, plane in enumerate(planes, 1):
            hit = np.flatnonzero((axis == 0) & (node == k))
            passed = random.random(hit.size) < plane.passes(np.abs(direction[0, hit]))
            piece[hit[passed]] += np.where(right[hit[passed]], 1, -1)
            hit = hit[~passed]
            if not plane.diffuse:
                direction[0, hit] *= -1.0
                continue
            fresh = _thrown_back(random, d, hit.size, plane)
            fresh[0] *= np.where(right[hit], -1.0, 1.0)
            direction[:, hit] = fresh

        out = (axis == 0) & ((node == 0) | (node == nodes.size - 1))
        transmitted += np.count_nonzero(out & right)
        paths[who[out]] = path[out]
        stays = ~out
        place, direction = place[:, stays], direction[:, stays]
        free, piece, path, who = free[stays], piece[stays], path[stays], who[stays]
    share = transmitted / histories
    return Wire(
        share,
        np.sqrt(share * (1.0 - share) / histories),
        paths.mean(),
        paths.std() / np.sqrt(histories),
    )


def isotropic(random, d, n):
    """Directions on the circle or sphere: normal numbers have no preferred one."""
    vector = random.standard_normal((d, n))
    return vector / np.linalg.norm(vector, axis=0)


def lambert(random, d, n):
    """Directions by the cosine law about the first axis.

    What lies across it is uniform in (-1, 1) (d = 2) or in the unit disk (d = 3).
    """
    if d == 2:
        across = random.uniform(-1.0, 1.0, (1, n))
    else:
        angle = random.uniform(0.0, 2.0 * pi, n)
        across = np.sqrt(random.random(n)) * np.array([np.cos(angle), np.sin(angle)])
    return np.vstack([np.sqrt(1.0 - np.sum(across**2, axis=0)), across])


def _thrown_back(random, d, n, plane):
    """Directions in proportion to (1 - T) times the cosine, by rejection."""
    kept = np.empty((d, 0))
    while kept.shape[1] < n:
        fresh = lambert(random, d, n)
        kept = np.hstack([kept, fresh[:, random.random(n) < plane.reflects(fresh[0])]])
    return kept[:, :n]
