"""Pictures of sky maps: l increasing to the left, fields drawn over them on request."""

from textwrap import fill

import matplotlib
import matplotlib.pyplot as plt
import numpy as np
from matplotlib.colors import LogNorm, Normalize

from ..errors import one_of
from ..io import PICTURES, check_target
from ..remnants.classes import LABELS
from .saving import blank, write_figure

__all__ = ["overview_maps", "save_skymap", "skymap"]

_MAP = "cividis"  # perceptually even for colour-blind readers too, and in grey
_LINED = 4  # pixels a side, from which lines of equal value are drawn
_LOG_FROM = 8.0  # largest over smallest value from which the colours are logarithmic
_WORDS = {
    "optical_depth": (r"optical depth $\tau$", ""),
    "rate": (r"events per source", r"yr$^{-1}$"),
    "rate_standard_error": ("sampling error of the rate", r"yr$^{-1}$"),
    "mean_t_E": (r"mean $t_\mathrm{E}$", "d"),
    "share": ("share of events", ""),
    "rate_per_deg2": ("events per area", r"yr$^{-1}$ deg$^{-2}$"),
    "detected_rate": ("found events per source", r"yr$^{-1}$"),
    "detected_per_deg2": ("found events per area", r"yr$^{-1}$ deg$^{-2}$"),
    "source_density": ("sources", r"arcmin$^{-2}$"),
    "mean_source_distance": (r"mean $D_\mathrm{S}$", "kpc"),
}


def skymap(result, ax=None, quantity="rate_all", overlay=(), **style):
    """Draw one quantity of a map.

    Parameters
    ----------
    result : SkyMap
        What to draw: an image on a grid, marks for a list of fields.
    ax : matplotlib Axes, optional
        Made if not given.
    quantity : str
        One of `SkyMap.quantities`.
    overlay : sequence of (str, ndarray (n, 2))
        Names and outlines (l, b) [deg] of survey fields.
    **style
        Passed to ``ax.imshow`` or ``ax.scatter``.

    Returns
    -------
    matplotlib Axes

    Raises
    ------
    InputError
        Unknown quantity.
    """
    quantities = result.quantities()
    one_of("quantity", quantity, quantities)
    values = quantities[quantity].values
    title, unit = _label(quantity)
    factor, power = _power(values)
    norm = _norm(values * factor)
    extent = _extent(result, overlay)
    if ax is None:
        _, ax = plt.subplots(figsize=_size(extent), layout="constrained")
    if result.grid is not None:
        image = result.grid.image(values * factor)
        settings = {"origin": "lower", "extent": extent, "norm": norm, "cmap": _MAP, "interpolation": "nearest"}
        drawn = ax.imshow(image, **{**settings, **style})
        lines = _contours(ax, result, image, norm)
        # a dark pixel is not a small value
        ax.set_facecolor("0.75")
    else:
        lines = None
        l = _near(result.l.value, 0.5 * (extent[0] + extent[1]))
        settings = {"c": values * factor, "norm": norm, "cmap": _MAP, "s": 60, "edgecolors": "0.3", "linewidths": 0.6}
        drawn = ax.scatter(l, result.b.value, **{**settings, **style})
        for name, x, y in zip(result.names, l, result.b.value) if len(l) <= 60 else ():
            ax.annotate(name, (x, y), (4, 4), textcoords="offset points", fontsize="x-small")
    # a field that is drawn as a mark has its name beside that
    marked = set(result.names) if result.grid is None else set()
    _draw_overlay(ax, [("" if name in marked else name, outline) for name, outline in overlay], extent)
    ax.set_xlim(extent[0], extent[1])
    ax.set_ylim(extent[2], extent[3])
    middle = np.radians(0.5 * (extent[2] + extent[3]))
    ax.set_aspect(1.0 / max(np.cos(middle), 0.2))
    ax.xaxis.set_major_formatter(lambda x, _: f"{x % 360:g}" if x >= 0 or extent[1] >= 0 else f"{x:g}")
    if extent[1] < 0:
        ax.xaxis.set_major_formatter(lambda x, _: f"{x:g}".replace("-", "\N{MINUS SIGN}"))
    ax.set_xlabel(r"$l$  [deg]")
    ax.set_ylabel(r"$b$  [deg]")
    ax.set_title(title, fontsize="small")
    units = " ".join(w for w in (power, unit) if w)
    # as high as the map itself, whatever shape that has
    bar = ax.figure.colorbar(drawn, cax=ax.inset_axes([1.025, 0.0, 0.045, 1.0]), extend=norm.reach)
    bar.set_label(f"[{units}]" if units else "", fontsize="small")
    bar.ax.tick_params(labelsize="small", which="both")
    if isinstance(norm, LogNorm):
        bar.formatter = matplotlib.ticker.LogFormatter(labelOnlyBase=False, minor_thresholds=(2, 0.5))
        if norm.vmax / norm.vmin < 100:
            bar.locator = matplotlib.ticker.LogLocator(subs=(1.0, 2.0, 5.0))
            bar.formatter = matplotlib.ticker.FuncFormatter(lambda x, _: f"{x:g}")
        bar.minorlocator = matplotlib.ticker.NullLocator()
        bar.update_ticks()
    if lines is not None:
        # what a line stands for is marked on the bar
        bar.add_lines(lines, erase=False)
    return ax


