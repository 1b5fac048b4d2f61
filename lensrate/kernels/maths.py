"""Small numerical pieces every kernel shares: a fast exponential, the mean absolute value of a Gaussian."""

import math

import numba
import numpy as np
from numba.core import types
from numba.extending import intrinsic

from ._jit import kernel

_LOG2E = 1.4426950408889634
_LN2_HI = 6.93147180369123816490e-01
_LN2_LO = 1.90821492927058770002e-10
# Taylor coefficients 1/k!, enough for 1e-14 on |r| <= ln2 / 2
_C = tuple(1.0 / math.factorial(k) for k in range(12))
_C2, _C3, _C4, _C5, _C6, _C7, _C8, _C9, _C10, _C11 = _C[2:]

if numba.config.DISABLE_JIT:

    def _bits(i):
        return float(np.int64(i).view(np.float64))

    def _bits32(i):
        return np.int32(i).view(np.float32)

else:

    @intrinsic
    def _bits(typingctx, i):
        """Read 64 bits as a double: the exponent field of 2^n is made by integer arithmetic."""

        def codegen(context, builder, signature, args):
            return builder.bitcast(args[0], context.get_value_type(types.float64))

        return types.float64(types.int64), codegen

    @intrinsic
    def _bits32(typingctx, i):
        """As `_bits`, in single precision."""

        def codegen(context, builder, signature, args):
            return builder.bitcast(args[0], context.get_value_type(types.float32))

        return types.float32(types.int32), codegen


@kernel(inline="always")
def fexp(x):
    """exp(x) for x < 700 to about 1e-14, 1e-304 below -700; branch-free, so that loops over it vectorise."""
    x = max(x, -700.0)
    n = np.floor(x * _LOG2E + 0.5)
    r = (x - n * _LN2_HI) - n * _LN2_LO
    p = _C10 + r * _C11
    p = _C9 + r * p
    p = _C8 + r * p
    p = _C7 + r * p
    p = _C6 + r * p
    p = _C5 + r * p
    p = _C4 + r * p
    p = _C3 + r * p
    p = _C2 + r * p
    p = 1.0 + r * (1.0 + r * p)
    return p * _bits((np.int64(n) + 1023) << 52)


_S = tuple(np.float32(c) for c in _C[2:8])
_S2, _S3, _S4, _S5, _S6, _S7 = _S
_S_LOG2E, _S_LN2_HI, _S_LN2_LO = np.float32(_LOG2E), np.float32(0.693359375), np.float32(-2.12194440e-4)
_S_LEAST, _S_HALF, _S_ONE = np.float32(-87.0), np.float32(0.5), np.float32(1.0)


@kernel(inline="always")
def fexp32(x):
    """As `fexp` in single precision, for x < 88 to about 2e-7, 2e-38 below -87; twice as many at a time."""
    x = max(x, _S_LEAST)
    n = np.floor(x * _S_LOG2E + _S_HALF)
    r = (x - n * _S_LN2_HI) - n * _S_LN2_LO
    p = _S6 + r * _S7
    p = _S5 + r * p
    p = _S4 + r * p
    p = _S3 + r * p
    p = _S2 + r * p
    p = _S_ONE + r * (_S_ONE + r * p)
    return p * _bits32((np.int32(n) + np.int32(127)) << np.int32(23))


# E|u + N(0,1)| on [0, U_MAX] as cubics, from Hermite interpolation of it and its derivative (error below 3e-10)
_PER_UNIT = 64.0
_U_MAX = 8.0
_U = np.arange(int(_U_MAX * _PER_UNIT) + 2) / _PER_UNIT
_ERF = np.array([math.erf(v / math.sqrt(2.0)) for v in _U])
_MEAN_ABS = np.sqrt(2.0 / np.pi) * np.exp(-0.5 * _U**2) + _U * _ERF
_A0, _A1 = _MEAN_ABS[:-1].copy(), _ERF[:-1] / _PER_UNIT
_A2 = 3.0 * (_MEAN_ABS[1:] - _A0) - 2.0 * _A1 - _ERF[1:] / _PER_UNIT
_A3 = 2.0 * (_A0 - _MEAN_ABS[1:]) + _A1 + _ERF[1:] / _PER_UNIT


@kernel(inline="always")
def mean_abs(u):
    """Mean of |u + N(0, 1)|; branch-free, so that loops over it vectorise."""
    u = abs(u)
    v = (u if u < _U_MAX else _U_MAX) * _PER_UNIT
    whole = np.int32(v)
    # without a sign: numba counts negative indices from the end, at a cost
    i = np.uint32(whole)
    t = v - whole
    y = _A0[i] + t * (_A1[i] + t * (_A2[i] + t * _A3[i]))
    return y if u < _U_MAX else u
