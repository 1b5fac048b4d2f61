"""Find a shipped parameter set or table, check that it is undamaged, and give its references."""

import hashlib
import os
import tomllib
from functools import cache
from pathlib import Path

from .errors import DataFileError, InputError, one_of

__all__ = [
    "data_folder",
    "field_checksum",
    "field_names",
    "field_path",
    "find",
    "names",
    "parse_toml",
    "read_set",
    "sample_names",
]

_DEEPEST = 32  # levels of nested tables
_LIMIT = 4_000_000  # bytes; the largest text file we ship is far smaller


@cache
def data_folder():
    """Return the folder of shipped data.

    Returns
    -------
    Path
        ``$LENSRATE_DATA``, the installed package's own, or the checkout's ``data``, in this order.

    Raises
    ------
    DataFileError
        None of them exists.
    """
    package = Path(__file__).parent
    given = os.environ.get("LENSRATE_DATA")
    if given:
        if not Path(given).is_dir():
            raise DataFileError(
                f"$LENSRATE_DATA: no folder '{given}'; unset it or point it at a copy of lensrate's data"
            )
        return Path(given)
    if (package / "_data").is_dir():
        return package / "_data"
    project = package.parent / "pyproject.toml"
    if project.is_file() and 'name = "lensrate"' in project.read_text() and (package.parent / "data").is_dir():
        return package.parent / "data"
    raise DataFileError(
        f"data: not in $LENSRATE_DATA, {package / '_data'} or {package.parent / 'data'}; reinstall lensrate"
    )


def _sha256(path):
    with open(path, "rb") as f:  # in pieces: fields have 30 MB
        return hashlib.file_digest(f, "sha256").hexdigest()


@cache
def checksums():
    """Return {relative path: sha256} of every shipped file, from ``SHA256SUMS``."""
    rows = (data_folder() / "SHA256SUMS").read_text().splitlines()
    return {name.strip(): digest for digest, name in (row.split("  ", 1) for row in rows if row)}


def find(relative):
    """Return the path of a shipped file after checking its sha256.

    Parameters
    ----------
    relative : str
        Path below the data folder, with forward slashes.

    Returns
    -------
    Path

    Raises
    ------
    DataFileError
        Missing, not listed in SHA256SUMS, or changed since it was shipped.
    """
    path = data_folder() / relative
    if not path.is_file():
        raise DataFileError(f"{relative}: missing from {data_folder()}; reinstall lensrate")
    listed = checksums().get(relative)
    if listed is None:
        raise DataFileError(f"{relative}: not listed in SHA256SUMS of {data_folder()}")
    if _sha256(path) != listed:
        raise DataFileError(
            f"{relative}: its sha256 differs from the shipped one; reinstall lensrate, "
            "or keep your own copy under another name"
        )
    return path


def names(kind):
    """Return the sorted names of the shipped sets of one kind ("galaxy", "kicks", ...)."""
    return list(_names(data_folder(), kind, ".toml"))


@cache
def _names(folder, kind, ending):
    return tuple(sorted(p.stem for p in (folder / kind).glob(f"*{ending}")))


def sample_names():
    """Return the sorted names of the shipped (invented) samples of events."""
    return list(_names(data_folder(), "samples", ".ecsv"))


def field_names():
    """Return the sorted names of the shipped kick-resolved fields."""
    return list(_names(data_folder(), "fields", ".fits"))


def field_path(name):
    """Return the path of kick-resolved fields: a shipped name, or a user's file ending in ``.fits``.

    Raises
    ------
    InputError
        Unknown name, or no such file.
    DataFileError
        A shipped file that is damaged.
    """
    if not str(name).endswith(".fits"):
        one_of("fields", str(name), field_names())
        return find(f"fields/{name}.fits")
    if not os.path.isfile(name):
        raise InputError(f"fields: no file '{name}'; make one with 'lensrate synthesize'")
    return Path(name)


@cache
def _checksum(path, _stamp):
    return _sha256(path)


def set_checksum(kind, name):
    """Return the sha256 of the file that `read_set` reads."""
    return _sha256(name if str(name).endswith(".toml") else find(f"{kind}/{name}.toml"))


def field_checksum(name):
    """Return the sha256 of kick-resolved fields, as listed for shipped ones."""
    listed = checksums().get(f"fields/{name}.fits")
    if listed is not None:
        return listed
    path = field_path(name)
    status = path.stat()
    return _checksum(str(path), (status.st_mtime_ns, status.st_size))


def parse_toml(path, limit=_LIMIT):
    """Read a TOML file with complaints a user can act on.

    Parameters
    ----------
    path : str or Path
        File to read.
    limit : int
        Largest accepted size in bytes.

    Returns
    -------
    dict

    Raises
    ------
    InputError
        Missing, unreadable, too large, not UTF-8 or not TOML.
    """
    path = Path(path)
    try:
        with open(path, "rb") as file:
            content = file.read(limit + 1)  # what a device or a pipe gives has no size to ask for
        if len(content) > limit:
            raise InputError(f"{path}: more than {limit} bytes, which no TOML file here has")
        table = tomllib.loads(content.decode("utf-8").replace("\r\n", "\n"))
        _check_plain(path, table)
        return table
    except FileNotFoundError:
        raise InputError(f"{path}: no such file") from None
    except IsADirectoryError:
        raise InputError(f"{path}: is a folder, a file is needed") from None
    except OSError as error:
        raise InputError(f"{path}: cannot be read ({error.strerror})") from None
    except (ValueError, RecursionError) as error:
        if isinstance(error, InputError):
            raise
        raise InputError(f"{path}: not a valid TOML file ({str(error)[:120]})") from None


def _check_plain(path, table):
    """Raise where tables are nested too deep for anything here, or a whole number is larger than TOML knows."""
    level, depth = [table], 0
    while level:
        depth += 1
        if depth > _DEEPEST:
            raise InputError(f"{path}: tables and lists are nested more than {_DEEPEST} deep")
        inner = []
        for value in level:
            for v in value.values() if isinstance(value, dict) else value:
                if isinstance(v, (dict, list)):
                    inner.append(v)
                elif isinstance(v, int) and not -(2**63) <= v < 2**63:
                    raise InputError(f"{path}: a whole number of {v.bit_length()} bits, TOML knows 64")
        level = inner


@cache
def _shipped(relative):
    return parse_toml(find(relative))


def read_set(kind, name):
    """Read a shipped parameter set by name, or a user's file by path.

    Parameters
    ----------
    kind : str
        Folder below the data folder: "galaxy", "kicks", "remnants", "sources", "scenarios".
    name : str
        Name of a shipped set, or a path ending in ``.toml``.

    Returns
    -------
    dict
        Shared between callers: do not change it.

    Raises
    ------
    InputError
        Unknown name (with the nearest known one), or a user's file that is not TOML.
    """
    if str(name).endswith(".toml"):
        return parse_toml(name)
    one_of(kind, str(name), names(kind))
    return _shipped(f"{kind}/{name}.toml")
