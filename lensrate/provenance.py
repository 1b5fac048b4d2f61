"""How a file of ours was made, read back from the file: tables, images, fields, pictures, JSON."""

import json
import os
import re
import struct
import zlib
from pathlib import Path
from xml.parsers import expat

from .claims import check_fits
from .errors import InputError
from .io import PICTURES, TABLES

__all__ = ["read_made"]

_LARGEST = 2_000_000_000  # bytes of a file that is looked into
_LARGEST_TEXT = 200_000_000  # of one that has to be read whole
_DEEPEST = 6  # levels at which a JSON file may say it


class _Stop(Exception):
    """Ends a parser early."""


def read_made(path):
    """Return what a file written by lensrate says about how it was made.

    Parameters
    ----------
    path : str or Path
        Anything that ``--save``, ``--plot`` or ``synthesize`` wrote, or saved output of ``--json``.

    Returns
    -------
    dict
        At least scenario_text and scenario_hash; as a rule also version, scenario, seed, header, references.

    Raises
    ------
    InputError
        No such file, or one that says nothing of the kind.
    """
    path = Path(path)
    if not os.path.isfile(path):
        raise InputError(f"'{path}': no such file")
    ending = path.suffix.lower()
    known = (*TABLES, *PICTURES)
    size = path.stat().st_size
    most = _LARGEST if ending == ".fits" else _LARGEST_TEXT
    if size > most:
        raise InputError(f"'{path}': {size} bytes, at most {most} are looked into")
    if ending not in known and ending in (".txt", "", ".out", ".log"):
        ending = ".json"  # what was redirected from --json may be called anything
    if ending == ".toml":
        raise InputError(f"'{path}': a scenario file is shown by  lensrate scenario {path}")
    if ending not in known:
        raise InputError(f"'{path}': ending '{ending}' is not one of ours (known: {', '.join(known)})")
    try:
        found = _READERS[ending](path)
    except OSError as error:
        raise InputError(f"'{path}': cannot be read ({error.strerror or error})") from None
    except (ValueError, TypeError, LookupError, RecursionError, struct.error, expat.ExpatError) as error:
        # what readers of damaged files raise
        reason = " ".join(str(error).split())[:120]
        raise InputError(f"'{path}': damaged, or not written by lensrate ({reason})") from None
    made = _search(found)
    if made is None:
        raise InputError(
            f"'{path}': says nothing about a scenario; it was not written by lensrate, or lost its metadata on the way"
        )
    return made


def _search(found, depth=0):
    """Return the first table that states a scenario, the outermost first."""
    if isinstance(found, dict):
        made = dict(found)
        if "scenario_toml" in made:
            made["scenario_text"] = made.pop("scenario_toml")
        if isinstance(made.get("scenario_text"), str) and isinstance(made.get("scenario_hash"), str):
            return made
        first = [found[k] for k in ("made", "meta", "provenance") if k in found]
        inside = [*first, *(v for k, v in found.items() if k not in ("made", "meta", "provenance"))]
    elif isinstance(found, list):
        inside = found[:1]  # all rows of one run share what decides it
    else:
        return None
    if depth < _DEEPEST:
        for value in inside:
            made = _search(value, depth + 1)
            if made is not None:
                return made
    return None


def _json(path):
    return json.loads(path.read_text(encoding="utf-8"))


def _csv(path):
    out = {}
    with open(path, encoding="utf-8") as file:
        for line in file:
            if not line.startswith("#"):
                break
            key, colon, text = line[1:].strip().partition(":")
            if colon:
                try:
                    out[key.strip()] = json.loads(text)
                except ValueError:
                    continue
    return out


def _ecsv(path):
    from .io import read_rows

    meta = read_rows(path, "file").meta
    return json.loads(meta["MADE"]) if "MADE" in meta else None


