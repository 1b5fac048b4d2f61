"""What lensrate raises, and the wording that every complaint shares."""

from difflib import get_close_matches

__all__ = ["ConvergenceError", "DataFileError", "InputError", "LensrateError", "did_you_mean", "one_of"]


_SHOWN = 24  # known words that a complaint lists in full


class LensrateError(Exception):
    """Root of everything lensrate raises on purpose."""


class InputError(LensrateError, ValueError):
    """An argument, option, key or column that cannot be used; the command line exits with 2."""


class DataFileError(LensrateError, OSError):
    """A file that is missing, damaged or not ours; the command line exits with 1."""


class ConvergenceError(LensrateError):
    """A number that did not settle; the command line exits with 1."""


def did_you_mean(word, known):
    """Return ", did you mean 'x'?" for the nearest of `known`, or an empty string.

    Parameters
    ----------
    word : str
        What was typed.
    known : iterable of str
        What would have been understood.

    Returns
    -------
    str
    """
    near = get_close_matches(str(word).lower(), {str(k).lower(): k for k in known}, n=1, cutoff=0.5)
    if not near:
        return ""
    original = {str(k).lower(): k for k in known}[near[0]]
    return f", did you mean '{original}'?"


def kind_of(what, value, kinds, words):
    """Return `value` if it is an instance of `kinds`, else raise: `words` say what is wanted and how it is had.

    Raises
    ------
    InputError
        With the kind that was given.
    """
    if isinstance(value, kinds):
        return value
    raise InputError(f"{what}: {type(value).__name__} given, {words} is needed")


def one_of(what, word, known):
    """Return `word` if it is one of `known`, else raise with the nearest known word.

    Parameters
    ----------
    what : str
        Name of the argument, for the message.
    word : str
        What was typed.
    known : collection of str
        The allowed words.

    Returns
    -------
    str
        `word` unchanged.

    Raises
    ------
    InputError
        If `word` is not among `known`.
    """
    # a file may hold a list or a table where a word belongs
    if isinstance(word, (str, int, float)) and word in known:
        return word
    shown = sorted(map(str, known))
    if len(shown) > _SHOWN:
        shown = [*get_close_matches(str(word), shown, n=_SHOWN, cutoff=0.0), f"... ({len(shown)} in all)"]
    raise InputError(f"{what}: '{word}' is not known{did_you_mean(word, known)} (known: {', '.join(shown)})")
