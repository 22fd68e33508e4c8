"""A slab that scatters isotropically between two black contacts, in two and three dimensions.

thickness: L/l, or the integral of dx/l where the mean free path l varies along x. Nothing else
scatters: no planes, no walls but mirrors. S is the occupation, mean over all directions, for a full
left and an empty right contact. In d = 3 this is radiation between black walls (Heaslet & Warming,
Int. J. Heat Mass Transfer 8 (1965) 979), and with t counted in mean free paths

    S(t) = E2(t)/2 + (1/2) int E1|t-t'| S(t') dt';

in d = 2 the same derivation gives S(t) = Ki1(t)/pi + (1/pi) int K0|t-t'| S(t') dt', Ki1 Bickley's
function. Solved here as the kinetic equation behind it on discrete directions, exactly in x
(Chandrasekhar, Radiative Transfer (1950)): no singular kernel and no mesh.
"""

from functools import lru_cache
from typing import NamedTuple

import numpy as np

# Backscattering path over the mean free path: twice <mu^2>/<mu>.
BACKSCATTER = {2: np.pi / 2.0, 3: 4.0 / 3.0}
# Extrapolation lengths of both contacts together, in mean free paths.
_EXTRAPOLATION = {2: 1.0 + 2.0 / np.pi, 3: 2.0 * 0.7104460895987631}
# Directions of a half space. 32 change T by less than 4e-9 and S at the contacts by less than 3e-6;
# from 48 on rounding spoils the eigenvalues.
_ORDINATES = 24


def slab_transmission(thickness, dimension):
    """T of a slab, good to 1e-8; thickness >= 0. For L/l = 1: 0.597792 (d = 2), 0.553406 (d = 3).

    Heaslet & Warming 1965 for d = 3, see the module. A number, not an array.
    """
    return _solve(float(thickness), dimension).slope * BACKSCATTER[dimension]


def thick_slab_transmission(thickness, dimension):
    """T of a thick slab: (pi/2)/(L/l + 1.636620) in d = 2, (4/3)/(L/l + 1.420892) in d = 3.

    Milne's problem: S reaches the occupation of a contact an extrapolation length outside, 0.710446
    l in d = 3 (Hopf, Mathematical Problems of Radiative Equilibrium (1934)), (1/2 + 1/pi) l in
    d = 2. Good to 5e-3 from L/l = 1, 2e-4 from 3, 1e-6 from 7 on.
    """
    return BACKSCATTER[dimension] / (np.asarray(thickness, float) + _EXTRAPOLATION[dimension])


def simple_transmission(thickness, dimension):
    """1/(1 + L/lam), the interpolation between ballistic and long channels (Datta 1995)."""
    return 1.0 / (1.0 + np.asarray(thickness, float) / BACKSCATTER[dimension])


def simple_error(thickness, dimension):
    """Relative error of simple_transmission.

    Largest at L/l = 0.7: 2.3 % in d = 2, 3.4 % in d = 3; it goes to 0 at both ends.
    """
    return simple_transmission(thickness, dimension) / slab_transmission(thickness, dimension) - 1.0


def interface_part(thickness, dimension):
    """Resistance of one contact in units of R_B: (1 - S(0))/T, good to 4e-6.

    1/2 for a thin slab; sqrt(2)/pi = 0.450158 in d = 2, sqrt(3)/4 = 0.433013 in d = 3 for a thick
    one: S(0) of Milne's problem is 1/sqrt(2) or 1/sqrt(3) of the slope (Hopf 1934).
    """
    above, _ = _means(float(thickness), dimension, np.zeros(()))
    return (0.5 - float(above)) / slab_transmission(thickness, dimension)


def slab_profile(thickness, dimension, fraction):
    """(mu+, mu-) at x = fraction * L per unit of the bias: means over each half space.

    fraction in 0..1, any shape; where l varies it counts mean free paths. See slab_transmission.
    """
    even, odd = _means(float(thickness), dimension, np.asarray(fraction, float))
    return 0.5 + even + odd, 0.5 + even - odd


class _Modes(NamedTuple):
    """(f+ + f-)/2 - 1/2 = slope (b - t) + sum of amounts * sinh(k (b - t))/cosh(k b), b = L/2l."""

    slope: float
    k: np.ndarray  # (M,)
    even: np.ndarray  # (M,) amounts, mean over directions
    odd: np.ndarray  # (M,) the same times mu k: amounts in (f+ - f-)/2
    cosine: float  # mean of mu


@lru_cache(maxsize=1024)
def _solve(thickness, dimension):
    """The slab on discrete directions.

    e = (f+ + f-)/2 and o = (f+ - f-)/2 obey o = -mu e' and mu^2 e'' = e - S; f+ = 1 at the left
    contact, and e - 1/2 is odd about the middle.
    """
    mu, share = _directions(dimension)
    # Symmetric in e mu sqrt(share); the lowest eigenvalue is 0 and belongs to the linear part.
    root = np.sqrt(share) / mu
    squares, shapes = np.linalg.eigh(np.diag(mu**-2.0) - np.outer(root, root))
    k = np.sqrt(squares[1:])
    shapes = shapes[:, 1:] / (mu * np.sqrt(share))[:, None]
    system = np.empty((mu.size, mu.size))
    system[:, 0] = 0.5 * thickness + mu
    system[:, 1:] = shapes * (np.tanh(0.5 * thickness * k) + np.outer(mu, k))
    slope, *amounts = np.linalg.solve(system, np.full(mu.size, 0.5))
    shapes *= amounts
    return _Modes(float(slope), k, share @ shapes, k * ((share * mu) @ shapes), float(share @ mu))


def _directions(dimension):
    """Cosines (D,) and shares of the solid angle of a half space, densest near mu = 0."""
    node, weight = np.polynomial.legendre.leggauss(_ORDINATES)
    u = 0.5 * (1.0 + node)
    share = weight * u  # of u^2, which is mu in d = 3 and the angle to the plane in d = 2
    return (np.sin(0.5 * np.pi * u**2) if dimension == 2 else u**2), share


def _means(thickness, dimension, fraction):
    """(S - 1/2, (mu+ - mu-)/2) at places fraction * L, each of its shape."""
    modes = _solve(thickness, dimension)
    from_left = np.exp(-modes.k * thickness * fraction[..., None])
    from_right = np.exp(-modes.k * thickness * (1.0 - fraction[..., None]))
    both = 1.0 + np.exp(-modes.k * thickness)
    even = (0.5 - fraction) * thickness * modes.slope + (from_left - from_right) / both @ modes.even
    odd = modes.cosine * modes.slope + (from_left + from_right) / both @ modes.odd
    return even, odd
