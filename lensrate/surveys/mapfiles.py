"""Files of a map: the one that grows while it is computed, and the FITS images it ends as."""

import errno
import hashlib
import json
import os
import zlib
from contextlib import suppress
from pathlib import Path

from ..errors import DataFileError, InputError
from ..io import check_target, dump_json, whole_bytes
from .pixels import Pixel

__all__ = ["PartFile", "digest", "hdu_list", "write_fits"]

_MARK = "lensrate sky map in the making, 2"


def digest(made):
    """Return a checksum of what decides a map, given as plain JSON values."""
    return hashlib.sha256(json.dumps(made, sort_keys=True).encode()).hexdigest()[:16]


class PartFile:
    """Finished pixels, a line of JSON and its checksum each, added as they are done; without a path nothing is kept.

    Parameters
    ----------
    path : str or Path or None
    key : str
        Checksum of what decides the result, see `digest`.
    restart : bool
        Drop what another map left under this name.

    Raises
    ------
    InputError
        The file holds pixels of another map.
    DataFileError
        It cannot be written.
    """

    def __init__(self, path, key, restart=False):
        self.path, self.found, self._handle = None if path is None else Path(path), {}, None
        if path is None:
            return
        try:
            text = self.path.read_bytes() if self.path.is_file() else b""
            whole = self._take(text, key, restart)
            self._handle = os.open(self.path, os.O_WRONLY | os.O_CREAT | os.O_APPEND, 0o666)
            # a line that was cut short by the end of the run goes
            os.ftruncate(self._handle, whole)
            if whole == 0:
                os.write(self._handle, (json.dumps({"mark": _MARK, "key": key}) + "\n").encode())
        except OSError as error:
            raise DataFileError(f"checkpoint: '{self.path}' cannot be written ({error.strerror or error})") from None

    def _take(self, text, key, restart):
        """Read the pixels of an earlier run; return how many bytes of the file are whole lines of it."""
        end = text.find(b"\n") + 1
        if end == 0:
            return 0
        try:
            head = json.loads(text[:end])
            ours = head.get("mark") == _MARK and head["key"] == key
        except (ValueError, AttributeError, KeyError):
            ours = False
        if not ours:
            if restart:
                return 0
            raise InputError(
                f"checkpoint: '{self.path}' holds pixels of another map (other assumptions, pixels or version); finish "
                "that one by its own command, delete the file, or add --overwrite"
            )
        while (stop := text.find(b"\n", end) + 1) > 0:
            try:
                body, _, check = text[end : stop - 1].rpartition(b"\t")
                if int(check, 16) != zlib.crc32(body):
                    break
                number, values = json.loads(body)
                self.found[int(number)] = Pixel.from_list(values)
            except (ValueError, TypeError):
                break
            end = stop
        return end

    def add(self, number, pixel):
        """Keep a pixel; numbers are written so that they are read back bit for bit."""
        if self._handle is not None:
            body = json.dumps([number, pixel.to_list()]).encode()
            line = body + f"\t{zlib.crc32(body):08x}\n".encode()
            try:
                if os.write(self._handle, line) < len(line):
                    raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
            except OSError as error:
                raise DataFileError(
                    f"checkpoint: '{self.path}' cannot be written ({error.strerror}); finished pixels are kept in it"
                ) from None

    def close(self):
        """Close the file; it stays, for whoever made the map of it to remove once that is safe."""
        if self._handle is not None:
            with suppress(OSError):
                os.close(self._handle)
            self._handle = None


def hdu_list(result):
    """Return the FITS images of a map on a grid: one extension for each quantity.

    Parameters
    ----------
    result : SkyMap

    Returns
    -------
    astropy.io.fits.HDUList

    Raises
    ------
    InputError
        A list of fields, which is no image.

    Notes
    -----
    Every image has l on its first axis, increasing to the left, b on its second, and a celestial WCS of its own. The
    primary header says how the map was made: the card MADE is JSON.
    """
    import warnings

    from astropy.io import fits

    if result.grid is None:
        raise InputError("skymap: a list of fields is no image; save it as a table (.ecsv .csv .fits .vot .json)")
    primary = fits.PrimaryHDU()
    cards = {
        "PROGRAM": ("lensrate", "made by"),
        "VERSION": (result.version, "of the program"),
        "SCENARIO": (_ascii(result.scenario.name)[:60], "assumptions"),
        "SCENHASH": (result.scenario.hash, "checksum of the assumptions"),
    }
    hdus = [primary]
    with warnings.catch_warnings():
        # long strings go into CONTINUE cards, which astropy announces
        warnings.simplefilter("ignore")
        for name, card in cards.items():
            primary.header[name] = card
        primary.header["MADE"] = json.dumps(json.loads(dump_json(result.meta())), ensure_ascii=True)
        for name, q in result.quantities().items():
            hdu = fits.ImageHDU(result.grid.image(q.values), name=_ascii(name).upper())
            hdu.header["BUNIT"] = (q.unit.to_string("fits") if str(q.unit) else "", "unit of the values")
            for key, card in result.grid.header().items():
                hdu.header[key] = card
            hdu.header["SCENHASH"] = cards["SCENHASH"]
            hdu.header["COMMENT"] = _ascii(q.description)
            hdus.append(hdu)
    return fits.HDUList(hdus)


def _ascii(text):
    """Text that a FITS header holds."""
    return "".join(c if " " <= c <= "~" else "?" for c in text)


def write_fits(result, path, overwrite=False):
    """Write `hdu_list`, whole or not at all.

    Parameters
    ----------
    result : SkyMap
    path : str or Path
        Ending in ``.fits``.
    overwrite : bool

    Returns
    -------
    Path

    Raises
    ------
    InputError, DataFileError
        See `io.check_target` and `io.whole_file`.
    """
    path = check_target(path, (".fits",), overwrite)
    hdus = hdu_list(result)
    with whole_bytes(path) as buffer:
        hdus.writeto(buffer)
    return path