def _label(quantity):
    """Words and unit of a quantity, the class in words."""
    if quantity in _WORDS:
        return _WORDS[quantity]
    stems = sorted((s for s in _WORDS if quantity.startswith(s + "_")), key=len)
    if not stems:
        return (f"extinction ${quantity}$" if quantity.startswith("A_") else quantity), "mag"
    words, unit = _WORDS[stems[-1]]
    name = quantity[len(stems[-1]) + 1 :]
    who = "all lenses" if name == "all" else LABELS.get(name, name.replace("_", " ")) + "s"
    return f"{words}: {who}", unit


def _power(values):
    """Factor that brings values between 1 and 1000, and how to write it."""
    top = np.nanmax(np.abs(values), initial=0.0, where=np.isfinite(values))
    if not top > 0 or 0.1 <= top < 1e4:
        return 1.0, ""
    exponent = 3 * int(np.floor(np.log10(top) / 3))
    return 10.0**-exponent, rf"$10^{{{exponent}}}$"


def _norm(values):
    """Colour scale: logarithmic over a wide range; the lowest hundredth does not stretch it."""
    good = values[np.isfinite(values)]
    if good.size == 0 or good.min() == good.max():
        norm = Normalize(*((0, 1) if good.size == 0 else (good[0] - abs(good[0]) * 0.5, good[0] + abs(good[0]) * 0.5)))
        norm.reach = "neither"
        return norm
    positive = good[good > 0]
    low = np.quantile(positive, 0.01) if positive.size else 0.0
    if positive.size and good.max() / low > _LOG_FROM:
        low = max(low, good.max() * 1e-4)
        norm = LogNorm(low, good.max(), clip=True)
        norm.reach = "min" if good.min() < low * (1 - 1e-9) else "neither"
        return norm
    norm = Normalize(good.min(), good.max())
    norm.reach = "neither"
    return norm


def _extent(result, overlay=()):
    """Left, right, bottom and top of the picture [deg]: the left is the larger longitude."""
    if result.grid is not None:
        l, b = result.grid.axes()
        half = 0.5 * result.grid.step
        return l[-1] + half, l[0] - half, max(b[0] - half, -90.0), min(b[-1] + half, 90.0)
    # a list of fields is drawn as far as their outlines go
    corners = [np.reshape(outline, (-1, 2)) for _, outline in overlay]
    l, b = np.concatenate([np.column_stack([result.l.value, result.b.value]), *corners]).T
    l = _near(l, result.l.value[0])
    margin = max(0.06 * max(np.ptp(l), np.ptp(b)), 0.5)
    return l.max() + margin, l.min() - margin, max(b.min() - margin, -90.0), min(b.max() + margin, 90.0)


def _near(l, centre):
    """Longitudes within half a turn of a centre."""
    return centre + (np.asarray(l, dtype=float) - centre + 180.0) % 360.0 - 180.0


def _size(extent):
    """Width and height [in] of a picture that holds the map in its own shape."""
    wide, high = extent[0] - extent[1], extent[3] - extent[2]
    ratio = np.clip(high / wide, 0.35, 1.6)
    return (6.6, 1.3 + 5.0 * ratio) if ratio < 1 else (1.8 + 5.6 / ratio, 6.6)


def _contours(ax, result, image, norm):
    """A few lines of equal value, which survive a copy in black and white; None where there are none."""
    if min(image.shape) < _LINED or not np.isfinite(image).all():
        return None
    low, high = norm.vmin, norm.vmax
    levels = np.geomspace(low, high, 7)[1:-1] if isinstance(norm, LogNorm) else np.linspace(low, high, 7)[1:-1]
    if not high > low:
        return None
    l, b = result.grid.axes()
    return ax.contour(l[::-1], b, image, levels=levels, colors="white", linewidths=0.6, alpha=0.6)


