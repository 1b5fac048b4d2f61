"""Writing a picture whole, with how it was made in the file's metadata."""

import json
import warnings

import matplotlib
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.mathtext import MathTextParser
from matplotlib.text import Text

from ..io import PICTURES, check_target, whole_bytes

__all__ = ["blank", "write_figure"]

_KEYS = {".png": "Description", ".pdf": "Subject", ".svg": "Description"}


def blank(width, height):
    """Return a figure of so many inches that opens no window."""
    figure = Figure(figsize=(width, height), layout="constrained")
    FigureCanvasAgg(figure)
    return figure


def write_figure(figure, path, meta, overwrite=False):
    """Write a figure.

    Parameters
    ----------
    figure : matplotlib Figure
    path : str or Path
        Target; .png .pdf .svg.
    meta : dict
        How it was made; goes into the file's description as JSON.
    overwrite : bool
        Whether an existing file may be replaced.

    Returns
    -------
    Path

    Raises
    ------
    InputError, DataFileError
        Unknown ending, existing file, or a file that could not be written.
    """
    path = check_target(path, PICTURES, overwrite, "--plot")
    made = json.dumps(meta, ensure_ascii=True, default=str)
    _tame(figure)
    settings = {"svg.hashsalt": "lensrate", "pdf.fonttype": 42}
    with warnings.catch_warnings(), whole_bytes(path) as buffer, matplotlib.rc_context(settings):
        # names in any alphabet: what the font lacks is drawn as a box
        warnings.filterwarnings("ignore", message="Glyph .* missing from")
        ending = path.suffix.lower()
        figure.savefig(buffer, format=ending[1:], dpi=200, metadata={_KEYS[ending]: made})
    return path


def _tame(figure):
    """Draw names from users' files as they are: control characters written out, no formula that is none."""
    parser = MathTextParser("path")
    for text in figure.findobj(Text):
        said = text.get_text()
        plain = "".join(c if c.isprintable() or c == "\n" else f"\\x{ord(c):02x}" for c in said)
        if plain != said:
            text.set_text(plain)
        try:
            for line in plain.split("\n"):
                if line.count("$") > 1:
                    parser.parse(line)
        except ValueError:
            text.set_parse_math(False)
