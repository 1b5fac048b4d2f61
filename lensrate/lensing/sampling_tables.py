"""Tables along a sightline from which events are drawn: nodes, densities, motions, envelope, masses."""

import numpy as np

from ..kernels import sampling as kernels
from . import rates

__all__ = ["masses", "pairs", "tables"]

_NEAREST = 2e-4  # kpc; nearer lenses are some 1e-7 of the rate
_NEAR = 0.04  # kpc, up to which cells grow by a fifth
_STEP = 0.03  # kpc
_BANDS = (1.0, 0.55, 0.28, 0.13, 0.05, 0.0)  # of 1 - D_L / D_S
_SOURCE_CELLS = 50
_SOURCE_WIDTH = 0.4  # kpc
_GUIDE = 1024  # entries of the tables that say where a search begins
_GAP = 3.0  # a mass node is spread no farther than this times the nearer neighbour's distance
_FEW = 4  # fewer mass nodes are masses by themselves


def _nodes(ready, end):
    """Distances [kpc] of the tables, kinks of the model among them."""
    steps = [_NEAREST]
    while steps[-1] < _NEAR:
        steps.append(steps[-1] * 1.2)
    edges = ready.edges[(ready.edges > 1.5 * _NEAR) & (ready.edges < end * (1 - 1e-9))]
    out = [np.array(steps[:-1])]
    tangent = ready.line.tangent_distance()
    x, y, z = ready.line.xyz(max(tangent, 0.0))
    miss = float(np.sqrt(x * x + y * y + z * z))
    start = _NEAR
    for stop in [*edges, end]:
        d = start
        nodes = []
        while d < stop - 1e-9:
            nodes.append(d)
            step = _STEP * d if d < 1.0 else max(_STEP, 0.01 * (d - 7.0))
            if tangent > 0:
                # the middle of the Galaxy is as sharp as the sightline passes close to it
                step = min(step, max(0.1 * float(np.hypot(miss, d - tangent)), 0.003))
            d += step
        # even steps that end at the kink
        out.append(start + (stop - start) * np.array([(v - start) / (d - start) for v in nodes]))
        start = stop
    return np.append(np.concatenate(out), end)


def _table(profile, D, density):
    """The kernels' table with density and motion, scale of speeds 1, running integral still to do.

    Where there is nothing, the motion is that of the next place where there is something.
    """
    some = profile[0] > 0
    out = np.empty((*some.shape, kernels.COLUMNS))
    for q in range(5):
        np.multiply(profile[1 + q], D if q < 2 else D**2, out=out[:, :, 3 + q], where=some)
    if not some.all():
        i = np.arange(D.size)
        before = np.maximum.accumulate(np.where(some, i, -1), axis=1)
        after = np.minimum.accumulate(np.where(some, i, D.size)[:, ::-1], axis=1)[:, ::-1]
        near = np.where(before >= 0, before, after)
        for row in np.flatnonzero(~some.all(axis=1)):
            out[row] = out[row, near[row]] if near[row, 0] < D.size else 0.0
    out[..., 0] = density
    out[..., 2] = 1.0
    return out


def _integrate(table, step):
    """Fill the running integral of density times scale."""
    f = table[..., 0]
    table[:, 0, 1] = 0.0
    np.cumsum(0.5 * step * (f[:, 1:] + f[:, :-1]) * table[:, :-1, 2], axis=1, out=table[:, 1:, 1])


def tables(ready, used):
    """Tables in the order of the drawing kernel, the envelope of each lens row in use, the component of source rows."""
    fixed = ready.sources.fixed_distance
    D = _nodes(ready, fixed or ready.edges[-1])
    D_src, src, cell = _source_table(ready, D)
    lit = np.flatnonzero(src[:, -1, 1] > 0)
    src = np.ascontiguousarray(src[lit])
    share = np.diff(src[..., 1])
    # the bound on speeds is tightest about the sources' own mean motion
    middle = 0.5 * (src[:, 1:, 3:5] / D_src[1:, None] + src[:, :-1, 3:5] / D_src[:-1, None])
    c = np.average(middle.reshape(-1, 2), axis=0, weights=share.ravel())
    speed_S, square_S = _bounds(D_src, src, c)
    profile = ready.model.galaxy.profile(ready.line, D)
    if ready.model.kicked is not None:
        profile = np.concatenate([profile, ready.kicked_table.at(D)], axis=1)
    profile = profile[:, used]
    lens = _table(profile, D, profile[0] * D**1.5)
    speed, square = _bounds(D, lens, c)
    lens[:, :-1, 2] = np.sqrt(square + np.average(square_S, weights=share))
    _integrate(lens, np.diff(D))
    band, root = _bands(D, D_src, cell)
    n = lit.size * root.size
    height, alias = np.empty((used.size, n), dtype=np.float32), np.empty((used.size, n, 2), dtype=np.float32)
    total = np.empty(used.size)
    pieces = np.empty((n, 5), dtype=np.int16)
    kernels.envelope(
        lens, speed, square, src, speed_S, square_S, cell, band, root, height, total, alias, pieces
    )  # fmt: skip
    guide, guide_S = np.empty((used.size, _GUIDE), dtype=np.int16), np.empty((lit.size, _GUIDE), dtype=np.int16)
    kernels.guides(lens, guide)
    kernels.guides(src, guide_S)
    made = (D, lens, guide, D_src, src, guide_S, height, alias, pieces)
    own = ready.src.shape[1] == len(ready.model.galaxy.components)
    return made, total, np.asarray(lit if own else [-1] * lit.size, dtype=np.int32)


