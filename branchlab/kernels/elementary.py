"""exp, cos and sin without branches or library calls, so that LLVM vectorises the loops that use them."""

from math import floor

from llvmlite import ir
from numba import int64, njit, types
from numba.extending import intrinsic

_OPTIONS = {"nogil": True, "cache": True, "error_model": "numpy", "fastmath": {"contract", "nsz"}}

_LOG2_E = 1.4426950408889634
_LN2_HIGH, _LN2_LOW = 0.6931471803691238, 1.9082149292705877e-10  # the high part has zeros in its last bits
_TWO_OVER_PI = 0.6366197723675814
_HALF_PI_HIGH, _HALF_PI_LOW = 1.5707963267948966, 6.123233995736766e-17


@intrinsic
def power_of_two(typingctx, n):  # noqa: ARG001  (numba passes its typing context)
    """Return 2.0**n for a whole number -1022 <= n <= 1023, by setting the exponent bits."""
    signature = types.float64(types.int64)

    def generate(context, builder, sig, args):  # noqa: ARG001
        word = ir.IntType(64)
        biased = builder.add(args[0], ir.Constant(word, 1023))
        return builder.bitcast(builder.shl(biased, ir.Constant(word, 52)), ir.DoubleType())

    return signature, generate


@njit(**_OPTIONS)
def exponential(x):
    """Return exp(x) for -700 < x < 700 to 1 ulp: exp(x) = 2**n exp(t), |t| <= ln(2)/2, Taylor to t**13."""
    n = floor(x * _LOG2_E + 0.5)
    t = x - n * _LN2_HIGH - n * _LN2_LOW
    tail = 1 / 40320 + t * (1 / 362880 + t * (1 / 3628800 + t * (1 / 39916800 + t * (1 / 479001600 + t / 6227020800))))
    head = 1.0 + t * (
        1.0 + t * (0.5 + t * (1 / 6 + t * (1 / 24 + t * (1 / 120 + t * (1 / 720 + t * (1 / 5040 + t * tail))))))
    )
    return head * power_of_two(int64(n))


@njit(**_OPTIONS)
def cos_sin(x):
    """Return (cos x, sin x) to 2 ulp of 1 for |x| < 1e9: quadrant, then Taylor series on |r| <= pi/4."""
    quadrant = floor(x * _TWO_OVER_PI + 0.5)
    r = x - quadrant * _HALF_PI_HIGH - quadrant * _HALF_PI_LOW
    q = r * r
    s = 1 / 362880 + q * (-1 / 39916800 + q * (1 / 6227020800 - q / 1307674368000))
    s = r * (1.0 + q * (-1 / 6 + q * (1 / 120 + q * (-1 / 5040 + q * s))))
    c = -1 / 3628800 + q * (1 / 479001600 + q * (-1 / 87178291200 + q / 20922789888000))
    c = 1.0 + q * (-0.5 + q * (1 / 24 + q * (-1 / 720 + q * (1 / 40320 + q * c))))
    turn = int64(quadrant) & 3
    even = (turn & 1) == 0
    a = c if even else s
    b = s if even else c
    return (-a if turn == 1 or turn == 2 else a), (-b if turn >= 2 else b)
