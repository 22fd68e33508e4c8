"""What a problem has on top in two and three dimensions: planes, walls, and where to look."""

from dataclasses import dataclass

import numpy as np

from carriersim.engine.planes import Planes, Walls

# Backscattering path over the mean free path between isotropising collisions: the mean of u_x^2
# over that of u_x of a half space, times 2.
BACKSCATTER = {1: 2.0, 2: np.pi / 2.0, 3: 4.0 / 3.0}
# Path length per length along the channel of carriers that the cosine law emits, int dO over
# int u_x dO of a half space.
OBLIQUE = {1: 1.0, 2: np.pi / 2.0, 3: 2.0}
LOOKUP = 64  # intervals of the cosine, to find the class of one quickly
CLASSES = 18  # of direction, equal in angle, from the axis to across the channel


def cosine_at(share, dimension, crossing):
    """|u_x| below (d = 3) or above (d = 2) which a share of all directions of a half space lies.

    crossing: of a flux by the cosine law instead. Even shares give even samples of either.
    """
    if dimension == 3:
        return np.sqrt(share) if crossing else share
    return np.sqrt(1.0 - share**2) if crossing else np.cos(0.5 * np.pi * share)


@dataclass(frozen=True)
class Space:
    """Planes and walls of a problem; V views of the angular distribution."""

    dimension: int
    planes: Planes
    walls: tuple[Walls | None, Walls | None]  # those that scatter
    faces: tuple[Walls | None, Walls | None]  # all of them, for sample trajectories
    view_nodes: np.ndarray  # (V,) int64

    @property
    def classes(self):
        """Number of classes of direction in the views."""
        return self.planes.view_edges.size - 1

    @property
    def oblique(self):
        """Path length of a flight per length along the channel, see OBLIQUE."""
        return OBLIQUE[self.dimension]

    @property
    def scatters(self):
        """Whether walls scatter."""
        return self.walls[0] is not None

    @property
    def wall_rate(self):
        """Of the carriers of an evenly filled half space, how many walls scatter per nm.

        Onto both faces of a pair falls 1/size of the carriers that pass along, d = 2 and 3 alike.
        """
        return sum((1.0 - pair.specularity) / pair.size for pair in self.walls if pair is not None)


def space_of(scenario, nodes_nm, planes, view_nm):
    """The Space of a scenario, None in one dimension.

    planes: (angular, reflection) of every node; view_nm: places to look at, all of them nodes.
    """
    dimension = scenario.channel.dimension
    if dimension == 1:
        return None
    views = np.unique(np.searchsorted(nodes_nm, view_nm))
    view = np.full(nodes_nm.size, -1, np.int64)
    view[views] = np.arange(views.size)
    edges = np.cos(np.linspace(0.0, np.pi / 2.0, CLASSES + 1))
    return Space(
        dimension=dimension,
        planes=Planes(
            dimension=dimension,
            tunnel=np.array([angular == "tunnel" for angular, _ in planes]),
            diffuse=np.array([reflection == "diffuse" for _, reflection in planes]),
            looked_at=view,
            view_edges=edges,
            view_first=_first_classes(edges),
        ),
        walls=_walls(scenario.channel, every=False),
        faces=_walls(scenario.channel, every=True),
        view_nodes=views,
    )


def _first_classes(edges):
    """The first class that a cosine of each of LOOKUP equal intervals may belong to."""
    upper = np.append((np.arange(LOOKUP) + 1.0) / LOOKUP, 1.0)
    return np.searchsorted(-edges[1:-1], -upper, side="right").astype(np.int64)


def _walls(channel, every):
    """Two pairs of faces; a pair of mirrors leaves the motion along the channel as it is."""
    if channel.width_nm is None:
        return None, None
    width, height = channel.face_specularity
    pairs = [Walls(float(channel.width_nm), float(width))]
    if channel.dimension == 3:
        pairs.append(Walls(float(channel.height_nm), float(height)))
    pairs = [pair for pair in pairs if every or pair.specularity < 1.0]
    return (*pairs, None, None)[:2]
