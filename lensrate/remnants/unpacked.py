"""Unpacked copies of field files in the user's cache folder, which are mapped into memory instead of decoded.

A copy is named after the sha256 of its field file, written whole, and never needed: without it the file itself is read.
"""

import json
import os
import zlib
from pathlib import Path

import numpy as np

from ..errors import DataFileError
from ..io import whole_file
from .fields import Grid, RemnantField

__all__ = ["damaged_copies", "read_unpacked"]

_MARK = b"lensrate unpacked field 2\n"
_LARGE = ("ln_rho", "four", "two", "batches", "kick_edges", "heights", "height_edges")
_KEEP = 3  # copies, of 130 MB each
_ALIGN = 64


def _folder():
    return Path(os.environ.get("XDG_CACHE_HOME") or Path.home() / ".cache") / "lensrate" / "fields"


def read_unpacked(path, sha256):
    """Read kick-resolved fields by their unpacked copy, which is made if there is none and one can be written.

    Parameters
    ----------
    path : str or Path
        Field file.
    sha256 : str
        Of its content.

    Returns
    -------
    RemnantField

    Raises
    ------
    DataFileError
        As `RemnantField.read`.
    """
    copy = _folder() / f"{sha256}.bin"
    field = _mapped(copy)
    if field is None:
        field = RemnantField.read(path)
        try:
            copy.parent.mkdir(parents=True, exist_ok=True)
            _write(field, copy)
            for old in sorted(copy.parent.glob("*.bin"), key=lambda p: p.stat().st_mtime)[:-_KEEP]:
                old.unlink()
        except (OSError, DataFileError):
            pass  # no place to write to, or another process was there first
    return field


def damaged_copies():
    """Return the copies whose content is not what was written, and remove them: the next run makes them again.

    Looking costs more than mapping, so a forecast does not; ``lensrate verify`` does.

    Returns
    -------
    list of str
        Their paths.
    """
    out = []
    for copy in sorted(_folder().glob("*.bin")):
        field = _mapped(copy)
        with open(copy, "rb") as f:
            if f.readline() != _MARK:
                continue  # of another version
            try:
                sums = json.loads(f.readline())["sums"]
            except (ValueError, KeyError, TypeError):
                sums = None
        whole = field is not None and sums is not None
        if not (whole and all(zlib.crc32(getattr(field, k).data.cast("B")) == v for k, v in sums.items())):
            out.append(str(copy))
            copy.unlink(missing_ok=True)
    return out


def _write(field, copy):
    arrays = {name: np.ascontiguousarray(getattr(field, name)) for name in _LARGE}
    ends = {name: a.tolist() for name, a in field.ends.items()}
    small = {k: getattr(field, k) for k in ("components", "bar_angle", "mismatch", "provenance")}
    layout = {name: [a.dtype.str, a.shape] for name, a in arrays.items()}
    sums = {name: zlib.crc32(a.data.cast("B")) for name, a in arrays.items()}
    said = {**small, "sums": sums, "grid": vars(field.grid), "ends": ends, "layout": layout}
    head = json.dumps(said).encode() + b"\n"
    with whole_file(copy) as temporary, open(temporary, "wb") as f:
        f.write(_MARK + head)
        for a in arrays.values():
            f.write(b"\0" * (-f.tell() % _ALIGN))
            f.write(a.data)
        f.write(_MARK)


def _mapped(copy):
    """Map a copy into memory; None where there is none, or not a whole one."""
    try:
        with open(copy, "rb") as f:
            if f.readline() != _MARK:
                return None
            made = json.loads(f.readline())
            start, layout, _ = f.tell(), made.pop("layout"), made.pop("sums")
        # private pages: what is written to stays in this process, and kernels see plain arrays
        whole = np.memmap(copy, dtype=np.uint8, mode="c")
        arrays = {}
        for name, (dtype, shape) in layout.items():
            start += -start % _ALIGN
            stop = start + np.dtype(dtype).itemsize * int(np.prod(shape))
            arrays[name] = np.asarray(whole[start:stop]).view(dtype).reshape(shape)
            start = stop
        if whole[start:].tobytes() != _MARK:
            return None
        ends = {name: np.array(rows) for name, rows in made.pop("ends").items()}
        return RemnantField(
            **arrays, **{**made, "components": tuple(made["components"]), "grid": Grid(**made["grid"]), "ends": ends}
        )
    except (OSError, ValueError, KeyError, TypeError, AttributeError):
        return None
