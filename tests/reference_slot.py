"""A channel between two walls that scatter, and nothing else: Clausing's integral equation.

P. Clausing, Ann. Phys. 12 (1932) 961, for the slot between parallel plates, with specularity: a
path that is mirrored n times is a straight one that crosses n images of the channel. The same in
d = 2 and, with mirrors above and below, in d = 3: occupations depend on the angle in the plane
alone, and flux and solid angle are products of a function of that angle and one of the other.
"""

from functools import cached_property

import numpy as np
from numpy.polynomial import legendre
from scipy.integrate import quad

IMAGES = 200
NODES = 60


class Slot:
    """For a full left and an empty right contact; width 1, length `ratio`."""

    def __init__(self, ratio, specularity):
        self.ratio = ratio
        self.specularity = specularity
        self.image = np.arange(IMAGES)
        self.survive = float(specularity) ** self.image  # mirrored 0, 1, ... times
        node, weight = legendre.leggauss(NODES)
        self.x, self.weight = ratio * (1 + node) / 2, ratio * weight / 2

    @cached_property
    def transmission(self):
        """Flux into the right contact, as part of what the left one emits."""
        arriving = 2 * (1 - self.specularity) * self._from_contact(self.x)
        return 1 - self.weight @ (arriving * self._walls)

    def wall(self, x):
        """Occupation of what a wall emits at x."""
        return self._from_contact(x) + self._from_walls(x) @ (self.weight * self._walls)

    @cached_property
    def returning(self):
        """Occupation at the left contact, mean over the solid angle of left-moving states."""

        def seen(x):  # by tracing back: which part of the angles and of the width sees a wall at x
            n = self.image[1:]
            images = np.log((x**2 + (n + 1) ** 2) / (x**2 + n**2)) @ self.survive[1:]
            return np.log1p(x**-2) + images

        total = quad(lambda x: seen(x) * self.wall(x), 0, self.ratio, limit=200)[0]
        return (1 - self.specularity) / np.pi * total

    @property
    def walls_part(self):
        """Resistance between the contacts in units of R_B; the contacts' parts are equal."""
        return self.returning / self.transmission

    @cached_property
    def _walls(self):
        """Occupation of what walls emit, at the nodes."""
        system = np.eye(NODES) - self._from_walls(self.x) * self.weight
        return np.linalg.solve(system, self._from_contact(self.x))

    def _from_contact(self, x):
        """Part of what comes to a wall at x that comes from the left contact."""
        x = np.asarray(x)[..., None]
        n = self.image
        sine = x / np.hypot(x, n), x / np.hypot(x, n + 1)  # of the angle to the wall's normal
        return (sine[0] - sine[1]) @ self.survive / 2

    def _from_walls(self, x):
        """Part that comes from walls, per length at the nodes."""
        apart = (np.asarray(x)[..., None] - self.x)[..., None]
        n = self.image + 1.0
        kernel = n**2 / (n**2 + apart**2) ** 1.5
        return kernel @ self.survive * (1 - self.specularity) / 2