def _bounds(D, table, c):
    speed, square = np.empty((2, table.shape[0], D.size - 1))
    kernels.motion_bounds(D, table, c[0], c[1], speed, square)
    return speed, square


def _source_table(ready, D):
    """Nodes, table of each source row (density per kpc), and the nodes between cells of source distance."""
    if ready.sources.fixed_distance:
        D_src = np.full(2, ready.sources.fixed_distance)
        profile = np.repeat(ready.src, 2, axis=2)
        table = _table(profile, D_src, profile[0])
        _integrate(table, 1.0)
        return D_src, table, np.array([0, 1])
    profile = rates._source_rows(ready.model, ready.line, ready.sources, D)
    table = _table(profile, D, profile[0] / ready.norm)
    _integrate(table, np.diff(D))
    total = table[..., 1].sum(axis=0)
    cell = [max(int(np.argmax(total > 0)) - 1, 0)]
    for i in range(cell[0] + 1, D.size):
        if (
            total[i] - total[cell[-1]] > total[-1] / _SOURCE_CELLS
            or D[i] - D[cell[-1]] > max(_SOURCE_WIDTH, 0.05 * D[i])
            or i == D.size - 1
        ):
            cell.append(i)
    return D, table, np.array(cell)


def _bands(D, D_src, cell):
    """Lens nodes between bands of 1 - D_L / D_S, (J, K + 1), and the largest square root of it in each, (J, K)."""
    far = D_src[cell[1:]]
    edge = far[:, None] * (1.0 - np.array(_BANDS))
    band = np.minimum(np.searchsorted(D, edge * (1 - 1e-12)), D.size - 1)
    band[:, 0] = 0
    return band, np.sqrt(np.maximum(1.0 - D[band[:, :-1]] / far[:, None], 0.0))


def pairs(root, element, used, total, which):
    """Class and lens row together: weight of the envelope, and what belongs to each."""
    weight = root[:, element] * total
    c, r = np.nonzero(weight > 0)
    words = np.stack([c, element[r], r, which[c, element[r]]], axis=1)
    return {"weight": weight[c, r], "words": words.astype(np.int32), "number": used.astype(np.int32)}


def masses(spectra):
    """Alias tables of the masses of each class on each element, one after another, and the number of each table."""
    which = np.full((len(spectra), len(spectra[0])), -1)
    first, parts, known = [0], [], {}
    for c, row in enumerate(spectra):
        for e, s in enumerate(row):
            if s is None or not s.moment(0.5) > 0:
                continue
            key = (s.mass.tobytes(), s.number.tobytes())
            if key not in known:
                known[key] = len(first) - 1
                parts.append(_mass_nodes(s))
                first.append(first[-1] + len(parts[-1]))
            which[c, e] = known[key]
    return (np.array(first), np.concatenate(parts)), which


def _mass_nodes(spectrum):
    """Share and other of an alias table by number sqrt(M), mass, how far a node reaches to either side (twice over)."""
    some = spectrum.number > 0
    order = np.argsort(spectrum.mass[some])
    mass, number = spectrum.mass[some][order], spectrum.number[some][order]
    share, other = np.empty(mass.size), np.empty(mass.size, dtype=np.int64)
    kernels.alias_table(number * np.sqrt(mass), share, other)
    left, right = np.zeros(mass.size), np.zeros(mass.size)
    if mass.size >= _FEW:
        gap = np.diff(mass)
        left[1:], right[:-1] = gap, gap
        # the first and last node of a Gauss rule stand about so far from its ends
        left[0], right[-1] = 0.25 * gap[0], 0.25 * gap[-1]
        # no smearing over a gap between two groups of masses
        near = np.minimum(left, right)
        near[0], near[-1] = gap[0], gap[-1]
        left, right = np.minimum(left, _GAP * near), np.minimum(right, _GAP * near)
    return np.stack([share, other, mass, left, right], axis=1)
