"""Write results whole or not at all, with how they were made; the format follows from the file's ending."""

import json
import os
import tempfile
from contextlib import contextmanager
from io import BytesIO, StringIO
from pathlib import Path

import numpy as np

from .claims import check_claims, check_nodes
from .errors import DataFileError, InputError

__all__ = [
    "PICTURES", "TABLES", "check_target", "dump_json", "header_of", "read_rows", "whole_bytes", "whole_file",
    "write_table",
]  # fmt: skip

TABLES = (".ecsv", ".csv", ".fits", ".vot", ".json")
PICTURES = (".png", ".pdf", ".svg")
_ASTROPY = {".ecsv": "ascii.ecsv", ".fits": "fits", ".vot": "votable"}
_LARGEST_TABLE = 200_000_000  # bytes of an input table


def check_target(path, endings, overwrite=False, what="--save"):
    """Raise unless a file can be written there; to be called before the work.

    Parameters
    ----------
    path : str or Path
        Target.
    endings : tuple of str
        Known endings.
    overwrite : bool
        Whether an existing file may be replaced.
    what : str
        Option or argument named in complaints.

    Returns
    -------
    Path

    Raises
    ------
    InputError
        Unknown ending, existing file without `overwrite`, folder missing or not writable.
    """
    path = Path(path)
    if path.suffix.lower() not in endings:
        raise InputError(
            f"{what}: ending '{path.suffix}' of '{path}' is not known "
            f"(known: {', '.join(endings)})"
        )
    folder = path.parent
    if not os.path.isdir(folder):
        raise InputError(f"{what}: folder '{folder}' does not exist; make it first")
    if os.path.isdir(path):
        raise InputError(f"{what}: '{path}' is a folder; name a file")
    if os.path.exists(path) and not overwrite:
        raise InputError(f"{what}: '{path}' exists; choose another name or add --overwrite")
    if not os.access(folder, os.W_OK):
        raise InputError(f"{what}: folder '{folder}' is not writable; choose another one")
    return path


@contextmanager
def whole_file(path):
    """Give a temporary name beside `path`, and move it there only if the block succeeds.

    Parameters
    ----------
    path : str or Path
        Final name.

    Yields
    ------
    Path
        Name to write to, with the same ending.

    Raises
    ------
    DataFileError
        The file could not be written (disk full, folder gone); nothing is left behind.
    """
    path = Path(path)
    temporary = None
    try:
        handle, name = tempfile.mkstemp(prefix=f".{path.stem}.", suffix=path.suffix, dir=path.parent)
        os.close(handle)
        temporary = Path(name)
        yield temporary
        with open(temporary, "rb+") as f:
            os.fsync(f.fileno())
        mask = os.umask(0)
        os.umask(mask)
        os.chmod(temporary, 0o666 & ~mask)
        os.replace(temporary, path)
        temporary = None
    except OSError as error:
        raise DataFileError(
            f"{path}: could not be written ({error.strerror or error}); nothing was left there"
        ) from error
    finally:
        if temporary is not None:
            temporary.unlink(missing_ok=True)


@contextmanager
def whole_bytes(path):
    """Give a buffer, and write what it holds to `path` as `whole_file` does.

    For writers of other libraries, which leave files open or raise errors of their own where the disk is full.

    Yields
    ------
    io.BytesIO

    Raises
    ------
    DataFileError
        As `whole_file`.
    """
    buffer = BytesIO()
    yield buffer
    with whole_file(path) as temporary:
        temporary.write_bytes(buffer.getbuffer())


def dump_json(value, indent=2):
    """Return JSON text; numpy numbers become plain ones and anything not finite becomes null."""
    return json.dumps(_plain(value), indent=indent, allow_nan=False)


def _plain(value):
    if isinstance(value, dict):
        return {str(k): _plain(v) for k, v in value.items()}
    if isinstance(value, (list, tuple)):
        return [_plain(v) for v in value]
    if isinstance(value, np.ndarray):
        return _plain(value.tolist())
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float):
        return value if np.isfinite(value) else None
    return value


def write_table(table, path, overwrite=False, payload=None):
    """Write a table with its metadata.

    Parameters
    ----------
    table : astropy.table.Table
        Columns with units and descriptions; `meta` says how it was made.
    path : str or Path
        Target; .ecsv .csv .fits .vot .json.
    overwrite : bool
        Whether an existing file may be replaced.
    payload : dict, optional
        Written instead of the columns where the ending is .json.

    Returns
    -------
    Path

    Raises
    ------
    InputError, DataFileError
        See `check_target` and `whole_file`.
    """
    path = check_target(path, TABLES, overwrite)
    ending = path.suffix.lower()
    meta = _plain(dict(table.meta))
    with whole_file(path) as temporary:
        if ending == ".json":
            body = payload if payload is not None else {c: _plain(np.asarray(table[c])) for c in table.colnames}
            temporary.write_text(dump_json({"made": meta, **body}) + "\n", encoding="utf-8")
        elif ending == ".csv":
            _write_csv(table, meta, temporary)
        else:
            out = table.copy()
            out.meta.clear()
            if ending == ".fits":
                # a header drops nested metadata: one JSON string in ASCII keeps all of it
                out.meta["MADE"] = json.dumps(meta, ensure_ascii=True)
            elif ending == ".vot":
                _write_votable(out, json.dumps(meta, ensure_ascii=True), temporary)
                return path
            else:
                # the header loses line breaks: what has some stands in the JSON string alone
                out.meta.update({k: v for k, v in meta.items() if "\\n" not in json.dumps(v)})
                out.meta["MADE"] = json.dumps(meta, ensure_ascii=True)
            buffer = BytesIO() if ending == ".fits" else StringIO()
            _write_astropy(out, buffer, ending)
            content = buffer.getvalue()
            temporary.write_bytes(content if ending == ".fits" else content.encode())
    return path


