"""Channels in two and three dimensions for the tests: a Case of the reference as a scenario."""

from itertools import pairwise

import numpy as np

from carriersim.assemble import assemble
from carriersim.engine.problem import build
from carriersim.engine.solve import Goal, solve
from carriersim.scenario import read_text


class Run:
    """One run, from inside (sums of its batches) and from outside (the Result).

    Carriers are followed from contact to contact; the endless channel that `simulate` does besides
    is left out.
    """

    def __init__(self, text, workers=2):
        self.scenario = read_text(text)
        self.problem = build(self.scenario)
        histories = self.scenario.simulation.histories
        self.totals = solve(self.problem, Goal(None, histories, None), workers)
        self.result = assemble(self.problem, self.totals, self.scenario)


def follow(text):
    """Result of a scenario given as YAML, see Run."""
    return Run(text).result


def yaml_of(case, bias_mV=10.0, kelvin=10.0, probes=(), channel="", scattering="", **simulation):
    """A scenario that is what a Case is, as YAML.

    probes: (place, weight_right). channel, scattering: more keys of these groups, as YAML.
    """
    points = [p for p in case.planes if 0 < p.position < case.length]
    ends = {
        side: [p for p in case.planes if p.position == place]
        for side, place in (("left", 0), ("right", case.length))
    }
    contacts = "".join(f", {side}: {{{_plane(p[0])}}}" for side, p in ends.items() if p)
    sections = ", ".join(
        f"{{from_nm: {s.start}, to_nm: {s.end}{_path(s.mean_free_path)}}}" for s in case.sections
    )
    where = ", ".join(f"{{position_nm: {x}, weight_right: {w}}}" for x, w in probes)
    simulation = {"trajectories": 0} | simulation
    settings = ", ".join(f"{key}: {value}" for key, value in simulation.items())
    paths = scattering or _path(case.mean_free_path).lstrip(", ")
    return f"""
channel: {{length_nm: {case.length}, dimension: {case.dimension}{_more(channel)}}}
contacts: {{bias_mV: {bias_mV}, temperature_K: {kelvin}{contacts}}}
scattering:
  sections: [{sections}]
  points: [{", ".join(f"{{position_nm: {p.position}, {_plane(p)}}}" for p in points)}]
  {paths}
probes: [{where}]
simulation: {{{settings}}}
"""


def over_cells(function, edges_nm, points=4):
    """Mean of a function of the place over each cell, by Gauss's rule."""
    node, weight = np.polynomial.legendre.leggauss(points)
    middle, half = 0.5 * (edges_nm[1:] + edges_nm[:-1]), 0.5 * np.diff(edges_nm)
    values = [[function(x) for x in m + h * node] for m, h in zip(middle, half, strict=True)]
    return np.array(values) @ weight / 2


def mean(solution, place, side="left"):
    """Mean of both directions at a place."""
    return 0.5 * (solution.f_plus(place, side) + solution.f_minus(place, side))


def parts_of(solution):
    """Parts of the resistance in units of R_B, cut at planes and sections: (kind, place): value.

    place: of a piece its ends.
    """
    case, one = solution.case, 1 / solution.transmission
    inner = {p.position for p in case.planes} | {x for s in case.sections for x in (s.start, s.end)}
    cuts = sorted({0.0, float(case.length), *map(float, inner)})
    parts = {
        ("interface", 0.0): one * (1 - mean(solution, 0, "left")),
        ("interface", cuts[-1]): one * mean(solution, case.length, "right"),
    }
    for plane in case.planes:
        x = plane.position
        drop = mean(solution, x, "left") - mean(solution, x, "right")
        parts["point", float(x)] = one * drop
    for a, b in pairwise(cuts):
        parts["piece", (a, b)] = one * (mean(solution, a, "right") - mean(solution, b, "left"))
    return parts


def _plane(plane):
    angular = "tunnel" if plane.tunnel else "constant"
    reflection = "diffuse" if plane.diffuse else "specular"
    return f"transmission: {plane.transmission}, angular: {angular}, reflection: {reflection}"


def _path(mean_free_path):
    return "" if mean_free_path is None else f", mean_free_path_nm: {mean_free_path}"


def _more(keys):
    return f", {keys}" if keys else ""
