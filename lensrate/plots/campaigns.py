"""Pictures of a campaign: its fields, what it is expected to find, how that depends on kick speed."""

from textwrap import fill

import numpy as np

from ..io import PICTURES, check_target
from ..surveys.yields import poisson_68
from .saving import blank, write_figure
from .sightlines import _axes, _colour, _label, _style

__all__ = ["campaign", "fields", "kick_yield", "save_campaign", "save_kick_yield", "yields"]

_DISTRIBUTIONS = (
    ("t_E", r"$t_\mathrm{E}$  [d]", (0.5, 2000)),
    ("pi_E", r"$\pi_\mathrm{E}$", (1e-3, 3)),
    ("theta_E", r"$\theta_\mathrm{E}$  [mas]", (0.02, 20)),
    ("mu_rel", r"$\mu_\mathrm{rel}$  [mas yr$^{-1}$]", (0.3, 40)),
    ("D_L", r"lens distance  [kpc]", (0, 12)),
    ("M", r"lens mass  [$M_\odot$]", (0.01, 60)),
)
_BINS = 40
_LAWS = ("hobbs2005", "igoshev2020", "verbunt2017", "disbergmandel2025")
# told apart by colour-blind readers, and by dash in black and white
_LAW_LOOKS = (("#0072B2", "-"), ("#D55E00", "--"), ("#009E73", "-."), ("#CC79A7", ":"))


def campaign(forecast, n=20_000, seed=1):
    """Draw one page: fields, expected events by class, and distributions of what is found.

    Parameters
    ----------
    forecast : CampaignForecast
    n, seed : int
        Mock events a field behind the distributions, and their seed.

    Returns
    -------
    list of matplotlib Axes
    """
    return _page(forecast, n, seed).axes


def _page(forecast, n, seed):
    from ..surveys.detected import detected_events

    figure = blank(8.2, 11.0)
    axes = figure.subplots(4, 2).ravel()
    fields(forecast, axes[0])
    yields(forecast, axes[1])
    events = detected_events(forecast, n, seed)
    for ax, (name, label, limits) in zip(axes[2:], _DISTRIBUTIONS):
        _distribution(events, name, label, limits, ax)
    handles, labels = axes[2].get_legend_handles_labels()
    figure.legend(handles, labels, fontsize=8, frameon=False, loc="outside lower center", ncols=len(labels))
    s = forecast.scenario
    figure.suptitle(
        f"{forecast.campaign.name}: {forecast.by_class()[-1]:.3g} events expected\n"
        f"scenario {s.name} ({s.hash}), {s.kick_words()}\nu$_0$ < {forecast.campaign.u_0_limit:g}; found events, "
        "luminous lenses included",
        fontsize=10,
    )
    return figure


def fields(forecast, ax=None):
    """Draw the fields on the sky, coloured by nothing, labelled with their expected events.

    Parameters
    ----------
    forecast : CampaignForecast
    ax : matplotlib Axes, optional
        Made if not given.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax)
    centre = forecast.fields[0].field.l_deg
    for f in forecast.fields:
        l, b = f.field.outline()
        l = centre + (l - centre + 180) % 360 - 180
        ax.fill(l, b, facecolor="#56B4E9", edgecolor="#0072B2", alpha=0.35, lw=1)
        x = centre + (f.field.l_deg - centre + 180) % 360 - 180
        text = f"{f.field.name}\n{f.expected.sum():.3g}"
        ax.annotate(text, (x, f.field.b_deg), ha="center", va="center", fontsize=7)
    ax.set_aspect(1 / np.cos(np.radians(np.mean([f.field.b_deg for f in forecast.fields]))), adjustable="datalim")
    ax.margins(0.08)
    ax.invert_xaxis()
    ax.set_xlabel("l  [deg]")
    ax.set_ylabel("b  [deg]")
    ax.set_title("fields and expected events", fontsize=9)
    return ax


def yields(forecast, ax=None):
    """Draw expected events by class: Poisson interval, range over assumptions, scaled to observed counts.

    Parameters
    ----------
    forecast : CampaignForecast
    ax : matplotlib Axes, optional
        Made if not given.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax)
    events, scaled = forecast.by_class(), forecast.scaled_by_class()
    shown = [i for i in range(len(forecast.classes)) if events[i] > 0]
    floor = 0.3 * min(0.3, min(events[i] for i in shown))
    for k, i in enumerate(shown):
        colour = _colour(forecast.classes[i], i)
        low, high = poisson_68(events[i])
        ax.plot([k - 0.12] * 2, [max(low, floor), max(high, floor)], color="0.45", lw=1.2, zorder=2)
        if forecast.ranges is not None:
            ax.plot([k + 0.12] * 2, forecast.ranges[i], color=colour, lw=6, alpha=0.45, solid_capstyle="butt", zorder=1)
        ax.plot(k, events[i], "o", color=colour, ms=5, zorder=3)
        if scaled is not None:
            ax.plot(k + 0.25, scaled[i], "D", mfc="white", mec=colour, ms=4, zorder=3)
    ax.set_yscale("log")
    ax.set_ylim(floor, None)
    ax.set_xlim(-0.6, len(shown) - 0.4)
    ax.set_xticks(range(len(shown)), [_label(forecast.classes[i]).replace(" ", "\n") for i in shown], fontsize=7)
    ax.set_ylabel("expected events")
    text = "line: 68 % of counts"
    if forecast.range_over:
        text = fill(f"{text}; bar: range over {', '.join(forecast.range_over)}", 66)
    if scaled is not None:
        text += f"\ndiamond: scaled to observed, {', '.join(forecast.scaled_fields()[:6])} only"
    ax.set_title(text, fontsize=8)
    return ax