def _write_votable(table, made, path):
    import warnings

    from astropy.io.votable import from_table
    from astropy.io.votable.tree import Info

    votable = from_table(table)
    # an attribute keeps the text as it is; a description would be wrapped
    votable.infos.append(Info(name="MADE", value=made))
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        votable.to_xml(str(path))


def _write_astropy(table, path, ending):
    import warnings

    with warnings.catch_warnings():
        # long strings go into CONTINUE cards, which astropy announces
        warnings.simplefilter("ignore")
        table.write(path, format=_ASTROPY[ending], overwrite=True)


def _write_csv(table, meta, path):
    lines = [f"# {key}: {json.dumps(value, ensure_ascii=True)}" for key, value in meta.items()]
    units = {c: str(table[c].unit or "") for c in table.colnames}
    lines.append(f"# units: {json.dumps(units)}")
    lines.append(",".join(table.colnames))
    columns = [np.asarray(getattr(table[c], "value", table[c])) for c in table.colnames]
    for row in zip(*columns):
        lines.append(",".join(_cell(v) for v in row))
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")


def _cell(value):
    if isinstance(value, (float, np.floating)):
        return repr(float(value))
    text = str(value)
    return '"' + text.replace('"', '""') + '"' if any(c in text for c in ',"\n') else text


def read_rows(path, what="table"):
    """Read a table that astropy reads, guessing the format from the ending.

    Parameters
    ----------
    path : str or Path
        .ecsv .csv .fits .vot, or plain text with a header line.
    what : str
        Named in complaints.

    Returns
    -------
    astropy.table.Table

    Raises
    ------
    InputError
        Missing, empty, too large or unreadable.
    """
    from astropy.table import Column, Table

    path = Path(path)
    if not os.path.isfile(path):
        raise InputError(f"{what}: no file '{path}'")
    if path.stat().st_size > _LARGEST_TABLE:
        raise InputError(f"{what}: '{path}' has {path.stat().st_size} bytes, at most {_LARGEST_TABLE} are read")
    check_claims(path, what)
    ending = path.suffix.lower()
    formats = {**_ASTROPY, ".csv": "ascii.csv"}
    import warnings

    try:
        with warnings.catch_warnings():
            warnings.simplefilter("ignore")
            if ending == ".fits":
                # from memory, since astropy leaves a damaged file open
                table = Table.read(BytesIO(path.read_bytes()), format="fits")
            else:
                more = {"comment": "#"} if ending == ".csv" else {}
                table = Table.read(path, format=formats.get(ending, "ascii"), **more)
    except InputError:
        raise
    except Exception as error:  # astropy's readers raise many kinds; all mean that the file is not what it should be
        reason = " ".join(str(error).split())[:160]
        raise InputError(
            f"{what}: '{path}' cannot be read as {ending or 'a table'} ({type(error).__name__}: {reason})"
        ) from None
    if len(table) == 0:
        raise InputError(f"{what}: '{path}' has no rows")
    check_nodes(dict(table.meta), f"{what}: '{path}'")
    for name in table.colnames:
        column = table[name]
        if not isinstance(column, Column):
            raise InputError(
                f"{what}: '{path}': column {name} holds {type(column).__name__} objects; plain numbers or text are read"
            )
        if column.ndim != 1:
            raise InputError(
                f"{what}: '{path}': column {name} has several values in a cell; leave it out, or one value a row"
            )
    return table


def header_of(table):
    """Return a table's header as a dict with small keys, comment lines ``key: value`` of CSV included."""
    head = {}
    for key, value in table.meta.items():
        if key.lower() == "made":
            # the one header card of lensrate's own FITS files
            try:
                head.update(json.loads(value))
            except (TypeError, ValueError):
                continue
        elif key == "comments":
            for line in value:
                name, colon, text = str(line).partition(":")
                if colon and name.strip().isidentifier():
                    try:
                        head[name.strip()] = json.loads(text)
                    except ValueError:
                        head[name.strip()] = text.strip()
        else:
            head[key] = value
    # FITS knows capitals only
    small = {"FRAME": "frame", "T_0PAR": "t_0par", "PRIOR": "prior", "EVENT": "event", "INVENTED": "invented"}
    small |= {name.upper(): name for name in ("l", "b", "ra", "dec", "solution", "per", "includes", "u_0_limit")}
    return {small.get(k, k): v for k, v in head.items()}
