"""Pictures of mock events: the plane of timescale and parallax by lens class."""

import numpy as np

from .saving import blank, write_figure
from .sightlines import _axes, _colour, _label

__all__ = ["events", "save_events"]

_MOST = 1200  # points of a class
_MARKS = {"star": "o", "brown_dwarf": "s", "white_dwarf": "D", "neutron_star": "^", "black_hole": "X"}
_OTHER_MARKS = ("P", "v", "<", ">", "*")


def events(result, ax=None, **points):
    """Draw events in the plane of t_E and pi_E, a mark per lens class.

    Parameters
    ----------
    result : MockEvents
        What to draw. At most 1200 of a class are shown; of weighted events a part of which each stands for the same
        weight.
    ax : matplotlib Axes, optional
        Made if not given.
    **points
        Passed to ``ax.scatter``.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax, (7.4, 4.6))
    lens, weight = result.columns["lens"], result.columns["weight"]
    share = result.by_class[:, 1] / weight.sum()
    own = 0
    # the rare ones on top
    for i in np.argsort(-share):
        mine = np.flatnonzero(lens == i)
        mine = _even(mine, weight[mine], _MOST)
        name = result.classes[i]
        if not mine.size:
            continue
        few = mine.size < 120
        style = {
            "s": 26 if few else 7,
            "marker": _MARKS.get(name, _OTHER_MARKS[own % len(_OTHER_MARKS)]),
            "color": _colour(name, own),
            "alpha": 0.95 if few else 0.5,
            "linewidths": 0.4 if few else 0,
            "edgecolors": "white" if few else "none",
            "label": f"{_label(name)} ({_percent(share[i])})",
            "rasterized": True,
            "zorder": 3 if few else 2,
        }
        own += name not in _MARKS
        ax.scatter(result.columns["t_E"][mine], result.columns["pi_E"][mine], **{**style, **points})
    ax.set_xscale("log")
    ax.set_yscale("log")
    ax.set_xlabel(r"$t_\mathrm{E}$  [d], heliocentric")
    ax.set_ylabel(r"$\pi_\mathrm{E}$")
    ax.grid(color="#dddddd", lw=0.5, zorder=0)
    legend = ax.legend(
        frameon=False, fontsize="small", title="share of all events", title_fontsize="small", loc="upper left",
        bbox_to_anchor=(1.0, 1.0), alignment="left", handletextpad=0.3,
    )  # fmt: skip
    for mark in legend.legend_handles:
        mark.set_alpha(1.0)
        mark.set_sizes([24])
    ax.set_title(_title(result), fontsize="small", loc="left")
    return ax


def _percent(share):
    return f"{100 * share:.3g} %"


def _title(result):
    forecast = result.forecast
    where = (
        f"campaign {forecast.campaign.name}"
        if hasattr(forecast, "campaign")
        else f"l = {forecast.l.to_value('deg'):g}°, b = {forecast.b.to_value('deg'):g}°"
    )
    scenario = forecast.scenario
    what = f"{len(result)} mock events, seed {result.seed}, at most {_MOST} of a class shown"
    return f"{where}, scenario {scenario.name} ({scenario.hash})\n{what}"


def _even(index, weight, most):
    """At most so many events, evenly spaced in cumulative weight: the same choice each time."""
    if not weight.sum() > 0:
        return index[:0]
    if index.size <= most and np.ptp(weight) < 1e-9 * weight.max():
        return index
    cum = np.cumsum(weight)
    n = min(most, int(cum[-1] / weight.max()) + 1)
    return index[np.unique(np.searchsorted(cum, (np.arange(n) + 0.5) / n * cum[-1]))]


def save_events(result, path, overwrite=False):
    """Write the picture with how it was made in its metadata.

    Parameters
    ----------
    result : MockEvents
    path : str or Path
        .png .pdf .svg
    overwrite : bool
        Whether an existing file may be replaced.

    Returns
    -------
    Path

    Raises
    ------
    InputError, DataFileError
        As `write_figure`.
    """
    figure = blank(7.4, 4.6)
    events(result, figure.add_subplot())
    return write_figure(figure, path, result.meta(), overwrite)
