"""The coordinate along an endless channel: about the resistance that lies behind a place.

xi grows by dx over the local backscattering path and jumps at planes by their resistance, in units
of R_B. Any coordinate whose distance from a straight line is bounded gives the same diffusion
coefficient, D_x = D_xi / S^2 with S its mean slope, so nothing here has to be exact. But the nearer
xi is to the resistance, the sooner its steps forget each other. In x itself, carriers that planes
hold up come back again and again, and at random places that fades like a power of the path only.
"""

import numpy as np

from carriersim.engine.planes import mean_passing_flux
from carriersim.engine.space import OBLIQUE

SAMPLES = 1 << 13  # of places, directions and path lengths between walls
TABLE = 32  # rates where the walls' effect is computed
# <|u_x|^3>, <> the mean over a half space: what tunnel barriers do to weak planes' resistance.
_CUBE = {2: 4.0 / (3.0 * np.pi), 3: 0.25}


class Coordinate:
    """Slopes and jumps of xi for one set of walls.

    pairs: (size in nm, specularity) of each pair of faces that scatters.
    """

    def __init__(self, dimension, pairs):
        self.dimension, self.pairs = dimension, pairs
        places = len(pairs)
        numbers = _even(SAMPLES, places + dimension + 1)
        angle = 0.5 * np.pi * numbers[places]
        if dimension == 2:
            self._along, self._sides = np.cos(angle), [np.sin(angle)]
        else:
            self._along = numbers[places + 1]
            across = np.sqrt(1.0 - self._along**2)
            self._sides = [across * np.cos(angle), across * np.sin(angle)]
        self._places, self._paths = numbers[:places], numbers[-2:]

    def path_and_factor(self, rate):
        """Backscattering path in nm and the factor of weak planes, two arrays of the shape (n,).

        rate: (n,) collisions per nm. Many rates are interpolated between a few.
        """
        rate = np.asarray(rate, float)
        if rate.size <= TABLE or np.ptp(rate) == 0.0:
            known, place = np.unique(rate, return_inverse=True)
            return np.array([self._one(r) for r in known]).T[:, place]
        known = np.geomspace(rate.min(), rate.max(), TABLE)
        rows = np.log([self._one(r) for r in known]).T
        return np.exp([np.interp(np.log(rate), np.log(known), row) for row in rows])

    def _one(self, rate):
        """The same at one rate.

        A flight goes on until a collision or a diffuse reflection; with walls unfolded by their
        mirrors it is straight (Chambers, Proc. R. Soc. A 202 (1950) 378). If a carrier flies on by
        u_x a, on average, D = <u_x^2 a>. Planes that mirror a small part 1 - T add the resistance
        (1 - T) <|u_x|^3 a^2> / (k D^2): first order, the carriers' distribution being u_x a.
        """
        oblique, u = OBLIQUE[self.dimension], self._along
        if self.pairs:
            mirrored = sum((1.0 - p) / (1.0 + p) / size for size, p in self.pairs)
            first, second = (self._onward(rate, rate + mirrored, q) for q in self._paths)
        else:
            first = second = 1.0 / rate
        d = np.mean(u**2 * 0.5 * (first + second))
        return float(2.0 * oblique * d), float(np.mean(u**3 * first * second) / (oblique * d**2))

    def _onward(self, rate, typical, q):
        """Samples of a, (SAMPLES,): int exp(-rate s) p^(walls met) ds with s drawn as 1/(1+s)^2."""
        s = q / (1.0 - q) / typical
        sample = np.exp(-rate * s) / ((1.0 - q) ** 2 * typical)
        for (size, p), side, place in zip(self.pairs, self._sides, self._places, strict=False):
            sample *= p ** np.floor(place + side * s / size)
        return sample

    def jump(self, transmission, tunnel, factor):
        """xi's jump at planes: about their resistance in units of R_B; arguments broadcast.

        factor: of weak planes. Weak planes add that of first order, strong ones 1/T - 1 with T
        averaged over the flux that arrives; the sum below has both limits.
        """
        transmission = np.asarray(transmission, float)
        passing, weak = transmission, 1.0 - transmission
        if tunnel:
            gamma = (1.0 - transmission) / transmission
            passing = mean_passing_flux(transmission, True, self.dimension)
            # <|u_x|^3 (1 - T(u_x))> / <|u_x|^3> is gamma <|u_x| T(u_x)> / <|u_x|^3>.
            weak = gamma * passing / (OBLIQUE[self.dimension] * _CUBE[self.dimension])
        return factor * weak + (1.0 - passing) ** 2 / passing


def _even(count, dimensions):
    """Points spread evenly over the unit cube, (dimensions, count): a Kronecker sequence.

    Its steps are powers of 1/g, g^(d+1) = g + 1 (M. Roberts 2018, from memory).
    """
    g = 2.0
    for _ in range(60):
        g = (1.0 + g) ** (1.0 / (dimensions + 1))
    steps = g ** -np.arange(1.0, dimensions + 1)
    return (0.5 + steps[:, None] * np.arange(1, count + 1)) % 1.0
