"""Pictures of what a sample says: marginals beside their priors, pairs, and limits against mass."""

import numpy as np
from matplotlib.ticker import LogLocator, NullFormatter, ScalarFormatter

from ..io import PICTURES, check_target
from .saving import blank, write_figure
from .sightlines import _axes

__all__ = ["kick_speeds", "marginal", "mass_limits", "posterior", "save_mass_limits", "save_posterior"]

_POSTERIOR, _PRIOR, _LINE = "#0072B2", "#E69F00", "#D55E00"
_LEVELS = (0.68, 0.95)
_DRAWS = 40_000
_CELLS = 30  # a side, for draws
_LABELS = {
    "kick_scale": "factor on kick speeds", "slow_weight": "share of slow kicks",
    "neutron_stars": "neutron stars / scenario's", "black_holes": "black holes / scenario's",
    "remnant_mass": "remnant masses / scenario's",
}  # fmt: skip


def _name(parameter):
    return _LABELS.get(parameter, parameter.replace("class:", "amount of ").replace("_", " "))


def _log(axis, low, high):
    """Plain numbers on a logarithmic axis, few enough to be read."""
    subs = (1.0, 2.0, 5.0) if high / low < 50 else (1.0,)
    axis.set_major_locator(LogLocator(subs=subs, numticks=12))
    axis.set_major_formatter(_Plain())
    axis.set_minor_formatter(NullFormatter())


class _Plain(ScalarFormatter):
    """0.1 rather than a power."""

    def __call__(self, x, pos=None):
        return f"{x:g}"


