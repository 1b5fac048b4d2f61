"""Pictures of a spread over assumptions: a bar per axis, the assumption that matters most on top."""

import math

import matplotlib.pyplot as plt
from matplotlib.ticker import FuncFormatter, LogLocator, MaxNLocator, NullFormatter

from ..io import PICTURES, check_target
from ..remnants.classes import LABELS
from .saving import blank, write_figure

__all__ = ["PANELS", "save_spread", "spread_overview", "tornado"]

#: (number, lens) of the panels that are drawn where nothing else is asked, as far as a forecast has them
PANELS = (
    ("events", "all"),
    ("rate", "all"),
    ("share_of_events", "neutron_star"),
    ("share_of_events", "black_hole"),
    ("median_t_E", "all"),
)
# Okabe & Ito (2008); lower and higher also differ in lightness and hatching
_LOWER, _HIGHER, _GREY = "#0072B2", "#E69F00", "0.75"
_SCALES = {
    "events": (1.0, "expected events {of}"),
    "scaled_to_observed": (1.0, "events {of}, scaled to observed"),
    "optical_depth": (1e6, r"optical depth {of}  [$10^{{-6}}$]"),
    "rate": (1e6, r"event rate {of}  [$10^{{-6}}$ yr$^{{-1}}$ per source]"),
    "mean_t_E": (1.0, r"mean $t_\mathrm{{E}}$ {of}  [d]"),
    "median_t_E": (1.0, r"median $t_\mathrm{{E}}$ {of}  [d]"),
    "share_of_events": (100.0, "share {of} among events  [%]"),
}
_LOG = 3.0  # highest over lowest from which the axis is logarithmic
_LONGEST = 22  # letters of an alternative's name


def tornado(result, ax=None, number="rate", lens="all", **bars):
    """Draw how far each assumption moves one number: a bar from the lowest to the highest value of each axis.

    Ticks on the bars are the alternatives; the names are those of the extremes. The vertical line is the base.

    Parameters
    ----------
    result : Spread
        What to draw.
    ax : matplotlib Axes, optional
        Made if not given.
    number, lens : str
        Which number of which class.
    **bars
        Passed to ``ax.barh``.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    InputError
        Unknown number or lens.
    """
    order = list(result.moves(number, lens))
    axes = {a.name: a for a in result.family.axes}
    if ax is None:
        _, ax = plt.subplots(figsize=(6.4, 1.5 + 0.42 * (len(order) + 1)), layout="constrained")
    scale, words = _SCALES.get(number, (1.0, number.replace("_", " ") + " {of}" + _unit(result, number)))
    base = scale * result.rows[0].values[lens][number]
    everything = [scale * r.values[lens][number] for r in result.rows]
    combined = result.combined_range(number, lens)
    if combined is not None:
        everything += [scale * combined.low, scale * combined.high]
    known = [x for x in everything if math.isfinite(x)]
    log = bool(known) and min(known) > 0 and max(known) / min(known) > _LOG
    for y, name in enumerate(order):
        values = {k: scale * v for k, v in result.values(number, lens, name).items() if math.isfinite(v)}
        _bar(ax, y, values, base, bars)
    labels = [axes[n].label for n in order]
    if combined is not None:
        y, low, high = len(order), scale * combined.low, scale * combined.high
        ax.barh(y, high - low, left=low, height=0.5, color=_GREY, edgecolor="black", lw=0.5)
        labels.append("all combinations")
    ax.axvline(base, color="black", lw=1.0)
    ax.set_yticks(range(len(labels)), labels, fontsize="small")
    ax.set_ylim(len(labels) - 0.4, -0.6)
    ax.tick_params(axis="y", length=0)
    of = "of all lenses" if lens == "all" else f"of {LABELS.get(lens, lens.replace('_', ' '))}s"
    ax.set_xlabel(f"{words.format(of=of)}; base {base:.4g}", fontsize="small")
    _limits(ax, known, log)
    for side in ("top", "right", "left"):
        ax.spines[side].set_visible(False)
    return ax


def _unit(result, number):
    unit = result.units.get(number, "")
    return f"  [{unit}]" if unit else ""