def _draw_overlay(ax, overlay, extent):
    centre = 0.5 * (extent[0] + extent[1])
    many = len(overlay) > 40
    for name, outline in overlay:
        corners = np.asarray(outline, dtype=float).reshape(-1, 2)
        # a field across the cut stays in one piece
        x = _near(corners[:, 0], _near(corners[0, 0], centre))
        if len(corners) == 1:
            ax.plot(x, corners[:, 1], "+", color="white", ms=8, mew=2.6)
            ax.plot(x, corners[:, 1], "+", color="#D55E00", ms=7, mew=1.4)
        else:
            closed = np.append(x, x[0]), np.append(corners[:, 1], corners[0, 1])
            ax.plot(*closed, color="white", lw=2.4)
            ax.plot(*closed, color="#D55E00", lw=1.2)
        if name and not many:
            spot = (x.mean(), corners[:, 1].mean())
            box = {"facecolor": "white", "alpha": 0.7, "lw": 0, "pad": 0.8}
            ax.annotate(name, spot, ha="center", va="center", fontsize=6.5, clip_on=True, bbox=box)


def overview_maps(result, overlay=()):
    """Return a figure of four panels: optical depth, rate, mean t_E, and the remnants' share or number of events."""
    known = result.quantities()
    wanted = ["optical_depth_all", "rate_all", "mean_t_E_all", "rate_per_deg2_all", "share_neutron_star"]
    wanted += ["share_black_hole"]
    if "detected_per_deg2_black_hole" in known:
        wanted[-1] = "detected_per_deg2_black_hole"
    elif "rate_per_deg2_black_hole" in known:
        wanted[-1] = "rate_per_deg2_black_hole"
    wanted = [w for w in wanted if w in known]
    extent = _extent(result, overlay)
    # panels as high as the map in them is, so that nothing stays empty
    middle = np.radians(0.5 * (extent[2] + extent[3]))
    ratio = (extent[3] - extent[2]) / ((extent[0] - extent[1]) * max(np.cos(middle), 0.2))
    columns = 3 if ratio > 0.6 else 2
    rows = -(-len(wanted) // columns)
    wide = 4.0 if columns == 3 else 5.6
    high = min((wide - 1.25) * ratio, 9.0)
    figure = blank(min(wide, high / ratio + 1.25) * columns, (high + 0.5) * rows + 0.75)
    axes = figure.subplots(rows, columns, squeeze=False)
    for i, (ax, name) in enumerate(zip(axes.flat, wanted)):
        skymap(result, ax, name, overlay)
        if i % columns:
            ax.set_ylabel("")
        if i + columns < len(wanted):
            ax.set_xlabel("")
    for ax in axes.flat[len(wanted) :]:
        ax.remove()
    figure.suptitle(fill(_title(result), 130), fontsize="small")
    return figure


def _title(result):
    s = result.scenario
    kinds = {result.kinematics.get(n) for n in ("neutron_star", "black_hole")} - {None, "stellar"}
    note = f"; neutron stars and black holes {' or '.join(sorted(kinds))}" if kinds else ""
    # `_contours` draws none on so few pixels
    lined = result.grid is not None and min(result.grid.shape) >= _LINED
    lines = "; the bar marks the values of the lines" if lined else ""
    return f"scenario {s.name} ({s.hash}); {result.header()}{note}{lines}"


def save_skymap(result, path, quantity="overview", overlay=(), overwrite=False):
    """Write a picture with its provenance in the file's metadata.

    Parameters
    ----------
    result : SkyMap
    path : str or Path
        Target; .png .pdf .svg.
    quantity : str
        "overview", or one of `SkyMap.quantities`.
    overlay : sequence
        As for `skymap`.
    overwrite : bool
        Whether an existing file may be replaced.

    Returns
    -------
    Path

    Raises
    ------
    InputError, DataFileError
        Unknown quantity or ending, existing file, or a file that could not be written.
    """
    one_of("quantity", quantity, ["overview", *result.quantities()])
    check_target(path, PICTURES, overwrite, "--plot")
    if quantity == "overview":
        figure = overview_maps(result, overlay)
    else:
        figure = blank(*_size(_extent(result, overlay)))
        skymap(result, figure.add_subplot(), quantity, overlay)
        figure.suptitle(fill(_title(result), 100), fontsize=6.5)
    return write_figure(figure, path, result.meta(), overwrite)
