"""Pictures of a sample beside its forecast: histogram with errors over stacked classes, and their ratio."""

import numpy as np
from scipy.stats import chi2

from ..io import PICTURES, check_target
from .saving import blank, write_figure
from .sightlines import _axes, _colour, _label

_TESTS = {
    "ks": r"$t_\mathrm{E}$ KS", "anderson_darling": "AD", "deviance": "binned", "pi_E_ks": r"$\pi_\mathrm{E}$ KS",
    "pi_E_anderson_darling": "AD", "sky": "fields", "magnitude": "magnitudes",
}  # fmt: skip

__all__ = ["comparison", "comparison_page", "ratio", "save_comparison"]


def _interval(n):
    """Central 68 % interval of a Poisson mean after n counts (Garwood 1936, Biometrika 28, 437)."""
    n = np.asarray(n, dtype=float)
    low = np.where(n > 0, 0.5 * chi2.ppf(0.158655, np.maximum(2 * n, 1e-9)), 0.0)
    return low, 0.5 * chi2.ppf(1 - 0.158655, 2 * n + 2)


def comparison(result, ax=None):
    """Draw observed events by t_E with Poisson errors over the prediction, stacked by class.

    Parameters
    ----------
    result : Comparison
    ax : matplotlib Axes, optional
        Made if not given.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax)
    edges = result.edges
    floor = 0.3 * min(1.0, max(result.predicted.sum(axis=0).max(), 1.0))
    # the rarest at the bottom: on a logarithmic axis what stands on others is hardly seen
    order = np.argsort(result.predicted.sum(axis=1))
    base = np.zeros(edges.size - 1)
    for i in order:
        row = result.predicted[i]
        if not row.sum() > 0:
            continue
        name = result.classes[i]
        ax.stairs(base + row, edges, baseline=np.maximum(base, floor * 1e-3), fill=True, color=_colour(name, i),
                  alpha=0.75, label=f"{_label(name)} ({row.sum():.3g})", lw=0)  # fmt: skip
        base = base + row
    ax.stairs(base, edges, color="black", lw=1.1, label=f"expected ({base.sum():.4g})")
    _points(ax, edges, result.observed, f"observed ({result.observed.sum()})")
    ax.set_xscale("log")
    ax.set_yscale("log")
    ax.set_ylim(floor * 0.03, 3 * max(base.max(), result.observed.max()))
    ax.set_xlim(edges[0], edges[-1])
    ax.set_ylabel("events per 0.2 dex")
    ax.set_xlabel(r"$t_\mathrm{E}$  [d]")
    ax.legend(frameon=False, fontsize=7, ncols=2, loc="upper left")
    return ax


def _points(ax, edges, counts, label):
    middle = np.sqrt(edges[1:] * edges[:-1])
    low, high = _interval(counts)
    some = counts > 0
    ax.errorbar(middle[some], counts[some], [counts[some] - low[some], high[some] - counts[some]], fmt="o", ms=4,
                color="black", ecolor="black", mfc="white", capsize=2, lw=1, label=label)  # fmt: skip


def ratio(result, ax=None):
    """Draw observed over expected by t_E, with the scatter that Poisson counts around the expected ones have.

    Parameters
    ----------
    result : Comparison
    ax : matplotlib Axes, optional
        Made if not given.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax)
    edges, mean, n = result.edges, result.predicted.sum(axis=0), result.observed
    spread = np.sqrt(np.maximum(mean, 1e-12)) / np.maximum(mean, 1e-12)
    ax.stairs(1 + spread, edges, baseline=np.maximum(1 - spread, 1e-3), fill=True, color="0.85", lw=0)
    middle = np.sqrt(edges[1:] * edges[:-1])
    some = (mean > 0) & (n > 0)
    low, high = _interval(n)
    r = n[some] / mean[some]
    errors = np.array([(n - low)[some] / mean[some], (high - n)[some] / mean[some]])
    ax.errorbar(middle[some], r, errors, fmt="o", ms=4, color="black", mfc="white", capsize=2, lw=1)
    ax.axhline(1.0, color="black", lw=0.8)
    ax.set_xscale("log")
    ax.set_yscale("log")
    ax.set_ylim(0.2, 5.0)
    ax.set_yticks([0.2, 0.5, 1, 2, 5], ["0.2", "0.5", "1", "2", "5"])
    ax.minorticks_off()
    ax.set_xlim(edges[0], edges[-1])
    ax.set_xlabel(r"$t_\mathrm{E}$  [d]")
    ax.set_ylabel("observed / expected")
    return ax


