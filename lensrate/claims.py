"""What a file claims of its size, and a run of the memory it needs, checked against what is there beforehand."""

import re
from pathlib import Path

from .errors import InputError

__all__ = ["available_memory", "check_claims", "check_fits", "check_memory", "check_nodes"]

_PACKED = {b"\x1f\x8b": "gzip", b"BZh": "bzip2", b"\xfd7zXZ": "xz", b"PK\x03\x04": "zip", b"\x1f\x9d": "compress"}
_BLOCK = 2880  # bytes of a FITS block
_MOST_HDUS = 4000
_MOST_COLUMNS = 2000
_MOST_NODES = 200_000
_HEAD = 1_000_000  # bytes of a text file's beginning that are looked at
_COUNT = re.compile(rb"""\b(nrows|arraysize|width|size)\s*=\s*["'][0-9xX* ]*?([0-9]{3,})[*]?["']""")


def check_claims(path, what):
    """Raise where a table's file is packed, or claims more than it can hold.

    Parameters
    ----------
    path : Path
    what : str
        Named in complaints.

    Raises
    ------
    InputError
        With what is wrong and the way out.
    """
    size = path.stat().st_size
    with open(path, "rb") as file:
        head = file.read(_HEAD)
        for mark, name in _PACKED.items():
            if head.startswith(mark):
                raise InputError(f"{what}: '{path}' is packed ({name}); unpack it first")
        if head.startswith(b"SIMPLE  =") or path.suffix.lower() == ".fits":
            file.seek(0)
            reason = check_fits(file, size)
            if reason:
                raise InputError(f"{what}: '{path}' cannot be read as .fits ({reason})")
            return
    if path.suffix.lower() == ".vot" or b"<VOTABLE" in head:
        if b"<!ENTITY" in head or b"<!DOCTYPE" in head:
            raise InputError(f"{what}: '{path}' declares entities, which no table needs")
        for name, number in _COUNT.findall(head):
            if int(number) > size:
                raise InputError(
                    f"{what}: '{path}' claims {name.decode()} {int(number):.3g} and has {size} bytes; it is damaged"
                )
        return
    lines = (line for line in head.split(b"\n") if line.strip() and not line.lstrip().startswith(b"#"))
    first = next(lines, b"")
    columns = max(first.count(b","), first.count(b";"), first.count(b"\t"), len(first.split())) + 1
    if columns > _MOST_COLUMNS:
        raise InputError(f"{what}: '{path}' has {columns} columns, at most {_MOST_COLUMNS} are read; take out others")


def check_fits(file, size):
    """Walk the headers of a FITS file; return what is wrong with it, or an empty string.

    Parameters
    ----------
    file : binary file
        At its beginning.
    size : int
        Its bytes.

    Returns
    -------
    str
    """
    at = 0
    if file.read(9) != b"SIMPLE  =":
        return "it does not begin as FITS does"
    for _ in range(_MOST_HDUS):
        if at >= size:
            return ""
        cards, end = {}, False
        file.seek(at)
        while not end:
            block = file.read(_BLOCK)
            at += len(block)
            if len(block) < _BLOCK:
                # what follows the last unit may be anything
                return "" if cards == {} and at > _BLOCK else "it is cut short in a header"
            for i in range(0, _BLOCK, 80):
                card = block[i : i + 80]
                if card[:8].rstrip() == b"END":
                    end = True
                    break
                if card[8:10] == b"= ":
                    cards.setdefault(card[:8].rstrip(), card[10:].split(b"/")[0].strip())
            if len(cards) > 200_000:
                return "its header has no end"
        try:
            axes = int(cards.get(b"NAXIS", b"0"))
            if not 0 <= axes <= 999:
                raise ValueError
            lengths = [int(cards[b"NAXIS%d" % (k + 1)]) for k in range(axes)]
            bits, heap = abs(int(cards.get(b"BITPIX", b"8"))), int(cards.get(b"PCOUNT", b"0"))
            groups, fields = int(cards.get(b"GCOUNT", b"1")), int(cards.get(b"TFIELDS", b"0"))
            if min([*lengths, heap, groups, fields, bits - 8]) < 0:
                raise ValueError
        except (ValueError, KeyError):
            return "its header states an impossible size"
        if fields > _MOST_COLUMNS:
            return f"{fields} columns, at most {_MOST_COLUMNS} are read"
        inside = 1 if lengths else 0
        for n in lengths[1:] if lengths and lengths[0] == 0 and cards.get(b"GROUPS") == b"T" else lengths:
            inside *= n
        need = bits // 8 * groups * (heap + inside)
        if need > size - at:
            return f"its header claims {need} bytes of data, {max(size - at, 0)} are there"
        # an image packed as a table unpacks to what its Z cards say
        if b"ZNAXIS" in cards:
            try:
                whole = abs(int(cards[b"ZBITPIX"])) // 8
                for k in range(int(cards[b"ZNAXIS"])):
                    whole *= int(cards[b"ZNAXIS%d" % (k + 1)])
                tile = 1
                for k in range(int(cards[b"ZNAXIS"])):
                    tile *= int(cards.get(b"ZTILE%d" % (k + 1), b"1"))
            except (ValueError, KeyError):
                return "its header states an impossible size"
            # no compression of FITS gains more than a factor of a few thousand
            if whole < 0 or tile < 0 or max(whole, tile) > 5000 * max(need, _BLOCK):
                return f"its header claims an image of {whole} bytes in {need}"
        at += -(-need // _BLOCK) * _BLOCK
    return f"more than {_MOST_HDUS} parts"


def check_nodes(value, what):
    """Raise where nested values written out would be too many: aliases in a header may multiply without end.

    Parameters
    ----------
    value : dict or list
    what : str
        Named in complaints.
    """
    stack, count = [(value, 0)], 0
    while stack:
        node, depth = stack.pop()
        count += 1
        if count > _MOST_NODES or depth > 50:
            raise InputError(f"{what}: its header holds too much, or is nested too deep")
        inner = node.values() if isinstance(node, dict) else node if isinstance(node, (list, tuple)) else ()
        stack += [(v, depth + 1) for v in inner]


def available_memory():
    """Return the bytes that a new run may take, of the machine or of the group it runs in; None where unknown."""
    found = []
    try:
        rows = dict(line.split(":", 1) for line in Path("/proc/meminfo").read_text().splitlines())
        found.append(int(rows["MemAvailable"].split()[0]) * 1024)
    except (OSError, KeyError, ValueError, IndexError):
        pass
    try:
        group = Path("/sys/fs/cgroup")
        limit = int((group / "memory.max").read_text())
        found.append(limit - int((group / "memory.current").read_text()))
    except (OSError, ValueError):
        pass  # no limit, or none that is told here
    return min(found) if found else None


def check_memory(what, need, way_out):
    """Raise where a run would need more memory than there is.

    Parameters
    ----------
    what : str
        Named in the complaint.
    need : float
        Bytes.
    way_out : str
        What to do instead.

    Raises
    ------
    InputError
    """
    there = available_memory()
    if there is not None and need > there:
        raise InputError(
            f"{what}: about {need / 1e9:.2g} GB of memory are needed, {max(there, 0) / 1e9:.2g} GB are free; {way_out}"
        )