def marginal(result, name, ax=None):
    """Draw one parameter's posterior per unit of its prior's measure, beside the prior.

    Parameters
    ----------
    result : Posterior
    name : str
    ax : matplotlib Axes, optional
        Made if not given.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax, (4.6, 3.4))
    i = result.names.index(name)
    p = result.parameters[i]
    values, weight = result.marginal(i)
    x = np.log(values) if p.prior.logarithmic else values
    if result.draws is not None:
        edges = np.linspace(*np.quantile(x, [0.0005, 0.9995]), 41)
        height = np.histogram(x, edges, density=True)[0]
        prior = np.diff(p.prior.share(np.exp(edges) if p.prior.logarithmic else edges)) / np.diff(edges)
    else:
        inner = 0.5 * (x[1:] + x[:-1])
        edges = np.concatenate([[2 * x[0] - inner[0]], inner, [2 * x[-1] - inner[-1]]])
        height, prior = weight / np.diff(edges), result.prior_weight[i] / np.diff(edges)
    shown = np.exp(edges) if p.prior.logarithmic else edges
    ax.stairs(height, shown, color=_POSTERIOR, lw=1.6, label="posterior")
    ax.stairs(prior, shown, color=_PRIOR, lw=1.4, ls="--", label="prior")
    low, middle, high = result.quantile(i, [0.025, 0.5, 0.975])
    for v, dash in ((low, ":"), (middle, "-"), (high, ":")):
        ax.axvline(v, color="0.4", lw=0.8, ls=dash)
    if p.prior.logarithmic:
        ax.set_xscale("log")
        _log(ax.xaxis, shown[0], shown[-1])
    ax.set_xlim(shown[0], shown[-1])
    ax.set_ylim(0, None)
    ax.set_yticks([])
    got = result.learned[name]
    word = f"{got.bits:.2f} bits" if got.constrained else f"not constrained ({got.bits:.2f} bits)"
    ax.set_title(f"{middle:.3g} ({low:.3g} to {high:.3g}); {word}", fontsize=7)
    ax.set_xlabel(_name(name))
    return ax


def _pair(result, i, j, ax, seed):
    a, b = result.parameters[i].prior, result.parameters[j].prior
    if result.draws is None:
        others = tuple(k for k in range(len(result.parameters)) if k not in (i, j))
        h = result.weight.sum(axis=others)
        cx, cy = result.grid[i], result.grid[j]
    else:
        draws = result.samples(_DRAWS, seed)
        x, y = (np.log(draws[:, k]) if p.logarithmic else draws[:, k] for k, p in ((i, a), (j, b)))
        h, ex, ey = np.histogram2d(x, y, _CELLS)
        cx, cy = 0.5 * (ex[1:] + ex[:-1]), 0.5 * (ey[1:] + ey[:-1])
        cx, cy = (np.exp(c) if p.logarithmic else c for c, p in ((cx, a), (cy, b)))
    order = np.sort(h.ravel())[::-1]
    share = np.cumsum(order) / order.sum()
    levels = sorted({float(order[min(np.searchsorted(share, q), order.size - 1)]) for q in _LEVELS})
    ax.pcolormesh(cx, cy, h.T, cmap="Blues", shading="nearest", rasterized=True)
    ax.contour(cx, cy, h.T, levels, colors=[_LINE, "black"][-len(levels) :], linewidths=1)
    for scale, axis, c, p in ((ax.set_xscale, ax.xaxis, cx, a), (ax.set_yscale, ax.yaxis, cy, b)):
        if p.logarithmic:
            scale("log")
            _log(axis, c[0], c[-1])


def posterior(result, ax=None, seed=1):
    """Draw the posterior: one parameter into `ax`, several as a triangle of pairs on a figure of their own.

    Free kick bins are drawn as `kick_speeds`, other parameters beside them.

    Parameters
    ----------
    result : Posterior
    ax : matplotlib Axes, optional
        For one parameter.
    seed : int
        Of the draws behind the pairs.

    Returns
    -------
    matplotlib Axes, or list of them
    """
    if len(result.parameters) == 1:
        return marginal(result, result.names[0], ax)
    return _figure(result, seed).axes


def kick_speeds(result, ax=None):
    """Draw the shares of neutron stars by kick speed: posterior, prior and the scenario's law, bin by bin.

    Parameters
    ----------
    result : Posterior
        With free kick bins.
    ax : matplotlib Axes, optional
        Made if not given.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax, (6.4, 4.2))
    found = result.kick_shares()
    n = len(found.law)
    places = np.arange(n + 1) - 0.5
    for (low, high), dash, alpha, words in (((0, 4), (0, (4, 2)), 0.18, "95 %"), ((1, 3), ":", 0.35, "68 %")):
        q = found.prior_quantiles
        ax.stairs(q[high], places, baseline=q[low], color=_PRIOR, lw=1.1, ls=dash, label=f"prior, {words}")
        q = found.quantiles
        ax.stairs(q[high], places, baseline=q[low], color=_POSTERIOR, alpha=alpha, fill=True, lw=0,
                  label=f"posterior, {words}")  # fmt: skip
    ax.stairs(found.quantiles[2], places, baseline=None, color=_POSTERIOR, lw=1.6, label="posterior, median")
    ax.stairs(found.law, places, baseline=None, color="black", lw=1.2, ls="-.", label="the scenario's law")
    ax.set_yscale("log")
    ax.set_ylim(max(found.law.max() / 500, 1e-4), min(2 * found.prior_quantiles[4].max(), 1.0))
    _log(ax.yaxis, *ax.get_ylim())
    ax.set_xticks(places, [f"{e:g}" for e in found.edges], fontsize=7)
    ax.set_xlim(places[0], places[-1])
    ax.set_xlabel("kick speed, edges of the bins  [km/s]")
    ax.set_ylabel("share of neutron stars in the bin")
    ax.legend(fontsize=7, frameon=False, ncols=2, loc="lower right")
    return ax


def _figure(result, seed=1):
    if result.kick_bins is not None:
        return _speeds_and_others(result)
    return _triangle(result, seed)


