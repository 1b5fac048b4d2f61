"""The photometric bands that sources can be limited in."""

from ..errors import one_of

__all__ = ["BANDS", "check_band"]

BANDS = ("V", "I", "J", "H", "Ks")


def check_band(where, band):
    """Return `band` if it is one of V, I, J, H, Ks, else raise InputError with the nearest one."""
    return one_of(where, band, BANDS)
