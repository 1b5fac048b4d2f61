"""A logarithm for loops that must vectorise, and incomplete gamma functions.

The logarithm splits a number through its bits and uses a polynomial, so that a loop over lanes becomes
vector instructions; libm's would be called one lane at a time.
"""

import math
import os

import numpy as np
from numba import types
from numba.extending import intrinsic

from ._jit import kernel

__all__ = ["gamma_upper", "log", "regularised_gamma"]

if os.environ.get("NUMBA_DISABLE_JIT", "0") == "1":

    def float_bits(x):
        """Return the 64 bits of a float as an integer."""
        return int(np.float64(x).view(np.int64))

    def bits_float(n):
        """Return the float that has these 64 bits."""
        return float(np.uint64(n & 0xFFFFFFFFFFFFFFFF).view(np.float64))

else:

    @intrinsic
    def float_bits(typingctx, x):
        """Return the 64 bits of a float as an integer."""

        def codegen(context, builder, signature, args):
            return builder.bitcast(args[0], context.get_value_type(types.int64))

        return types.int64(types.float64), codegen

    @intrinsic
    def bits_float(typingctx, n):
        """Return the float that has these 64 bits."""

        def codegen(context, builder, signature, args):
            return builder.bitcast(args[0], context.get_value_type(types.float64))

        return types.float64(types.int64), codegen


_LN2_HIGH = 0.693147180369123816490  # low 32 bits zero: times a small integer it is exact
_LN2_LOW = 1.90821492927058770002e-10
_TWO52 = 4503599627370496.0


@kernel
def log(x):
    """Return ln x to 1e-15 absolute and relative; for positive normal numbers only.

    Parameters
    ----------
    x : float

    Returns
    -------
    float
    """
    # the exponent is taken relative to sqrt(1/2), so that the mantissa lies in [sqrt(1/2), sqrt(2))
    shifted = float_bits(x) - 0x3FE6A09E667F3BCD
    power = bits_float(((shifted >> 52) + 1024) | 0x4330000000000000) - _TWO52 - 1024.0
    m = bits_float((shifted & 0x000FFFFFFFFFFFFF) + 0x3FE6A09E667F3BCD)
    s = (m - 1.0) / (m + 1.0)
    q = s * s
    p = 1.0 / 21.0
    p = p * q + 1.0 / 19.0
    p = p * q + 1.0 / 17.0
    p = p * q + 1.0 / 15.0
    p = p * q + 1.0 / 13.0
    p = p * q + 1.0 / 11.0
    p = p * q + 1.0 / 9.0
    p = p * q + 1.0 / 7.0
    p = p * q + 0.2
    p = p * q + 1.0 / 3.0
    return power * _LN2_HIGH + (2.0 * s + (2.0 * s * q * p + power * _LN2_LOW))


@kernel
def _lower_series(s, t):
    """Return gamma(s, t) by its power series, good for t below s + 1."""
    term = 1.0 / s
    total = term
    for n in range(1, 400):
        term *= t / (s + n)
        total += term
        if term < 1e-17 * total:
            break
    return total * math.exp(-t + s * math.log(t))


@kernel
def _upper_fraction(s, t):
    """Return Gamma(s, t) by its continued fraction (modified Lentz), good for t above s + 1."""
    tiny = 1e-300
    b = t + 1.0 - s
    c = 1.0 / tiny
    d = 1.0 / b
    h = d
    for n in range(1, 400):
        a = -n * (n - s)
        b += 2.0
        d = a * d + b
        if abs(d) < tiny:
            d = tiny
        c = b + a / c
        if abs(c) < tiny:
            c = tiny
        d = 1.0 / d
        h *= d * c
        if abs(d * c - 1.0) < 1e-16:
            break
    return h * math.exp(-t + s * math.log(t))


@kernel
def regularised_gamma(s, t):
    """Return P(s, t) = gamma(s, t) / Gamma(s), the regularised lower incomplete gamma function.

    Parameters
    ----------
    s : float
        Order, above 0.
    t : float
        Argument, 0 or more.

    Returns
    -------
    float
        Series below s + 1, continued fraction above (Abramowitz & Stegun 1964, 6.5.29 and 6.5.31).
    """
    if t <= 0.0:
        return 0.0
    if t < s + 1.0:
        return _lower_series(s, t) / math.gamma(s)
    return 1.0 - _upper_fraction(s, t) / math.gamma(s)


@kernel
def gamma_upper(s, t):
    """Return Gamma(s, t), the upper incomplete gamma function, not regularised.

    Parameters
    ----------
    s : float
        Order, above 0.
    t : float
        Argument, 0 or more.

    Returns
    -------
    float
    """
    if t <= 0.0:
        return math.gamma(s)
    if t < s + 1.0:
        return math.gamma(s) - _lower_series(s, t)
    return _upper_fraction(s, t)