def _speeds_and_others(result):
    """Speeds, and below them a marginal for each parameter that is no bin."""
    others = [n for n in result.names if not n.startswith("kick_bin_")]
    figure = blank(7.4, 4.8 + 2.6 * bool(others))
    if others:
        top, below = figure.subfigures(2, 1, height_ratios=[4.8, 2.6])
        for name, ax in zip(others, np.atleast_1d(below.subplots(1, len(others)))):
            marginal(result, name, ax)
            ax.legend(fontsize=6, frameon=False)
    else:
        top = figure
    kick_speeds(result, top.add_subplot())
    bits = max(result.learned[n].bits for n in result.names if n.startswith("kick_bin_"))
    figure.suptitle(f"{_title(result)}\nno bin is more than {bits:.2f} bits beyond its prior", fontsize=8)
    return figure


def _title(result):
    made = result.made
    words = " (invented)" if made.get("sample_invented") else ""
    return (f"{made.get('sample', '')}{words}: {result.events} events; scenario {made['scenario']} "
            f"({made['scenario_hash']})")  # fmt: skip


def _triangle(result, seed=1):
    n = len(result.parameters)
    size = 2.6 if n <= 4 else 1.4
    figure = blank(max(size * n, 4.8), max(size * n, 3.8) + 0.5)
    if n == 1:
        marginal(result, result.names[0], figure.add_subplot())
    else:
        axes = figure.subplots(n, n, squeeze=False)
        for j in range(n):
            for i in range(n):
                ax = axes[j, i]
                if i > j:
                    ax.axis("off")
                    continue
                if i == j:
                    marginal(result, result.names[i], ax)
                else:
                    _pair(result, i, j, ax, seed)
                    if i == 0:
                        ax.set_ylabel(_name(result.names[j]), fontsize=8)
                ax.set_xlabel(_name(result.names[i]) if j == n - 1 else "", fontsize=8)
                ax.tick_params(labelsize=6)
    figure.axes[0].legend(loc="lower left", fontsize=7, frameon=False)
    free = ", ".join(result.nuisances["free"]) or "none"
    more = "contours 68 and 95 %; " if n > 1 else ""
    figure.suptitle(f"{_title(result)}\n{more}lines: median and 95 %; nuisances free: {free}", fontsize=8)
    return figure


def mass_limits(result, ax=None):
    """Draw upper limits on a lens class against the mass of its objects.

    Parameters
    ----------
    result : MassLimits
    ax : matplotlib Axes, optional
        Made if not given.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax)
    ax.fill_between(result.mass, result.limit, 10 * result.limit.max(), color=_POSTERIOR, alpha=0.25, lw=0)
    ax.plot(result.mass, result.limit, "-", color=_POSTERIOR, lw=1.5)
    ax.plot(result.mass[result.constrained], result.limit[result.constrained], "o", color=_POSTERIOR, ms=4)
    ax.plot(result.mass[~result.constrained], result.limit[~result.constrained], "o", mec=_POSTERIOR, mfc="white", ms=5)
    ax.axhline(result.amount, color="0.4", lw=0.8, ls=":")
    ax.set_xscale("log")
    ax.set_yscale("log")
    ax.set_ylim(0.5 * result.limit.min(), 2 * result.limit.max())
    ax.set_xlabel(r"lens mass  [$M_\odot$]")
    ax.set_ylabel(f"{result.norm.replace('_', ' ')} excluded at {result.level:.0%}")
    made = result.made
    title = f"{result.lens.replace('_', ' ')}; {made['campaign']}; scenario {made['scenario']}"
    title += f" ({made['scenario_hash']})"
    ax.set_title(f"{title}\ndotted: the scenario's own; open: the prior's, the sample says nothing", fontsize=8)
    return ax


def save_posterior(result, path, overwrite=False):
    """Write the picture with its provenance in the file's metadata; see `saving.write_figure`."""
    check_target(path, PICTURES, overwrite, "--plot")
    return write_figure(_figure(result), path, result.meta(), overwrite)


def save_mass_limits(result, path, overwrite=False):
    """Write the picture of limits against mass."""
    check_target(path, PICTURES, overwrite, "--plot")
    figure = blank(6.0, 4.4)
    mass_limits(result, figure.add_subplot())
    return write_figure(figure, path, result.made, overwrite)
