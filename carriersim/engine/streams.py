"""Random streams: one independent stream per batch, exponentials and uniforms in blocks.

Generator: xoshiro256++ (Blackman & Vigna, ACM Trans. Math. Softw. 47 (2021) 36), BLOCK lanes side
by side: a refill is one step of every lane, a flat loop that the compiler puts into vector
registers. Each lane is seeded by numpy's SeedSequence from (seed, batch), so a batch draws the
same numbers whatever the number of workers.

The logarithm is our own plain polynomial code: it vectorises, and it gives the same bits on every
x86-64 machine, which the system's libm does not promise.
"""

import numpy as np
from llvmlite import ir
from numba import njit, types
from numba.extending import intrinsic

BLOCK = 128  # numbers per refill: states and buffers take 6 kB, so tallies fit in the L1 cache too

# Purposes keep streams of different uses apart even for equal (seed, batch).
TRANSPORT = 1
OFFSET = 2
TANGENT = 3
ENDLESS = 4
TRAJECTORIES = 5

_LN2_HIGH = 6.93147180369123816490e-01  # upper 33 bits of ln 2: exponent * _LN2_HIGH is exact
_LN2_LOW = 1.90821492927058770002e-10  # ln 2 - _LN2_HIGH
# (2 artanh(s) - 2 s) / s**3 as a polynomial in z = s**2: Chebyshev fit in 40 digits over
# |s| <= (sqrt2 - 1)/(sqrt2 + 1); error 9e-18.
_L0 = 0.666666666666667
_L1 = 0.39999999999899444
_L2 = 0.2857142862600327
_L3 = 0.22222211130259878
_L4 = 0.18182889455674947
_L5 = 0.15331710618210773
_L6 = 0.14616585424888623


def apart(shape, dtype=np.float64):
    """Zeros that share no cache line with other arrays.

    Small arrays that several threads write to would otherwise slow each other down (two workers
    reached 1.3 times the speed of one).
    """
    margin = 256 // np.dtype(dtype).itemsize
    size = int(np.prod(shape))
    return np.zeros(size + 2 * margin, dtype)[margin : margin + size].reshape(shape)


def seed_lanes(seed, batch, purpose=TRANSPORT):
    """State of the lanes for one batch, shape (4 * BLOCK,), uint64, from (seed, purpose, batch)."""
    sequence = np.random.SeedSequence(seed, spawn_key=(purpose, batch))
    return sequence.generate_state(4 * BLOCK, np.uint64)


def unit_offset(seed, batch):
    """One uniform number in [0, 1) for a batch: the shift of its energy sequence."""
    sequence = np.random.SeedSequence(seed, spawn_key=(OFFSET, batch))
    return float(sequence.generate_state(1, np.uint64)[0] >> np.uint64(11)) * 2.0**-53


@intrinsic
def _as_double(typingctx, bits):
    """The double whose bit pattern is the given uint64."""

    def codegen(context, builder, signature, args):
        return builder.bitcast(args[0], ir.DoubleType())

    return types.float64(types.uint64), codegen


@intrinsic
def _as_bits(typingctx, value):
    """The bit pattern of a double as uint64."""

    def codegen(context, builder, signature, args):
        return builder.bitcast(args[0], ir.IntType(64))

    return types.uint64(types.float64), codegen


@njit(cache=True, inline="always", error_model="numpy")
def minus_log(u):
    """-ln(u) for u in [2**-53, 1], within 2e-16 of the larger of 1 and the result.

    u = 2**e * m with m in [1/sqrt2, sqrt2); ln m = 2 artanh(s), s = (m-1)/(m+1), |s| < 0.1716.
    """
    bits = _as_bits(u)
    # Adding the distance from 1/sqrt2 to 1 carries into the exponent where m > sqrt2.
    shifted = bits + np.uint64(0x00095F619980C433)
    exponent = _as_double((shifted >> np.uint64(52)) | np.uint64(0x4330000000000000))
    exponent -= 4503599627370496.0 + 1023.0
    m = _as_double((shifted & np.uint64(0x000FFFFFFFFFFFFF)) + np.uint64(0x3FE6A09E667F3BCD))
    s = (m - 1.0) / (m + 1.0)
    z = s * s
    # Pairs first (Estrin), not one long chain: the additions of a chain wait for each other.
    z2 = z * z
    low = (_L0 + _L1 * z) + (_L2 + _L3 * z) * z2
    high = (_L4 + _L5 * z) + _L6 * z2
    log_m = 2.0 * s + s * (z * (low + high * (z2 * z2)))
    return -(exponent * _LN2_HIGH + (log_m + exponent * _LN2_LOW))


@njit(cache=True, inline="always", error_model="numpy")
def next_bits(lanes, k):
    """One step of lane k. One flat state array: with constant offsets between the four words the
    compiler can prove that lanes are independent, which it can't for four arrays."""
    a = lanes[k]
    b = lanes[BLOCK + k]
    c = lanes[2 * BLOCK + k]
    d = lanes[3 * BLOCK + k]
    total = a + d
    result = ((total << np.uint64(23)) | (total >> np.uint64(41))) + a
    t = b << np.uint64(17)
    c ^= a
    d ^= b
    lanes[k] = a ^ d
    lanes[BLOCK + k] = b ^ c
    lanes[2 * BLOCK + k] = c ^ t
    lanes[3 * BLOCK + k] = (d << np.uint64(45)) | (d >> np.uint64(19))
    return result


@njit(cache=True, inline="always", error_model="numpy")
def one_to_two(bits):
    """Uniform in [1, 2), steps of 2**-52."""
    return _as_double((bits >> np.uint64(12)) | np.uint64(0x3FF0000000000000))


@njit(cache=True, error_model="numpy", nogil=True)
def fill_uniforms(lanes, out):
    """BLOCK uniform numbers in [0, 1), steps of 2**-52, into out; lanes (4 * BLOCK,) advances."""
    for k in range(BLOCK):
        out[k] = one_to_two(next_bits(lanes, k)) - 1.0


@njit(cache=True, error_model="numpy", nogil=True)
def fill_exponentials(lanes, out):
    """BLOCK exponential numbers of mean 1 into out; lanes (4 * BLOCK,) advances."""
    for k in range(BLOCK):
        out[k] = minus_log(2.0 - one_to_two(next_bits(lanes, k)))


@njit(cache=True, error_model="numpy", nogil=True)
def fill_logistics(lanes, out):
    """BLOCK logistic numbers into out: ln(v / (1 - v)); lanes (4 * BLOCK,) advances."""
    for k in range(BLOCK):
        v = one_to_two(next_bits(lanes, k)) - (1.0 - 2.0**-53)  # never 0 or 1
        out[k] = minus_log((1.0 - v) / v)
