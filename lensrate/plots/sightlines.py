"""Pictures of one sightline: axes in, axes out. Nothing is computed here but colours."""

import matplotlib.pyplot as plt
import numpy as np

from ..errors import InputError, one_of
from ..io import PICTURES, check_target
from ..remnants.classes import LABELS
from .saving import blank, write_figure

__all__ = ["depth", "joint", "overview", "save_picture", "sightline", "stacked", "timescales"]

# Okabe & Ito (2008): told apart by colour-blind readers; line styles tell them apart in black and white
_COLOURS = {
    "star": "#E69F00",
    "brown_dwarf": "#8C510A",
    "white_dwarf": "#56B4E9",
    "neutron_star": "#CC79A7",
    "black_hole": "#000000",
    "all": "#7F7F7F",
}
_STYLES = {
    "star": "-",
    "brown_dwarf": (0, (5, 1)),
    "white_dwarf": (0, (6, 1.5, 1, 1.5)),
    "neutron_star": (0, (1.2, 1)),
    "black_hole": "--",
    "all": "-",
}
_OTHERS = ("#009E73", "#0072B2", "#D55E00", "#F0E442")
# none of the classes' colours, since both stand in one figure
_COMPONENTS = ("#0072B2", "#009E73", "#D55E00", "#882255", "#44AA99", "#999933")
_COMPONENT_STYLES = ("-", "--", "-.", (0, (1.2, 1)), (0, (5, 1, 1, 1, 1, 1)), (0, (8, 2)))
_OTHER_STYLES = ((0, (3, 1, 1, 1, 1, 1)), (0, (8, 2)), (0, (1, 3)), (0, (4, 4)))
_KINDS = ("overview", "timescales", "stacked", "depth", "pi_E", "theta_E")
_FLOOR = 1e-5  # share of the peak below which the log axis ends


def _axes(ax, size=(6.0, 4.2)):
    if ax is None:
        _, ax = plt.subplots(figsize=size, layout="constrained")
    return ax


def _label(name):
    return LABELS.get(name, name.replace("_", " "))


def _colour(name, i=0):
    return _COLOURS.get(name, _OTHERS[i % len(_OTHERS)])


def _style(name, i=0):
    return _STYLES.get(name, _OTHER_STYLES[i % len(_OTHER_STYLES)])


def _smooth(t, f, fine=8):
    """Points between those of a distribution, cubic in ln t, for drawing only."""
    x = np.linspace(0, len(t) - 1, fine * (len(t) - 1) + 1)
    i = np.minimum(x.astype(int), len(t) - 2)
    s = x - i
    padded = np.concatenate([[f[0]], f, [f[-1]]])
    d = 0.5 * (padded[2:] - padded[:-2])
    f0, f1, d0, d1 = f[i], f[i + 1], d[i], d[i + 1]
    g = f0 + s * (d0 + s * (3 * (f1 - f0) - 2 * d0 - d1 + s * (2 * (f0 - f1) + d0 + d1)))
    return np.exp(np.interp(x, np.arange(len(t)), np.log(t))), np.maximum(g, 0.0)


def _title(result):
    l, b = result.l.to_value("deg"), result.b.to_value("deg")
    kinds = {result.lenses[n].kinematics for n in ("neutron_star", "black_hole") if n in result.lenses}
    note = f" (NS, BH {' or '.join(sorted(kinds))})" if kinds else ""
    what = f"{result.sources['rule']}, u₀ < {result.u_0_limit:g}, {result.frame}; {result.kick_words()}{note}"
    return f"l = {l:g}°, b = {b:g}°, scenario {result.scenario.name} ({result.scenario.hash})\n{what}"