def _distribution(events, name, label, limits, ax):
    logarithmic = limits[0] > 0
    edges = np.geomspace(*limits, _BINS + 1) if logarithmic else np.linspace(*limits, _BINS + 1)
    width = np.diff(np.log10(edges)) if logarithmic else np.diff(edges)
    top = 0.0
    for i, lens in enumerate(events.classes):
        mine = events["lens_class"] == i
        height = np.histogram(events[name][mine], edges, weights=events.weight[mine])[0] / width
        if not height.any():
            continue
        top = max(top, height.max())
        ax.stairs(height, edges, color=_colour(lens, i), ls=_style(lens, i), lw=1.2, label=_label(lens))
    if logarithmic:
        ax.set_xscale("log")
    ax.set_yscale("log")
    ax.set_ylim(top * 1e-5, top * 3)
    ax.set_xlim(limits)
    ax.set_xlabel(label)
    ax.set_ylabel("events per dex" if logarithmic else "events per kpc")


def kick_yield(curve, ax=None):
    """Draw the yield against kick speed, with the speeds of published laws laid over it.

    Parameters
    ----------
    curve : KickYield
    ax : matplotlib Axes, optional
        Made if not given.

    Returns
    -------
    matplotlib Axes
        Of the yield; the laws stand on a twin axis.
    """
    from ..remnants.kicks import parse_kick

    ax = _axes(ax, (6.4, 4.2))
    edges, y = curve.edges, 1e9 * curve.per_born[1:]
    left = max(edges[0], 3.0)
    ax.stairs(y, np.maximum(edges, left), color="black", lw=1.8, label="yield, with its sampling error")
    e = 1e9 * curve.sampling[1:]
    centre = np.sqrt(np.maximum(edges[:-1], left) * edges[1:])
    ax.errorbar(centre, y, e, fmt="none", ecolor="black", elinewidth=1)
    ax.set_xscale("log")
    ax.set_xlim(left, edges[-1])
    ax.set_ylim(0, 1.15 * max(y.max(), 1e9 * curve.per_born[0]))
    ax.axhline(1e9 * curve.per_born[0], color="0.5", lw=1.0, ls=(0, (2, 2)), label="yield of unkicked ones")
    ax.set_xlabel(r"kick speed  [km s$^{-1}$]")
    label = curve.lens.replace("_", " ")
    ax.set_ylabel(rf"expected events per $10^9$ {label}s born so")
    twin = ax.twinx()
    v = np.geomspace(left, edges[-1], 400)
    for name, (colour, dash) in zip(_LAWS, _LAW_LOOKS):
        text = f"{name}: {curve.events(name):.3g} events"
        twin.plot(v, v * parse_kick(name).pdf(v), color=colour, ls=dash, lw=1.3, label=text)
    twin.set_ylim(0, None)
    twin.set_ylabel("share of births per ln(speed)")
    handles = [*ax.get_legend_handles_labels()[0], *twin.get_legend_handles_labels()[0]]
    ax.legend(handles=handles, fontsize=7, frameon=False, loc="upper center", bbox_to_anchor=(0.5, -0.16), ncols=3)
    made = curve.made
    ax.set_title(f"{made['campaign']}; scenario {made['scenario']} ({made['scenario_hash']})", fontsize=8)
    return ax


def save_campaign(forecast, path, overwrite=False, n=20_000, seed=1):
    """Write the page with its provenance in the file's metadata; see `saving.write_figure`."""
    check_target(path, PICTURES, overwrite, "--plot")
    meta = {**forecast.meta(), "seed": seed, "events_a_field": n}
    return write_figure(_page(forecast, n, seed), path, meta, overwrite)


def save_kick_yield(curve, path, overwrite=False):
    """Write the yield against kick speed with its provenance in the file's metadata."""
    check_target(path, PICTURES, overwrite, "--plot")
    figure = blank(6.4, 4.4)
    kick_yield(curve, figure.add_subplot())
    return write_figure(figure, path, curve.made, overwrite)
