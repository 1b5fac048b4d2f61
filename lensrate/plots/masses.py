"""Masses measured against telescope time."""

from .saving import blank, write_figure
from .sightlines import _axes, _label

__all__ = ["masses", "save_masses"]

_LOOKS = (("#0072B2", "-"), ("#D55E00", "--"), ("#009E73", "-."), ("#CC79A7", ":"), ("#000000", (0, (5, 1, 1, 1))))


def masses(made, ax=None, lens="black_hole"):
    """Draw how many masses of a class each facility measures against hours spent, longest events first.

    Parameters
    ----------
    made : MassForecast
    ax : matplotlib Axes, optional
        Made if not given.
    lens : str
        Class, or "all".

    Returns
    -------
    matplotlib Axes
    """
    ax = _axes(ax)
    for f, (colour, dash) in zip(made.facilities, _LOOKS * len(made.facilities)):
        curve = f.follow.measured.get(lens)
        if curve is None:
            continue
        name = f.facility.name.replace("_", " ") + (" (invented)" if f.facility.invented else "")
        ax.plot(f.follow.hours, curve, color=colour, ls=dash, lw=1.5, label=name)
    ax.set_xscale("symlog", linthresh=10.0)
    ax.set_xlim(0, None)
    ax.set_ylim(0, None)
    ax.set_xlabel("telescope time  [h], longest events first")
    ax.set_ylabel(f"{_label(lens)}s with mass to {made.limit:.0%}")
    ax.legend(fontsize=8, frameon=False)
    return ax


def save_masses(forecast, path, overwrite=False, lens="black_hole"):
    """Write masses against hours of a CampaignForecast, its provenance in the file's metadata."""
    figure = blank(6.4, 4.4)
    ax = masses(forecast.masses, figure.add_subplot(), lens)
    s = forecast.scenario
    ax.set_title(f"{forecast.campaign.name}; scenario {s.name} ({s.hash}), kicks {s.kicks}", fontsize=8)
    return write_figure(figure, path, forecast.meta(), overwrite)
