"""Published numbers about source stars and dust, recomputed: one function for each row."""

import math
from functools import cache, partial

import numpy as np

from ..remnants.history import History
from ..remnants.ifmr import Ifmr
from ..remnants.imf import Imf
from ..remnants.lifetimes import Lifetimes
from ..remnants.population import population
from ..sources.extinction import DustDisc, extinction_from_colours
from ..sources.luminosity import luminosity_function

__all__ = ["COMPUTE"]


@cache
def _old(band):
    """Luminosity function of a 10 Gyr burst."""
    history, imf, lifetimes = History(10, 10), Imf.read("kroupa2001"), Lifetimes.read("standard")
    return luminosity_function(band, history, population(history, imf, lifetimes, Ifmr.read("default")), imf, lifetimes)


def _density(band, M, step=0.05):
    """Stars per magnitude at M, over a bin of twice the step."""
    function = _old(band)
    return (function.brighter(M + step) - function.brighter(M - step)) / (2 * step)


def _peak(band, lo, hi):
    """Magnitude at which the luminosity function is highest between two magnitudes."""
    M = np.linspace(lo, hi, 2001)
    high = _density(band, M)
    top = M[high > 0.999 * high.max()]
    return float(top.mean())


def _clump_at(distance_kpc):
    return _peak("I", -0.6, 0.4) + 5 * math.log10(100 * distance_kpc)


def _slope():
    """Between the clump and the subgiants there are only giants."""
    return float(np.log(_density("I", 1.6) / _density("I", 0.6)))


def _baade():
    line = math.radians(1), math.radians(-3.9)
    return float(DustDisc.read().profile(*line, [8.0], R0=8.178, z_sun=0.0208)[0])


COMPUTE = {
    "G1_M_I": partial(_peak, "I", -0.6, 0.4),
    "G1_V_I": lambda: _peak("V", 0.4, 1.4) - _peak("I", -0.6, 0.4),
    "G1_J_Ks": lambda: _peak("J", -1.4, -0.4) - _peak("Ks", -2.1, -1.1),
    "G2_clump_at_8.20": partial(_clump_at, 8.20),
    "G3_a": partial(extinction_from_colours, 1.0, 0.3433),
    "G3_b": partial(extinction_from_colours, 1.0, 0.28),
    "G3_c": partial(extinction_from_colours, 2.0, 0.8),
    "G7_slope": _slope,
    "G9_A_I": _baade,
}
