"""Conductivity of endless films, ribbons and wires whose walls scatter, sigma/sigma0 = rho0/rho.

sigma0 is the conductivity with bulk scattering alone, isotropic with the mean free path l; sizes
are in units of l. At a wall a carrier is reflected like in a mirror with probability p (the
specularity), else diffusely. What collisions and diffuse reflections emit carries no current, and a
mirror keeps |u| along every axis. So sigma/sigma0 is the mean over the cross-section and, with
weight u_x^2, over the directions u of int_0^inf exp(-s) p^n(s) ds, n(s) the number of walls that
the way of length s behind a carrier has met.
"""

from functools import lru_cache

import numpy as np

from carriersim.limits.averages import NODES, WEIGHTS

_LONGEST = 40.0  # free paths: exp(-40) = 4e-18
_FORGOTTEN = 1e-12  # p^n below which a carrier has lost its memory


def film_conductivity_ratio(kappa, specularity=0.0):
    """sigma/sigma0 of a film of thickness kappa * l, d = 3; arguments broadcast.

    1 - (3/2k)(1-p) int_1^inf (t^-3 - t^-5) (1 - e^-kt)/(1 - p e^-kt) dt. Fuchs, Proc. Cambridge
    Phil. Soc. 34 (1938) 100; Sondheimer, Adv. Phys. 1 (1952) 1. 1/1.46229 for k = 1, p = 0; for
    p = 0 about 1 - 3/(8k) for large k, (3k/4)(ln(1/k) + 0.4228) for small k.
    """
    return 1.5 * _survival(kappa, specularity, NODES) @ (WEIGHTS * (1.0 - NODES**2))


def ribbon_conductivity_ratio(kappa, specularity=0.0):
    """sigma/sigma0 of a ribbon of width kappa * l, d = 2; arguments broadcast.

    1 - 4(1-p)/(pi k) int_0^(pi/2) cos^2 sin (1 - e^(-k/sin))/(1 - p e^(-k/sin)): the derivation of
    Fuchs 1938 on a circle. 1/1.53062 for k = 1, p = 0; about 1 - 4/(3 pi k) for large k, p = 0.
    """
    angle = 0.5 * np.pi * NODES
    return 2.0 * _survival(kappa, specularity, np.sin(angle)) @ (WEIGHTS * np.cos(angle) ** 2)


def _survival(kappa, specularity, across):
    """Mean over a film of int exp(-s) p^n ds = 1 - (1-p)(1 - e^-q)/(q (1 - p e^-q)), q = k/across.

    (..., U) for across (U,), the component of the direction across the film. Only sums of positive
    terms, so that it stays exact for small q.
    """
    kappa, p = (np.asarray(argument, float)[..., None] for argument in (kappa, specularity))
    q = kappa / across
    met = -np.expm1(-q)
    return ((1.0 - p) * _mean_loss(q) + p * met) / (1.0 - p + p * met)


def _mean_loss(q):
    """1 - (1 - exp(-q))/q for q >= 0."""
    small = q < 0.01
    series = q / 2.0 * (1.0 - q / 3.0 * (1.0 - q / 4.0 * (1.0 - q / 5.0 * (1.0 - q / 6.0))))
    return np.where(small, series, 1.0 + np.expm1(-q) / np.where(small, 1.0, q))


@lru_cache(maxsize=256)
def wire_conductivity_ratio(width, height, width_specularity=0.0, height_specularity=0.0):
    """sigma/sigma0 of a wire with rectangular cross-section, d = 3; good to 1e-7. Numbers only.

    width, height in units of l; width_specularity: of the two faces that limit the width. Square of
    side l, p = 0: 1/1.932775. MacDonald & Sarginson, Proc. R. Soc. A 203 (1950) 223, for p = 0;
    with mirrors at one pair of faces it is the film of the other, and reflections at the two pairs
    are independent of each other for any p. With r the distance across the wire and a its angle,

        (6/pi) int_0^inf dr (Ki1 - Ki3)(r) int_0^(pi/2) da A(r cos(a)/width) A(r sin(a)/height),

    Ki Bickley's functions and A(n + rest) = p^n (1 - (1-p) rest) the mean of p^(walls met) over a
    width.
    """
    if width_specularity == 1.0:
        return float(film_conductivity_ratio(height, height_specularity))
    if height_specularity == 1.0:
        return float(film_conductivity_ratio(width, width_specularity))
    first, second = (float(width), width_specularity), (float(height), height_specularity)
    r, weight = _radii(first, second)
    around = np.array([_around(radius, first, second) for radius in r])
    return float(6.0 / np.pi * (weight * _kernel(r)) @ around)


def _kernel(r):
    """Ki1 - Ki3 = int_0^(pi/2) sin(a)^2 exp(-r/cos(a)) da for r (R,), by quadrature."""
    angle = 0.5 * np.pi * NODES  # to the plane across the axis, so that cos(a) is exact
    decay = np.exp(-r[:, None] / np.sin(angle))
    return 0.5 * np.pi * decay @ (WEIGHTS * np.cos(angle) ** 2)


def _radii(*pairs):
    """Gauss-Legendre points and weights in r between places where the integrand has a kink."""
    reach = [size * _most_walls(p) for size, p in pairs]
    stop = min(_LONGEST, np.hypot(*reach))
    kinks = [size * np.arange(1, 1 + min(_most_walls(p), 8)) for size, p in pairs]
    # Near 0 the kernel goes as r ln r.
    shortest = min(1.0, *(size for size, _ in pairs))
    graded = shortest * 2.0 ** np.arange(-8, np.ceil(np.log2(stop / shortest)))
    edges = np.unique(np.concatenate([[0.0, stop], *kinks, graded]))
    edges = edges[edges <= stop]
    node, weight = np.polynomial.legendre.leggauss(16)
    half = 0.5 * np.diff(edges)[:, None]
    return (edges[:-1, None] + half * (1.0 + node)).ravel(), (half * weight).ravel()


def _most_walls(specularity):
    """Walls after which nothing is left; 1 for p = 0."""
    if specularity == 0.0:
        return 1
    return int(np.ceil(np.log(_FORGOTTEN) / np.log(specularity)))


def _around(r, *pairs):
    """int_0^(pi/2) A(r cos(a)/width) A(r sin(a)/height) da, exact: A is linear between kinks."""
    (width, p), (height, q) = pairs
    met = [
        size * np.arange(1, 1 + min(int(r / size), _most_walls(share))) / r for size, share in pairs
    ]
    angle = np.sort(np.concatenate([[0.0, 0.5 * np.pi], np.arccos(met[0]), np.arcsin(met[1])]))
    sine, cosine = np.sin(angle), np.cos(angle)
    middle = 0.5 * (angle[:-1] + angle[1:])
    n, m = np.floor(r * np.cos(middle) / width), np.floor(r * np.sin(middle) / height)
    # A = p^n (constant + slope * cos(a)) on each stretch, and the same with the sine.
    one, two = 1.0 + (1.0 - p) * n, 1.0 + (1.0 - q) * m
    slope_one, slope_two = -(1.0 - p) * r / width, -(1.0 - q) * r / height
    parts = (
        one * two * np.diff(angle)
        + slope_one * two * np.diff(sine)
        - one * slope_two * np.diff(cosine)
        + 0.5 * slope_one * slope_two * np.diff(sine**2)
    )
    return p**n * q**m @ parts
