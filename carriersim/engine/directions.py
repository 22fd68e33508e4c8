"""Random directions in two and three dimensions, in blocks like the other random numbers.

Columns are the components along x, y, z; in two dimensions z stays 0. No component along x is 0, so
that 1/|u_x| is finite. Sine and cosine are our own polynomials: they vectorise, and they give the
same bits on every x86-64 machine.
"""

from typing import NamedTuple

import numpy as np
from numba import njit

from carriersim.engine.streams import (
    BLOCK,
    TRANSPORT,
    apart,
    next_bits,
    one_to_two,
    seed_lanes,
)

SMALLEST = 1e-16  # of a component that must not vanish
_QUARTER_PI = 0.25 * np.pi
_ROOT_HALF = np.sqrt(0.5)
# Taylor series of sine and cosine; on |b| <= pi/4 the first term left out is below 1e-17.
_S1, _S2, _S3, _S4, _S5, _S6, _S7 = (
    -1.0 / 6.0,
    1.0 / 120.0,
    -1.0 / 5040.0,
    1.0 / 362880.0,
    -1.0 / 39916800.0,
    1.0 / 6227020800.0,
    -1.0 / 1307674368000.0,
)
_C1, _C2, _C3, _C4, _C5, _C6, _C7 = (
    -1.0 / 2.0,
    1.0 / 24.0,
    -1.0 / 720.0,
    1.0 / 40320.0,
    -1.0 / 3628800.0,
    1.0 / 479001600.0,
    -1.0 / 87178291200.0,
)


class RayStream(NamedTuple):
    """Random numbers of one batch where carriers have directions, kept between rounds."""

    lanes: np.ndarray  # (4 * BLOCK,) uint64
    exponentials: np.ndarray  # (BLOCK,)
    uniforms: np.ndarray  # (BLOCK,)
    isotropic: np.ndarray  # (3, BLOCK) after a collision
    lambert: np.ndarray  # (3, BLOCK) by the cosine law: along the normal, then along the surface
    position: np.ndarray  # (4,) int64: next unused of each of the four


def new_ray_stream(seed, batch, purpose=TRANSPORT):
    """Random numbers of one batch, at their beginning; all blocks are used up."""
    lanes = apart((4 * BLOCK,), np.uint64)
    lanes[:] = seed_lanes(seed, batch, purpose)
    position = apart((4,), np.int64)
    position[:] = BLOCK
    blocks = apart((BLOCK,)), apart((BLOCK,)), apart((3, BLOCK)), apart((3, BLOCK))
    return RayStream(lanes, *blocks, position)


@njit(cache=True, inline="always", error_model="numpy")
def _circle(bits):
    """Cosine and sine of a uniform angle: one quarter from the upper bits, signs from the lowest.

    The middle of the quarter is pi/4, so that sine and cosine of the rest need |b| <= pi/4 only.
    """
    b = _QUARTER_PI * (2.0 * one_to_two(bits) - 3.0)
    z = b * b
    z2 = z * z
    low = (1.0 + _S1 * z) + (_S2 + _S3 * z) * z2
    high = (_S4 + _S5 * z) + (_S6 + _S7 * z) * z2
    sine = b * (low + high * (z2 * z2))
    low = (1.0 + _C1 * z) + (_C2 + _C3 * z) * z2
    high = (_C4 + _C5 * z) + (_C6 + _C7 * z) * z2
    cosine = low + high * (z2 * z2)
    first = max((cosine - sine) * _ROOT_HALF, SMALLEST)
    second = max((cosine + sine) * _ROOT_HALF, SMALLEST)
    return (
        first * (1.0 - 2.0 * np.float64(np.int64(bits & np.uint64(1)))),
        second * (1.0 - np.float64(np.int64(bits & np.uint64(2)))),
    )


@njit(cache=True, error_model="numpy", nogil=True)
def fill_isotropic(lanes, out, dimension, whole):
    """BLOCK isotropic directions into out (3, BLOCK); whole: y and z as well as x."""
    if dimension == 2:
        for k in range(BLOCK):
            out[0, k], out[1, k] = _circle(next_bits(lanes, k))
        return
    for k in range(BLOCK):
        out[0, k] = (2.0 * one_to_two(next_bits(lanes, k)) - 3.0) + 2.0**-52
    if whole:
        for k in range(BLOCK):
            c, s = _circle(next_bits(lanes, k))
            across = np.sqrt(1.0 - out[0, k] * out[0, k])
            out[1, k], out[2, k] = across * c, across * s


@njit(cache=True, error_model="numpy", nogil=True)
def fill_lambert(lanes, out, dimension, whole):
    """BLOCK directions by the cosine law about a normal into out (3, BLOCK).

    Row 0 is along the normal and positive; whole: the other rows, along the surface, as well.
    Flux per solid angle goes as the cosine: in three dimensions its square is uniform in (0, 1), in
    two the sine is uniform.
    """
    if dimension == 2:
        for k in range(BLOCK):
            sine = (2.0 * one_to_two(next_bits(lanes, k)) - 3.0) + 2.0**-52
            out[0, k] = max(np.sqrt(1.0 - sine * sine), SMALLEST)
            out[1, k] = sine
        return
    for k in range(BLOCK):
        square = (2.0 - one_to_two(next_bits(lanes, k))) - 2.0**-53
        out[0, k] = np.sqrt(square)
        out[1, k] = np.sqrt(1.0 - square)
    if whole:
        for k in range(BLOCK):
            c, s = _circle(next_bits(lanes, k))
            out[2, k] = out[1, k] * s
            out[1, k] = out[1, k] * c