def timescales(result, ax=None, **line):
    """Draw the timescale distribution by lens class on logarithmic axes.

    Parameters
    ----------
    result : Sightline
        What to draw.
    ax : matplotlib Axes, optional
        Made if not given.
    **line
        Passed to ``ax.plot``.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax)
    total = result.rate_per_ln_t_E.sum(axis=0)
    ax.plot(result.t_E, total, color=_COLOURS["all"], lw=3.5, alpha=0.6, label="all")
    own = 0
    for name, pdf in zip(result.classes, result.rate_per_ln_t_E):
        if not pdf.max() > 0:
            continue
        style = {"color": _colour(name, own), "ls": _style(name, own), "lw": 1.6, "label": _label(name)}
        ax.plot(result.t_E, pdf, **{**style, **line})
        own += name not in _COLOURS
    _timescale_axis(ax, result, total)
    ax.set_yscale("log")
    ax.set_ylim(total.max() * _FLOOR, total.max() * 3)
    ax.set_ylabel(r"$\mathrm{d}\Gamma/\mathrm{d}\ln t_\mathrm{E}$  [yr$^{-1}$ per source]")
    ax.legend(frameon=False, fontsize="small")
    return ax


def stacked(result, ax=None, **fill):
    """Draw the timescale distribution by lens class, stacked, on a linear rate axis.

    Parameters
    ----------
    result : Sightline
        What to draw.
    ax : matplotlib Axes, optional
        Made if not given.
    **fill
        Passed to ``ax.fill_between``.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax)
    hatches = {"white_dwarf": "//", "neutron_star": "..", "black_hole": None, "brown_dwarf": "\\\\"}
    t, base, own = _smooth(result.t_E, 0.0 * result.t_E)[0], 0.0, 0
    # the rarest at the bottom, where a thin layer is still seen
    order = sorted(range(len(result.classes)), key=lambda c: result.rate_per_ln_t_E[c].sum())
    for c in order:
        name, pdf = result.classes[c], _smooth(result.t_E, result.rate_per_ln_t_E[c])[1]
        if not pdf.max() > 0:
            continue
        style = {
            "facecolor": _colour(name, own),
            "edgecolor": "white",
            "lw": 0.3,
            "hatch": hatches.get(name),
            "label": _label(name),
        }
        ax.fill_between(t, base, base + pdf, **{**style, **fill})
        base, own = base + pdf, own + (name not in _COLOURS)
    ax.plot(t, base, color="black", lw=0.8)
    _timescale_axis(ax, result, result.rate_per_ln_t_E.sum(axis=0))
    ax.set_ylim(0, base.max() * 1.08)
    ax.set_ylabel(r"$\mathrm{d}\Gamma/\mathrm{d}\ln t_\mathrm{E}$  [yr$^{-1}$ per source]")
    ax.legend(frameon=False, fontsize="small")
    return ax


def _timescale_axis(ax, result, total):
    shown = total > total.max() * _FLOOR
    ax.set_xscale("log")
    ax.set_xlim(result.t_E[shown][0], result.t_E[shown][-1])
    ax.set_xlabel(r"$t_\mathrm{E}$  [d]")
    if result.t_E_range:
        ax.axvspan(*result.t_E_range, color="0.93", zorder=0, lw=0, label="reported range")
    ax.set_title(_title(result), fontsize="small")


