"""Rate densities of sightlines kept in a folder for later runs: plain arrays with checksums, whole or not there."""

import hashlib
import json
import os
import zlib
from pathlib import Path

import numpy as np

from .._version import __version__
from ..errors import InputError
from ..io import whole_file
from ..kernels._jit import KEY

__all__ = ["Kept", "folder_for"]

#: of the sources of this package, where settings outside the kernels are that change the numbers
SOURCES = hashlib.sha256(b"".join(f.read_bytes() for f in sorted(Path(__file__).parent.glob("*.py")))).hexdigest()[:12]
_MARK = b"lensrate sightline rates 1\n"
_ALIGN = 64
_MOST = 1 << 33  # bytes that a file may claim


def folder_for(path):
    """Return a folder as a Path, made if there is none; InputError where it cannot be made or written to."""
    folder = Path(path)
    try:
        folder.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"keep: folder '{path}' cannot be made ({error.strerror}); name another one") from None
    if not os.access(folder, os.W_OK):
        raise InputError(f"keep: folder '{path}' cannot be written to; name another one")
    return folder


class Kept:
    """Files of one sightline.

    Parameters
    ----------
    folder : str or Path
        Made if there is none.
    made : dict
        Everything that the numbers depend on; with the version and the text of kernels and lensing it names the files.

    Attributes
    ----------
    notes : list of str
        Files that could not be used, and why.

    Raises
    ------
    InputError
        The folder cannot be made or written to.
    """

    def __init__(self, folder, made):
        self.folder, self.notes = folder_for(folder), []
        self.made = json.loads(json.dumps({**made, "version": __version__, "kernels": KEY, "lensing": SOURCES}))

    def path(self, what):
        """Return the file of one set of arrays."""
        name = hashlib.sha256(json.dumps([what, self.made], sort_keys=True).encode()).hexdigest()[:24]
        return self.folder / f"{what}-{name}.rates"

    def load(self, what):
        """Return the arrays of a file by name; None where there is none, or none that can be used."""
        path = self.path(what)
        if not path.exists():
            return None
        try:
            return self._read(path, what)
        except (OSError, ValueError, KeyError, TypeError, AttributeError, OverflowError, RecursionError) as error:
            self.notes.append(f"{path}: not used and made anew ({error})")
            return None

    def _read(self, path, what):
        with open(path, "rb") as f:
            if f.readline(200) != _MARK:
                raise ValueError("not a file of sightline rates")
            head = json.loads(f.readline(1 << 20))
            if head["what"] != what or head["made"] != self.made:
                raise ValueError("not what its name says")
            out = {}
            for name, (dtype, shape) in head["layout"].items():
                f.seek(-f.tell() % _ALIGN, 1)
                dtype, shape = np.dtype(dtype), tuple(int(n) for n in shape)
                size = dtype.itemsize * int(np.prod(shape))
                if dtype.kind not in "fi" or not 0 <= size < _MOST:
                    raise ValueError("damaged: a layout that cannot be")
                data = f.read(size)
                if len(data) != size or zlib.crc32(data) != head["sums"][name]:
                    raise ValueError("damaged: checksum or length is wrong")
                out[name] = np.frombuffer(bytearray(data), dtype=dtype).reshape(shape)
        return out

    def save(self, what, arrays):
        """Write arrays by name.

        Raises
        ------
        DataFileError
            It could not be written.
        """
        arrays = {name: np.ascontiguousarray(a) for name, a in arrays.items()}
        head = {
            "what": what,
            "made": self.made,
            "layout": {name: [a.dtype.str, a.shape] for name, a in arrays.items()},
            "sums": {name: zlib.crc32(a.data.cast("B")) for name, a in arrays.items()},
        }
        with whole_file(self.path(what)) as temporary, open(temporary, "wb") as f:
            f.write(_MARK + json.dumps(head).encode() + b"\n")
            for a in arrays.values():
                f.write(b"\0" * (-f.tell() % _ALIGN))
                f.write(a.data)
