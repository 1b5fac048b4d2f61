"""Ctrl-C: how it looks where compiled code was at work, and what a long run keeps for the next one."""

from contextlib import contextmanager

from .text import safe

__all__ = ["held", "keeping", "words_of"]

_NOTHING = "nothing half written was left"


class _Kept(KeyboardInterrupt):
    """Ctrl-C, with words on what is kept."""


def _chain(error):
    while error is not None:
        yield error
        error = error.__cause__ or error.__context__


def held(error):
    """Whether an exception was raised from, or while handling, Ctrl-C: compiled code answers with a SystemError."""
    return any(isinstance(e, KeyboardInterrupt) for e in _chain(error))


def words_of(error):
    """Return the line to be printed for Ctrl-C."""
    kept = next((str(e) for e in _chain(error) if isinstance(e, _Kept)), _NOTHING)
    return f"interrupted; {kept}"


@contextmanager
def keeping(what, path):
    """Around a run that keeps finished work for the same command: Ctrl-C says so where there is some.

    Parameters
    ----------
    what : str
        For example "finished pixels".
    path : Path or None
        Where they are kept; None if this run writes no file.
    """
    try:
        yield
    except (KeyboardInterrupt, SystemError) as error:
        if not held(error):
            raise
        if path is None:
            raise _Kept("nothing was kept, since no file is written") from error
        if not path.exists():
            raise _Kept(_NOTHING) from error
        raise _Kept(f"{what} are kept in '{safe(path)}', the same command goes on from there") from error