def comparison_page(result):
    """Draw histogram, ratio, and where there are any parallaxes and source magnitudes.

    Parameters
    ----------
    result : Comparison

    Returns
    -------
    matplotlib Figure
    """
    more = (result.parallax_shares.size > 0) + (result.magnitudes is not None)
    figure = blank(6.6, 6.2 if not more else 8.6)
    grid = figure.add_gridspec(3 if more else 2, 2, height_ratios=[3, 1, 1.6][: 3 if more else 2])
    top = figure.add_subplot(grid[0, :])
    comparison(result, top)
    top.set_xlabel("")
    top.tick_params(labelbottom=False)
    ratio(result, figure.add_subplot(grid[1, :], sharex=top))
    place = 0
    if result.magnitudes is not None:
        _magnitudes(result, figure.add_subplot(grid[2, 0] if more == 2 else grid[2, :]))
        place = 1
    if result.parallax_shares.size:
        _shares(result, figure.add_subplot(grid[2, place] if more == 2 else grid[2, :]))
    s, p = result.folded.scenario, result.tests
    said = ", ".join(f"{_TESTS[name]} {t.p:.2g}" for name, t in p.items() if t.p == t.p)
    words = " (invented)" if result.sample.invented else ""
    title = f"{result.sample.name}{words}, scenario {s.name} ({s.hash}), kicks {s.kicks}; counts {result.counts}"
    figure.suptitle(title + (f"\np: {said}" if said else ""), fontsize=8)
    return figure


def _magnitudes(result, ax):
    m = result.magnitudes
    used = np.flatnonzero((m["predicted"] > 1e-3) | (m["observed"] > 0))
    cut = slice(used[0], used[-1] + 1)
    edges = m["edges"][used[0] : used[-1] + 2]
    ax.stairs(m["predicted"][cut], edges, color="#0072B2", lw=1.5, label="expected")
    n = m["observed"][cut]
    low, high = _interval(n)
    ax.errorbar(0.5 * (edges[1:] + edges[:-1]), n, [n - low, high - n], fmt="o", ms=3.5, color="black", mfc="white",
                capsize=2, lw=1, label="observed")  # fmt: skip
    ax.set_xlabel(r"source magnitude $I_\mathrm{S}$  [mag]")
    ax.set_ylabel("events per 0.5 mag")
    ax.legend(frameon=False, fontsize=7)


def _shares(result, ax):
    v = np.sort(result.parallax_shares)
    ax.step(np.append(v, 1.0), np.append(np.arange(1, v.size + 1) / v.size, 1.0), where="post", color="black", lw=1.4)
    ax.plot([0, 1], [0, 1], color="#0072B2", lw=1)
    ax.set_xlim(0, 1)
    ax.set_ylim(0, 1)
    ax.set_xlabel(r"predicted share with smaller $\pi_\mathrm{E}$ at this $t_\mathrm{E}$")
    ax.set_ylabel(f"share of {v.size} events")


def save_comparison(result, path, overwrite=False):
    """Write the page with its provenance in the file's metadata; see `saving.write_figure`."""
    check_target(path, PICTURES, overwrite, "--plot")
    return write_figure(comparison_page(result), path, result.meta(), overwrite)