def _fits(path):
    import warnings

    from astropy.io import fits

    with open(path, "rb") as handle:
        reason = check_fits(handle, path.stat().st_size)
        if reason:
            raise ValueError(reason)
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            with open(path, "rb") as handle, fits.open(handle, memmap=False, lazy_load_hdus=True) as hdus:
                if "LRFIELD" in hdus[0].header:
                    header = hdus["MADE"].header
                    if header["NAXIS"] != 1 or not 0 < header["NAXIS1"] <= path.stat().st_size:
                        raise ValueError("its description has an impossible size")
                    return json.loads(hdus["MADE"].data.tobytes().decode())
                for hdu in hdus:
                    if "MADE" in hdu.header:
                        return json.loads(hdu.header["MADE"])
        except (OSError, ValueError, KeyError, TypeError):
            raise
        except Exception as error:  # astropy raises many kinds for a damaged file; all mean the same here
            raise ValueError(f"{type(error).__name__}: {error}") from None
    return None


def _png(path):
    with open(path, "rb") as file:
        if file.read(8) != b"\x89PNG\r\n\x1a\n":
            raise ValueError("no PNG picture")
        while True:
            head = file.read(8)
            if len(head) < 8:
                return None
            length, kind = struct.unpack(">I4s", head)
            if kind == b"IEND":
                return None
            if length > _LARGEST_TEXT:
                raise ValueError("a chunk is too large")
            body = file.read(length)
            tail = file.read(4)
            if len(body) < length or len(tail) < 4:
                raise ValueError("it is cut short")
            if kind == b"tEXt" and body.startswith(b"Description\0"):
                if zlib.crc32(kind + body) != struct.unpack(">I", tail)[0]:
                    raise ValueError("the checksum of its description is wrong")
                return json.loads(body.split(b"\0", 1)[1].decode("latin-1"))


def _pdf(path):
    text = path.read_bytes()
    if not text.startswith(b"%PDF"):
        raise ValueError("no PDF")
    start = text.find(b"/Subject (")
    if start < 0:
        return None
    i, out = start + len(b"/Subject ("), bytearray()
    special = {ord("n"): 10, ord("r"): 13, ord("t"): 9, ord("b"): 8, ord("f"): 12}
    depth = 1
    while i < len(text):
        c = text[i]
        if c == 0x5C:  # backslash
            octal = re.match(rb"[0-7]{1,3}", text[i + 1 : i + 4])
            if octal:
                out.append(int(octal[0], 8) & 255)
                i += 1 + len(octal[0])
                continue
            i += 1
            if i < len(text) and text[i] not in b"\r\n":
                out.append(special.get(text[i], text[i]))
            i += 1
            continue
        depth += (c == 0x28) - (c == 0x29)
        if depth == 0:
            return json.loads(out.decode("latin-1"))
        out.append(c)
        i += 1
    raise ValueError("it is cut short")


def _svg(path):
    return _xml(path, lambda name, _: name.rpartition(":")[2] == "description")


def _vot(path):
    return _xml(path, lambda name, a: name.rpartition(":")[2] == "INFO" and a.get("name") == "MADE")


def _xml(path, wanted):
    """Return the JSON text or value of the first element that is wanted; entities are refused."""
    parser, texts, inside = expat.ParserCreate(), [], []

    def start(name, attributes):
        if wanted(name, attributes):
            if "value" in attributes:
                texts.append(attributes["value"])
                raise _Stop
            inside.append(name)

    def end(name):
        if inside and name == inside[0]:
            raise _Stop

    def entity(*_):
        raise ValueError("it declares entities")

    parser.StartElementHandler, parser.EndElementHandler = start, end
    parser.CharacterDataHandler = lambda data: texts.append(data) if inside else None
    parser.EntityDeclHandler = entity
    try:
        with open(path, "rb") as file:
            parser.ParseFile(file)
    except _Stop:
        return json.loads("".join(texts))
    return None


_READERS = {
    ".json": _json, ".csv": _csv, ".ecsv": _ecsv, ".fits": _fits, ".vot": _vot, ".png": _png, ".pdf": _pdf,
    ".svg": _svg,
}  # fmt: skip
