"""BibTeX from the reference strings of data files: authors, year, journal and page as stated, titles where known."""

import re

from .._version import __version__
from ..datafiles import read_set

__all__ = ["bibtex"]

_NAME = r"[A-Z][\w'\u2019-]*(?: Collaboration)?"
# a list of names ends in "&": words before a name, as in "white dwarfs Cummings+ 2018", are no authors
_WHO = rf"(?:(?:{_NAME}, )+{_NAME} & {_NAME}|{_NAME} & {_NAME}|{_NAME}(?:\+| et al\.)?)"
_CITED = re.compile(
    rf"(?P<who>{_WHO}) (?P<year>(?:18|19|20)\d\d)[a-z]?, (?:in [^,;]+, )?"
    r"(?:arXiv[: ](?P<eprint>\d{4}\.\d{4,5})|(?P<journal>[A-Z][A-Za-z&. ]*?) (?P<volume>\d+), (?P<page>[A-Z]?\d+))"
)


def bibtex(references, made=None):
    """Return BibTeX entries of reference strings, made from what they state, and one of lensrate.

    Parameters
    ----------
    references : iterable of str
        "Author year, Journal volume, page (topic); ...".
    made : dict, optional
        Metadata of a result: its scenario and hash go into the note of lensrate's own entry.

    Returns
    -------
    str
        Titles are those of the data set ``references/titles``.
    """
    titles = read_set("references", "titles")["title"]
    entries, used = [_own(made or {})], {}
    for text in dict.fromkeys(references):
        for found in _CITED.finditer(text):
            place = f"arXiv {found['eprint']}"
            if not found["eprint"]:
                place = f"{found['journal']} {found['volume']} {found['page']}"
            if place in used.values():
                continue
            who = re.sub(r" et al\.$|\+$", " and others", found["who"]).replace(" & ", " and ").replace(", ", " and ")
            # several words that are one name stay together
            who = re.sub(r"(\S+ Collaboration)", r"{\1}", who)
            stem = re.sub(r"[^A-Za-z]", "", re.split(r"[,+& ]", found["who"])[0]) + found["year"]
            key = next(k for k in (stem, *(stem + c for c in "abcdefghijklmnopqrstuvwxyz")) if k not in used)
            used[key] = place
            fields = {"author": who, "title": _title(titles.get(place, "")), "year": found["year"]}
            if found["eprint"]:
                fields |= {"eprint": found["eprint"], "archiveprefix": "arXiv"}
            else:
                journal = found["journal"].replace("&", r"\&")
                fields |= {"journal": journal, "volume": found["volume"], "pages": found["page"]}
            entries.append(_entry("article" if not found["eprint"] else "misc", key, fields))
    return "\n\n".join(["% titles: from memory of lensrate's authors, compare before printing", *entries])


def _own(made):
    note = f"scenario {made['scenario']} ({made['scenario_hash']})" if "scenario_hash" in made else ""
    if "campaign_hash" in made:
        note += f", campaign {made['campaign_hash']}"
    fields = {
        "author": "{The lensrate authors}", "year": "2026", "version": __version__, "note": _plain(note),
        "title": "{lensrate}: microlensing optical depth, event rates and timescales of stars and dark remnants",
    }  # fmt: skip
    return _entry("software", "lensrate", fields)


def _entry(kind, key, fields):
    rows = ",\n".join(f"  {name} = {{{value}}}" for name, value in fields.items() if value)
    return f"@{kind}{{{key},\n{rows}\n}}"


def _title(text):
    """A title whose capitals BibTeX keeps."""
    return f"{{{_plain(text)}}}" if text else ""


def _plain(text):
    """Text that LaTeX sets as it stands."""
    text = re.sub(r"([&%#_$])", r"\\\1", text).replace("~", r"$\sim$").replace(r"M\_sun", r"$M_{\odot}$")
    return re.sub(r"\b([A-Z])\\_(\w)\b", r"$\1_{\2}$", text)
