"""Events on the plane of t_E and pi_E over the densities that the lens classes are predicted to have."""

import matplotlib.pyplot as plt
import numpy as np

from ..io import PICTURES, check_target
from .saving import blank, write_figure
from .sightlines import _colour, _label, _style

__all__ = ["odds", "save_odds"]

_MARKERS = {"star": "*", "brown_dwarf": "v", "white_dwarf": "s", "neutron_star": "D", "black_hole": "o"}
_T = (1.0, 1000.0)
_PI = (2e-3, 3.0)


def odds(result, ax=None, **marker):
    """Draw events at their t_E and pi_E over contours of each class (half and nine tenths of its events).

    A marker has the shape and colour of the event's likeliest class, filled where that has a probability above 0.95;
    events without a parallax stand in a strip below.

    Parameters
    ----------
    result : Odds
        What to draw.
    ax : matplotlib Axes, optional
        Made if not given.
    **marker
        Passed to ``ax.scatter``.

    Returns
    -------
    matplotlib Axes
    """
    from ..events.odds import densities

    if ax is None:
        _, ax = plt.subplots(figsize=(6.4, 5.8), layout="constrained")
    events = list(result)
    middle = np.median([e.l if e.l < 180 else e.l - 360 for e in events]), np.median([e.b for e in events])
    near = min(events, key=lambda e: np.hypot((e.l if e.l < 180 else e.l - 360) - middle[0], e.b - middle[1]))
    ts, pis = [e.t_E.value for e in events], [e.pi_E for e in events if e.pi_E]
    t_lim = min(_T[0], 0.5 * min(ts)), max(_T[1], 2.0 * max(ts))
    pi_lim = min([_PI[0], *(0.5 * p for p in pis)]), max([_PI[1], *(2.0 * p for p in pis)])
    t, pi, names, z = densities(near, result.scenario, t_lim, pi_lim)
    handles, own = [], 0
    for name, d in zip(names, z):
        if not d.max() > 0:
            continue
        rank = np.sort(d.ravel())[::-1]
        inside = np.cumsum(rank) / rank.sum()
        levels = sorted(rank[np.searchsorted(inside, share)] for share in (0.9, 0.5))
        colour, style = _colour(name, own), _style(name, own)
        ax.contour(t, pi, d.T, levels=levels, colors=[colour], linestyles=[style], linewidths=[0.8, 1.7])
        look = {"marker": _MARKERS.get(name, "P"), "mfc": "white", "ms": 6.5, "label": _label(name)}
        handles.append(ax.plot([], [], color=colour, ls=style, **look)[0])
        own += name not in _MARKERS
    # below what is measured, a strip for what is not
    border = pi_lim[0]
    strip, bottom = (border / 1.25, border / 1.6) if len(pis) < len(events) else (border, border)
    if len(pis) < len(events):
        ax.axhspan(bottom, border, color="0.93", zorder=0)
        words = "$\\pi_\\mathrm{E}$ not\nmeasured"
        ax.text(1.01, strip, words, transform=ax.get_yaxis_transform(), fontsize="x-small", va="center")
    for e in events:
        sure = e.probability.max() > 0.95
        colour = _colour(e.most_likely)
        y = e.pi_E if e.pi_E else strip
        face = {"facecolors": colour if sure else "white", "edgecolors": colour, "linewidths": 1.4}
        shape = _MARKERS.get(e.most_likely, "P")
        ax.scatter([e.t_E.value], [y], marker=shape, zorder=5, **{"s": 46, **face, **marker})
        m = e.t_E
        ax.plot([max(m.value - m.lo, t_lim[0]), m.value + m.hi], [y, y], color=colour, lw=0.9, zorder=4)
        if e.pi_E and e.pi_E_range:
            # an error as large as the parallax reaches the border, since zero is off the scale
            low, high = (np.clip(x, border, pi_lim[1]) for x in e.pi_E_range)
            ax.plot([m.value, m.value], [low, high], color=colour, lw=0.9, zorder=4)
    ax.set_xscale("log")
    ax.set_yscale("log")
    ax.set_xlim(*t_lim)
    ax.set_ylim(bottom, pi_lim[1])
    ax.set_xlabel(r"$t_\mathrm{E}$  [d]")
    ax.set_ylabel(r"$\pi_\mathrm{E}$")
    what = f"{result.sample or 'events'}{' (invented)' if result.invented else ''}, scenario {result.scenario.name}"
    frames = "/".join(sorted({e.frame for e in events}))
    ax.set_title(
        f"{what} ({result.scenario.hash})\nclasses at l = {near.l:g}°, b = {near.b:g}° (thick 50 %, thin 90 %); "
        f"events {frames}",
        fontsize="small",
    )
    grey = {"color": "0.3", "ls": "none", "marker": "o", "ms": 6.5}
    handles.append(ax.plot([], [], label="event, likeliest class below 0.95", mfc="white", **grey)[0])
    handles.append(ax.plot([], [], label="event, above 0.95", **grey)[0])
    look = {"frameon": False, "fontsize": "x-small", "handlelength": 3.2, "ncols": 3}
    ax.legend(handles=handles, loc="upper center", bbox_to_anchor=(0.5, -0.12), **look)
    return ax


def save_odds(result, path, overwrite=False):
    """Write the picture of `odds` with its provenance.

    Parameters
    ----------
    result : Odds
    path : str or Path
        Target; .png .pdf .svg.
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
    figure = blank(6.4, 5.8)
    odds(result, ax=figure.add_subplot())
    return write_figure(figure, path, result.meta(), overwrite)