def _bar(ax, y, values, base, style):
    """One axis: what lies below and above the base, its alternatives as ticks, the extremes by name."""
    if not (values and math.isfinite(base)):
        return
    low, high = min(values, key=values.get), max(values, key=values.get)
    for end, colour, hatch in ((values[low], _LOWER, None), (values[high], _HIGHER, "////")):
        look = {"color": colour, "edgecolor": "white", "hatch": hatch, "lw": 0.0, "height": 0.5}
        ax.barh(y, end - base, left=base, **{**look, **style})
    ax.plot(list(values.values()), [y] * len(values), ls="", marker="|", ms=9, mew=1.1, color="black")
    for name, side, offset in ((low, "right", -5), (high, "left", 5)):
        if name != "base":
            text = name if len(name) <= _LONGEST else name[: _LONGEST - 1] + "…"
            ax.annotate(text, (values[name], y), (offset, 0), textcoords="offset points", ha=side, va="center",
                        fontsize="x-small")  # fmt: skip


def _limits(ax, known, log):
    """Room for the names on both sides."""
    if not known:
        return
    low, high = min(known), max(known)
    if log:
        ax.set_xscale("log")
        room = (high / low) ** 0.4
        ax.set_xlim(low / room, high * room)
        ax.xaxis.set_major_locator(LogLocator(subs=(1, 2, 5) if high < 30 * low else (1,)))
        ax.xaxis.set_major_formatter(FuncFormatter(lambda x, _: f"{x:g}"))
        ax.xaxis.set_minor_formatter(NullFormatter())
    else:
        room = 0.4 * (high - low) or 0.1 * abs(high) or 1.0
        ax.set_xlim(low - room, high + room)
        ax.xaxis.set_major_locator(MaxNLocator(6, steps=[1, 2, 5, 10]))
    ax.tick_params(axis="x", labelsize="small")


def spread_overview(result, panels=None):
    """Return a figure of several tornado panels under one title.

    Parameters
    ----------
    result : Spread
        What to draw.
    panels : list of (str, str), optional
        Number and lens class of each panel; by default rate and median t_E of all, shares of neutron stars and black
        holes, as far as the forecast has them.

    Returns
    -------
    matplotlib Figure

    Raises
    ------
    InputError
        Unknown number or lens.
    """
    if panels is None:
        panels = [(n, lens) for n, lens in PANELS if n in result.numbers and lens in result.lenses]
        panels = panels or [(result.numbers[0], lens) for lens in result.lenses[:4]]
    columns = 1 if len(panels) == 1 else 2
    rows = -(-len(panels) // columns)
    bars = len(result.family.axes) + (result.combined is not None)
    figure = blank(6.4 * columns, 1.0 + rows * (0.9 + 0.36 * bars))
    axes = figure.subplots(rows, columns, squeeze=False).ravel()
    for ax, (number, lens) in zip(axes, panels):
        tornado(result, ax=ax, number=number, lens=lens)
    for ax in axes[len(panels) :]:
        ax.set_visible(False)
    where = ""
    about = result.about
    if "campaign" in about:
        where = f"{about['campaign']}, "
    elif "l_deg" in about:
        where = f"l = {about['l_deg']:g}°, b = {about['b_deg']:g}°, "
    title = f"{where}base {result.base.name} ({result.base.hash}), family {result.family.name} ({result.family.hash})"
    notes = "one assumption changed at a time; line: base; ticks: alternatives; no standard errors"
    figure.suptitle("\n".join(t for t in (title, result.header(), notes) if t), fontsize="small")
    return figure


def save_spread(result, path, panels=None, overwrite=False):
    """Write the tornado panels with their provenance in the file's metadata.

    Parameters
    ----------
    result : Spread
        What to draw.
    path : str or Path
        Target; .png .pdf .svg.
    panels : list of (str, str), optional
        As in `spread_overview`.
    overwrite : bool
        Whether an existing file may be replaced.

    Returns
    -------
    Path

    Raises
    ------
    InputError, DataFileError
        Unknown ending, number or lens; existing file, or a file that could not be written.
    """
    check_target(path, PICTURES, overwrite, "--plot")
    return write_figure(spread_overview(result, panels), path, result.meta(), overwrite)