def depth(result, ax=None, **line):
    """Draw the optical depth per distance of the lens, by Galactic component.

    Parameters
    ----------
    result : Sightline
        What to draw.
    ax : matplotlib Axes, optional
        Made if not given.
    **line
        Passed to ``ax.plot``.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax)
    D, parts = result.optical_depth_along
    total = sum(parts.values())
    ax.plot(D, total, color=_COLOURS["all"], lw=3.5, alpha=0.6, label="all")
    for i, (name, values) in enumerate(parts.items()):
        if values.max() > 2e-3 * total.max():
            style = {"color": _COMPONENTS[i % 6], "ls": _COMPONENT_STYLES[i % 6], "lw": 1.6}
            ax.plot(D, values, **{**style, "label": name.replace("_", " "), **line})
    along = np.cumsum(total)
    # drawn as far as anything is to be seen
    ax.set_xlim(0, D[min(np.searchsorted(along, 0.998 * along[-1]), D.size - 1)])
    ax.set_ylim(0, total.max() * 1.15 or 1)
    ax.ticklabel_format(axis="y", style="sci", scilimits=(0, 0), useMathText=True)
    ax.set_xlabel(r"lens distance $D_\mathrm{L}$  [kpc]")
    ax.set_ylabel(r"$\mathrm{d}\tau/\mathrm{d}D_\mathrm{L}$  [kpc$^{-1}$]")
    ax.set_title(_title(result), fontsize="small")
    ax.legend(frameon=False, fontsize="small")
    return ax


def joint(result, ax=None, y="pi_E", **contour):
    """Draw the two-dimensional distribution of t_E and pi_E or theta_E, contours by lens class.

    Contours enclose 50 and 90 per cent of each class's events.

    Parameters
    ----------
    result : Sightline
        What to draw.
    ax : matplotlib Axes, optional
        Made if not given.
    y : str
        "pi_E" or "theta_E".
    **contour
        Passed to ``ax.contour``.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax, (6.0, 5.0))
    t, values, density = result.joint(y)
    x, v = t.to_value("d"), values.value
    extent, own, handles = [], 0, []
    for name, d in density.items():
        z = d.value
        if not z.max() > 0:
            continue
        rank = np.sort(z.ravel())[::-1]
        inside = np.cumsum(rank) / rank.sum()
        levels = [rank[np.searchsorted(inside, share)] for share in (0.9, 0.5)]
        colour = _colour(name, own)
        style = {"colors": [colour], "linestyles": [_style(name, own)], "linewidths": [0.9, 1.9]}
        ax.contour(x, v, z.T, levels=sorted(levels), **{**style, **contour})
        handles.append(ax.plot([], [], color=colour, ls=_style(name, own), label=_label(name))[0])
        where = np.argwhere(z > levels[0] * 0.3)
        extent.append((x[where[:, 0].min()], x[where[:, 0].max()], v[where[:, 1].min()], v[where[:, 1].max()]))
        own += name not in _COLOURS
    e = np.array(extent)
    ax.set_xscale("log")
    ax.set_yscale("log")
    ax.set_xlim(e[:, 0].min(), e[:, 1].max())
    ax.set_ylim(e[:, 2].min(), e[:, 3].max() * 3)
    ax.set_xlabel(r"$t_\mathrm{E}$  [d]")
    ax.set_ylabel(r"$\pi_\mathrm{E}$" if y == "pi_E" else r"$\theta_\mathrm{E}$  [mas]")
    ax.set_title(_title(result) + "; thick 50 %, thin 90 % of each class", fontsize="small")
    # events lie along one diagonal, so one corner is free
    ax.legend(handles=handles, frameon=False, fontsize="small", loc="upper right" if y == "pi_E" else "upper left")
    return ax


def overview(result):
    """Return a figure with timescales by class and optical depth along the sightline, side by side."""
    figure = blank(10.5, 4.2)
    left, right = figure.subplots(1, 2, width_ratios=[1.15, 1])
    timescales(result, ax=left)
    depth(result, ax=right)
    right.set_title("")
    return figure


def sightline(result, ax=None, kind="timescales", **style):
    """Draw one of the pictures of a sightline by name; see `Sightline.plot`."""
    one_of("kind", kind, _KINDS)
    if kind == "overview":
        if ax is not None or style:
            raise InputError("overview: a figure of two pictures, which takes no ax and no style; choose another kind")
        return overview(result)
    if kind in ("pi_E", "theta_E"):
        return joint(result, ax=ax, y=kind, **style)
    return {"timescales": timescales, "stacked": stacked, "depth": depth}[kind](result, ax=ax, **style)


def save_picture(result, path, kind="overview", overwrite=False):
    """Write a picture with its provenance in the file's metadata.

    Parameters
    ----------
    result : Sightline
        What to draw.
    path : str or Path
        Target; .png .pdf .svg.
    kind : str
        "overview", or one of `Sightline.plot`.
    overwrite : bool
        Whether an existing file may be replaced.

    Returns
    -------
    Path

    Raises
    ------
    InputError, DataFileError
        Unknown kind or ending, existing file, or a file that could not be written.
    """
    one_of("kind", kind, _KINDS)
    check_target(path, PICTURES, overwrite, "--plot")
    if kind == "overview":
        figure = overview(result)
    else:
        figure = blank(6.0, 5.0 if kind.endswith("_E") else 4.2)
        sightline(result, ax=figure.add_subplot(), kind=kind)
    return write_figure(figure, path, result.meta(), overwrite)
