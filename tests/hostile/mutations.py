"""Hostile inputs for every reader: shipped files with something in them exchanged, torn or added."""

import copy
import json

from hypothesis import strategies as st

#: what may stand in place of any value
VALUES = st.one_of(
    st.sampled_from(
        [float("nan"), float("inf"), -float("inf"), -1.0, 0.0, -0.0, 1e-320, 1e308, -1e308, 0, -1, 2**31, 2**63 - 1,
         True, False, "", "nan", "\x1b[2J\x1b]0;x\x07", "\u202e\u0000evil", "../../../../etc/passwd", "/dev/null",
         "/dev/null/x.toml", "x" * 5000, "a\nb", "%s%n{0}", "$\\frac{$", "default", "none", "maxwell:nan",
         "lognormal:1e999,1", "fixed:-1", "limit:I=nan", "limit:Q=21", "distance:inf", "clump:all", "hobbs2005",
         "file.toml", "a.fits", "..", ".", "1900-01-01", "9999-12-31", "2031-02-10", [], {}, [[]], [{}], [0.0], [1, 2],
         [float("nan")], ["a"], {"value": 1.0}, {"value": "x"}, {"value": 1.0, "unit": "parsec/"},
         {"value": float("nan"), "unit": "kpc"}, {"value": 1e300, "unit": "Gpc"}, {"unit": "kpc"}, {"a": {"b": []}}]
    ),
    st.floats(),
    st.integers(-(2**63), 2**63 - 1),
    st.text(max_size=8),
    st.lists(st.floats(), max_size=4),
)  # fmt: skip


def places(value, path=()):
    """Yield the path of every value inside nested tables and lists."""
    items = value.items() if isinstance(value, dict) else enumerate(value) if isinstance(value, list) else ()
    for key, inner in items:
        yield (*path, key)
        yield from places(inner, (*path, key))


@st.composite
def mutated(draw, tables):
    """One of some parsed TOML tables, with one to three things changed."""
    table = copy.deepcopy(draw(st.sampled_from(tables)))
    for _ in range(draw(st.integers(1, 3))):
        known = list(places(table))
        if not known:
            break
        path = draw(st.sampled_from(known))
        owner = table
        for key in path[:-1]:
            owner = owner[key]
        how = draw(st.sampled_from(["value", "value", "value", "delete", "rename", "twice", "scale"]))
        if how == "value":
            owner[path[-1]] = copy.deepcopy(draw(VALUES))
        elif how == "delete":
            del owner[path[-1]]
        elif how == "rename" and isinstance(owner, dict):
            owner[draw(st.text(max_size=6))] = owner.pop(path[-1])
        elif how == "twice" and isinstance(owner, list):
            owner.append(copy.deepcopy(owner[path[-1]]))
        elif how == "scale" and isinstance(owner[path[-1]], (int, float)):
            owner[path[-1]] = owner[path[-1]] * draw(st.sampled_from([-1, 0, 1e-30, 1e30, 1e-3, 1e3]))
    return table


def toml(value):
    """Return nested tables as TOML, every table inline but the outermost."""
    return "".join(f"{_text(str(k))} = {_one(v)}\n" for k, v in value.items())


def _one(value):
    if isinstance(value, bool):
        return str(value).lower()
    if isinstance(value, float):
        return repr(value)
    if isinstance(value, int):
        return str(value)
    if isinstance(value, dict):
        return "{" + ", ".join(f"{_text(str(k))} = {_one(v)}" for k, v in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(_one, value)) + "]"
    return _text(str(value))


def _text(text):
    return "".join(c if " " <= c <= "~" else f"\\U{ord(c):08x}" for c in json.dumps(text, ensure_ascii=False))


def torn(content):
    """A file's bytes with some exchanged, cut away or put in twice."""
    n = len(content)

    def apply(moves):
        out = bytearray(content)
        for how, place, length, byte in moves:
            i = place % max(len(out), 1)
            if how == "flip" and out:
                out[i] ^= 1 << (byte % 8)
            elif how == "set" and out:
                out[i] = byte
            elif how == "cut":
                del out[i:]
            elif how == "drop":
                del out[i : i + length]
            elif how == "twice":
                out[i:i] = out[i : i + length]
        return bytes(out)

    move = st.tuples(
        st.sampled_from(["flip", "set", "cut", "drop", "twice"]), st.integers(0, n), st.integers(1, 200),
        st.integers(0, 255),
    )  # fmt: skip
    return st.lists(move, min_size=1, max_size=4).map(apply)
