"""Writing a picture whole, with how it was made in the file's metadata."""

import json

import matplotlib
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure

from ..io import PICTURES, check_target, whole_file

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
    with whole_file(path) as temporary, matplotlib.rc_context({"svg.hashsalt": "lensrate", "pdf.fonttype": 42}):
        figure.savefig(temporary, dpi=200, metadata={_KEYS[path.suffix.lower()]: made})
    return path
