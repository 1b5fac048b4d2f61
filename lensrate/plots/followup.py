"""Follow-up under a time budget, and the kick of one lens."""

import numpy as np
from matplotlib.ticker import FixedLocator, FuncFormatter, NullLocator

from ..io import PICTURES, check_target
from .saving import blank, write_figure
from .sightlines import _axes, _colour, _label, _style

__all__ = ["follow_up", "kick", "save_follow_up", "save_kick"]

# Okabe & Ito (2008); shapes tell them apart in print
_OPTIONS = {
    "centroid": ("#0072B2", "o", "theta_E from the centroid"),
    "images": ("#D55E00", "s", "theta_E from resolved images"),
    "lens_light": ("#009E73", "D", "light of the lens"),
    "source_motion": ("#CC79A7", "v", "motion of the source"),
}


def follow_up(plan, ax=None):
    """Draw bits per hour against hours of every option of every event; those in the list are filled and named.

    Parameters
    ----------
    plan : FollowUpPlan
    ax : matplotlib Axes, optional
        Made if not given.

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax, (6.4, 4.6))
    shown = [(e, o) for e in plan.events for o in e.options if o.per_hour > 1e-6]
    chosen = {e.name: e for e in plan.chosen}
    for e, o in shown:
        colour, marker, _ = _OPTIONS[o.measures]
        taken = e.name in chosen and chosen[e.name].best.name == o.name
        w = o.worth
        error = (w.target_error if plan.target else w.bits_error) / o.hours
        low = max(o.per_hour - error, 0.3 * o.per_hour)
        ax.plot([o.hours, o.hours], [low, o.per_hour + error], color=colour, lw=0.9, zorder=2)
        ax.plot(o.hours, o.per_hour, marker, ms=7, mfc=colour if taken else "white", mec=colour, zorder=3)
        if taken:
            ax.annotate(
                f"{chosen[e.name].order}: {e.name}", (o.hours, o.per_hour),
                xytext=(7, 5 if chosen[e.name].order % 2 else -5), textcoords="offset points", fontsize=8, va="center",
            )  # fmt: skip
    for measures in dict.fromkeys(o.measures for _, o in shown):
        colour, marker, text = _OPTIONS[measures]
        ax.plot([], [], marker, mfc="white", mec=colour, ms=7, label=text)
    ax.set_xscale("log")
    ax.set_yscale("log")
    # plain hours instead of powers of ten
    ax.xaxis.set_major_locator(FixedLocator([0.5, 1, 2, 3, 5, 10, 20, 50, 100]))
    ax.xaxis.set_major_formatter(FuncFormatter(lambda x, _: f"{x:g}"))
    ax.xaxis.set_minor_locator(NullLocator())
    ax.set_xlabel("telescope time of one event  [h]")
    about = f"{_label(plan.target)} or not" if plan.target else "lens class"
    ax.set_ylabel(f"bits on {about} per hour")
    words = " (invented facilities)" if plan.invented else ""
    ax.set_title(
        f"scenario {plan.scenario.name} ({plan.scenario.hash}){words}\nfilled: within {plan.budget:g} h", fontsize=8
    )
    ax.margins(x=0.15, y=0.08)
    ax.legend(fontsize=8, frameon=False, loc="lower left")
    return ax


def kick(made, ax=None):
    """Draw the posterior of one lens's kick speed under the law (filled) and under a prior flat in bins (lines).

    Parameters
    ----------
    made : KickPosterior
    ax : matplotlib Axes, optional

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax, (6.4, 4.2))
    # bins are as wide as they are drawn: probability per bin, bins side by side
    n = made.edges.size - 1
    for c, name in enumerate(made.classes):
        if not made.probability[name] > 1e-4:
            continue
        colour = _colour(name)
        for prior, style, where in (("law", {"alpha": 0.35}, made.law), ("flat", None, made.flat)):
            p = where[c].sum(axis=0)
            label = f"{_label(name)}, {'law ' + made.laws[name] if prior == 'law' else 'flat in bins'}"
            if style:
                # the unkicked share stands left of the bins
                p, x = np.append(p, made.unkicked[c].sum()), np.append(np.arange(n), -1)
                ax.bar(x + 0.5 + 0.22 * (c - 0.5), p, width=0.4, color=colour, label=label, **style)
            else:
                ax.stairs(p, np.arange(n + 1), color=colour, ls=_style(name), lw=1.4, label=label)
    ticks, words = list(range(n + 1)), [f"{v:g}" for v in made.edges]
    still = made.unkicked.sum() > 0
    if still:
        ticks, words = [-0.5, *ticks], ["unkicked", *words]
    ax.set_xticks(ticks, words, rotation=60, fontsize=8)
    if still:
        ax.get_xticklabels()[0].set_ha("right")
    ax.set_xlim(-1 if still else 0, n)
    ax.set_ylim(0, None)
    ax.set_xlabel("kick at birth  [km/s]")
    ax.set_ylabel("probability of a bin, given the class")
    s = made.scenario
    odds = ", ".join(f"P({_label(k)}) = {v:.3g}" for k, v in made.probability.items())
    ax.set_title(f"{made.event}; scenario {s.name} ({s.hash}); {odds}", fontsize=8)
    ax.legend(fontsize=8, frameon=False)
    return ax


def save_follow_up(plan, path, overwrite=False):
    """Write the picture of `follow_up` with its provenance; errors as `io.check_target`."""
    return _save(follow_up, plan, path, overwrite)


def save_kick(made, path, overwrite=False):
    """Write the picture of `kick` with its provenance; errors as `io.check_target`."""
    return _save(kick, made, path, overwrite)


def _save(draw, made, path, overwrite):
    path = check_target(path, PICTURES, overwrite, "--plot")
    figure = blank(6.4, 4.6)
    draw(made, ax=figure.add_subplot())
    return write_figure(figure, path, made.meta(), overwrite)
