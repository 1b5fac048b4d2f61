"""Pictures of the whole Galaxy: maps of stars and remnants from above and from the side."""

import numpy as np
from matplotlib.colors import LogNorm

from ..io import PICTURES, check_target
from ..remnants.classes import LABELS
from ..remnants.maps import galaxy_maps
from .saving import blank, write_figure

__all__ = ["maps", "save_maps"]

_WORDS = {"young": "born < 1 Gyr ago", "old": "born earlier", "all": ""}
_RANGE = (1e-5, 0.3)  # share per kpc^2
_LINES = 10.0 ** np.arange(-6, 1, 0.5)


def maps(census):
    """Draw stars, neutron stars and black holes from above and from the side, young and old remnants apart.

    Parameters
    ----------
    census : Census
        What to draw.

    Returns
    -------
    matplotlib Figure
        Every panel shows the share of its objects per square kiloparsec, on one colour scale.
    """
    model = census.model
    panels = galaxy_maps(model)
    R0 = model.galaxy.R0
    figure = blank(1.2 + 2.55 * len(panels), 4.5)
    axes = figure.subplots(2, len(panels), sharex=True, sharey="row", height_ratios=[2.75, 1], squeeze=False)
    norm = LogNorm(*_RANGE, clip=True)
    for (top, side), panel in zip(axes.T, panels):
        reach, height = panel.x[-1], panel.z[-1]
        # a perceptually even map that colour-blind readers see as others do, and that prints in grey
        style = {"origin": "lower", "norm": norm, "cmap": "cividis", "interpolation": "bilinear"}
        image = top.imshow(panel.face_on, extent=(-reach, reach, -reach, reach), **style)
        side.imshow(panel.edge_on, extent=(-reach, reach, -height, height), **style)
        lines = {"levels": _LINES, "colors": "white", "linewidths": 0.4, "alpha": 0.5}
        top.contour(panel.x, panel.x, panel.face_on, **lines)
        side.contour(panel.x, panel.z, panel.edge_on, **lines)
        title = LABELS[panel.name] + "s"
        if panel.name != "star":
            title += f", {model.kinematics(panel.name)}"
        words = ", ".join(w for w in (_WORDS[panel.group], _power(panel.number)) if w)
        top.set_title(f"{title}\n{words}", fontsize="small")
        for ax in (top, side):
            ax.plot(-R0, 0, marker="o", ms=5, mfc="none", mec="white", mew=1)
            ax.plot(-R0, 0, marker="o", ms=1.2, color="white")
        side.set_xlabel("x  [kpc]")
    axes[0, 0].set_ylabel("y  [kpc]")
    axes[1, 0].set_ylabel("z  [kpc]")
    bar = figure.colorbar(image, ax=axes, extend="both", pad=0.01, aspect=30)
    bar.set_label(r"share of all of them  [kpc$^{-2}$]; lines: half a dex", fontsize="small")
    s = model.scenario
    figure.suptitle(f"scenario {s.name} ({s.hash}): kicks {s.kicks}, black holes {s.bh_kicks}", fontsize="small")
    return figure


def _power(n):
    exponent = int(np.floor(np.log10(n)))
    return rf"${n / 10**exponent:.2g}\times10^{{{exponent}}}$"


def save_maps(census, path, overwrite=False):
    """Write the maps with their provenance in the file's metadata.

    Parameters
    ----------
    census : Census
        What to draw.
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
    check_target(path, PICTURES, overwrite, "--plot")
    return write_figure(maps(census), path, census.meta(), overwrite)
