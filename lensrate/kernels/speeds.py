"""Mean lengths of 2-D Gaussian vectors, a block at a time, so that the loops vectorise.

The mean length is half a circle's mean |projection| times pi / 2, spectrally exact in the number of directions. Vectors
that need half of them are gathered apart from the others: kinds 0 (easy) and 1.
"""

import math

import numpy as np

from ._jit import kernel
from .maths import mean_abs

__all__ = ["BLOCK", "ROUND", "SLOW", "gather", "half_circle", "mean_lengths"]

#: vectors at a time; all their numbers stay in the first cache
BLOCK = 256
#: (1 + q)^2 / q at q = 2.5, ratio of variances, and mean squared over trace, up to which 8 directions give 1e-4
ROUND, SLOW = 4.9, 3.0
_FEW = 16  # directions, of which half might be too few


@kernel
def half_circle(n):
    """Return cos, sin, cos^2, 2 cos sin, sin^2 of n directions even in half a circle, (5, n).

    Of an even number every second one comes first, so that the first half is even too.
    """
    out = np.empty((5, n))
    for i in range(n):
        j = i
        if n % 2 == 0:
            j = 2 * i if 2 * i < n else 2 * i - n + 1
        c, s = math.cos(math.pi * j / n), math.sin(math.pi * j / n)
        out[0, i], out[1, i], out[2, i], out[3, i], out[4, i] = c, s, c * c, 2.0 * c * s, s * s
    return out


@kernel(inline="always")
def gather(ml, mb, cll, clb, cbb, n, vectors, fill):
    """Write a vector's mean and covariance to the next place of its kind; return the kind.

    n directions are at hand; vectors (2, 5, BLOCK), fill (2,): number of each kind, counted up.
    """
    trace = cll + cbb
    easy = trace * trace < ROUND * (cll * cbb - clb * clb) and ml * ml + mb * mb < SLOW * trace
    kind = 0 if easy and n >= _FEW and n % 2 == 0 else 1
    k = fill[kind]
    fill[kind] = k + 1
    vectors[kind, 0, k] = ml
    vectors[kind, 1, k] = mb
    vectors[kind, 2, k] = cll
    vectors[kind, 3, k] = clb
    vectors[kind, 4, k] = cbb
    return kind


@kernel
def mean_lengths(vectors, kind, n, directions, out):
    """Fill out[:n] with the mean lengths of the first n vectors of a kind; directions from `half_circle`."""
    ml, mb = vectors[kind, 0, :n], vectors[kind, 1, :n]
    cll, clb, cbb = vectors[kind, 2, :n], vectors[kind, 3, :n], vectors[kind, 4, :n]
    total = out[:n]
    total[:] = 0.0
    many = directions.shape[1] if kind == 1 else directions.shape[1] // 2
    for i in range(many):
        c, s, cc, cs, ss = directions[0, i], directions[1, i], directions[2, i], directions[3, i], directions[4, i]
        for k in range(total.size):
            sig = math.sqrt(max(cll[k] * cc + clb[k] * cs + cbb[k] * ss, 1e-30))
            total[k] += sig * mean_abs((ml[k] * c + mb[k] * s) / sig)
    for k in range(total.size):
        total[k] *= 0.5 * math.pi / many
