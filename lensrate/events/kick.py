"""Where one lens was born and how hard it was kicked: the odds by element instead of by class."""

from dataclasses import dataclass, field

import numpy as np

from .._version import __version__
from ..errors import ConvergenceError, InputError
from ..lensing import rates
from ..lensing.points import EventRates
from ..scenario import Scenario, resolve
from ..scenario.numerics import Numerics
from .lens_limit import LensLimit
from .likelihood import likelihood
from .odds import OUTLIER, _main, event_odds, event_rates

__all__ = ["KickPosterior", "kick_posterior"]

_CLASSES = ("neutron_star", "black_hole")
_NOTHING = 1e-12


@dataclass(frozen=True, eq=False)
class KickPosterior:
    """Birth component and kick of one lens, given its class and that the fit is right.

    Attributes
    ----------
    event : str
    classes : tuple of str
    components : tuple of str
        Elements of the Galaxy that remnants are born in.
    edges : ndarray, shape (K + 1,)
        Kick bins [km/s].
    law, flat : ndarray, shape (classes, components, K)
        Posterior under the scenario's kick law, and with every bin as likely as any other. With `unkicked` each class
        sums to one under the law; flat has kicked remnants only.
    unkicked : ndarray, shape (classes, components)
        Under the law: no kick at all, or born where the fields do not reach, and so moving like the stars.
    support : ndarray, shape (classes, components, K)
        Likelihood of the data per remnant born in each bin, over the mean of all bins: what the event itself says.
    probability : dict of str to float
        Of each class, from the odds.
    laws : dict of str to str
    outlier : float
        Behind `probability`.
    """

    event: str
    classes: tuple
    components: tuple
    edges: np.ndarray
    law: np.ndarray
    flat: np.ndarray
    unkicked: np.ndarray
    support: np.ndarray
    probability: dict
    laws: dict
    scenario: object
    notes: tuple = ()
    references: tuple = ()
    version: str = field(default=__version__)
    outlier: float = OUTLIER

    def header(self):
        """Return the line above the table."""
        p = ", ".join(f"P({c.replace('_', ' ')}) = {v:.3g}" for c, v in self.probability.items())
        return (
            f"{self.event}: birth component and kick, given the class and that the fit "
            f"is right; law: {'; '.join(f'{c} {v}' for c, v in self.laws.items())}; flat: every bin alike; {p}"
        )

    def quantiles(self, name, prior="law"):
        """Return p16, p50, p84 of the kick [km/s] of one class, flat inside bins; None where there is nothing."""
        c = self.classes.index(name)
        p = (self.law if prior == "law" else self.flat)[c].sum(axis=0)
        still = self.unkicked[c].sum() if prior == "law" else 0.0
        total = p.sum() + still
        if not total > 0:
            return None
        cum = np.concatenate([[still], still + np.cumsum(p)]) / total
        return {k: float(np.interp(q, cum, self.edges)) for k, q in (("p16", 0.16), ("p50", 0.5), ("p84", 0.84))}

    def meta(self):
        """Return how this was made."""
        return {
            "program": "lensrate", "version": self.version, "header": self.header(), "scenario": self.scenario.name,
            "scenario_hash": self.scenario.hash, "scenario_text": self.scenario.to_toml(), "seed": None,
            "outlier": self.outlier, "warnings": list(self.notes), "references": list(self.references),
        }  # fmt: skip

    def to_dict(self):
        """Return plain numbers by class."""
        return {
            name: {
                "probability": self.probability[name],
                "edges_km_s": self.edges.tolist(),
                "kick_km_s": {prior: self.quantiles(name, prior) for prior in ("law", "flat")},
                "by_component": {
                    comp: {
                        "law": self.law[c, i].tolist(), "flat": self.flat[c, i].tolist(),
                        "unkicked": float(self.unkicked[c, i]), "support": self.support[c, i].tolist(),
                    }
                    for i, comp in enumerate(self.components)
                },
            }
            for c, name in enumerate(self.classes)
        }  # fmt: skip

    def to_table(self):
        """Return a QTable, a row per class, component and kick bin; before a component's bins its unkicked share.

        Over a class P_law sums to one, and P_flat too. Of the unkicked, where the law has such, both ends are 0 and
        there is no support.
        """
        import astropy.units as u
        from astropy.table import QTable

        still = [
            [(name, comp, 0.0, 0.0, self.unkicked[c, i], 0.0, np.nan)] * int(self.unkicked[c].sum() > 0)
            for c, name in enumerate(self.classes) for i, comp in enumerate(self.components)
        ]  # fmt: skip
        kicked = [
            (name, comp, self.edges[k], self.edges[k + 1], self.law[c, i, k], self.flat[c, i, k], self.support[c, i, k])
            for c, name in enumerate(self.classes) for i, comp in enumerate(self.components)
            for k in range(self.edges.size - 1)
        ]  # fmt: skip
        bins = self.edges.size - 1
        rows = [row for j, first in enumerate(still) for row in (*first, *kicked[j * bins : (j + 1) * bins])]
        table = QTable(rows=rows, names=("lens", "component", "kick_lo", "kick_hi", "P_law", "P_flat", "support"))
        for name in ("kick_lo", "kick_hi"):
            table[name] = table[name] * u.km / u.s
            table[name].info.description = "ends of the kick bin; both 0: unkicked"
        table.meta.update(self.meta())
        return table

    def plot(self, ax=None):
        """Draw both posteriors against kick speed; returns matplotlib Axes."""
        import importlib

        return importlib.import_module("lensrate.plots").kick(self, ax=ax)


def _layout(model):
    """Every kicked element a base of its own, and the spectra of each class on it under the law and with all there."""
    m, kicked = model.n_stellar, model.kicked
    bases, spectra = [[(i, 1.0)] for i in range(m)], {}
    bins = kicked.edges.size - 1
    for name in _CLASSES:
        for i in range(m):
            s = model.spectrum(name, i)
            if s is not None and s.mass.size and s.number.sum() > 0:
                spectra["law", name, i, -1] = [(i, s.mass, s.number)]
    for e, host in enumerate(kicked.host):
        k = e % (bins + 1) - 1
        if k < 0:
            continue
        used = False
        for name in _CLASSES:
            full = model.populations[host].spectra[name]
            if not full.mass.size or not full.number.sum() > 0:
                continue
            law = model.spectrum(name, m + e)
            spectra["flat", name, host, k] = [(len(bases), full.mass, full.number / bins)]
            if law is not None and law.number.sum() > _NOTHING * full.number.sum():
                spectra["law", name, host, k] = [(len(bases), law.mass, law.number)]
            used = True
        if used:
            bases.append([(m + e, 1.0)])
    return bases, spectra


def kick_posterior(event, scenario="default", *, outlier=OUTLIER, keep=None):
    """Return where one lens was born and how hard it was kicked, were it a neutron star or a black hole.

    Parameters
    ----------
    event : Observed
    scenario : Scenario or str
        With kick-resolved fields.
    outlier : float
        As in `odds`; enters the probabilities of the classes only.
    keep : str or Path, optional
        Folder that keeps the rate densities behind those probabilities, as in `odds.event_rates`.

    Returns
    -------
    KickPosterior

    Raises
    ------
    InputError
        The scenario has no kick-resolved fields.
    ConvergenceError
        No remnant of this scenario explains the data.

    Notes
    -----
    The rate is linear in the shares of the kick bins, so the posterior of a bin is its share times the rate at the data
    per remnant born with such a kick. The fields' sampling error, about a per cent in well-filled bins, is not added.
    """
    if not isinstance(scenario, Scenario):
        scenario = Scenario.read(scenario)
    model = resolve(scenario)
    if model.kicked is None:
        raise InputError("kick: this scenario has no kick-resolved fields; leave fields at default")
    x, y = np.radians(float(event.l)), np.radians(float(event.b))
    toward = model.sources.toward(x, y, model.galaxy)
    ready = rates.prepare(model, model.galaxy.sightline(x, y), toward, Numerics(**scenario.numerics))
    line = EventRates(ready, _layout(model))
    keys = [c.name for c in line.classes]
    total = np.zeros(len(keys))
    for s in event.solutions:
        like = likelihood(s, event)
        light = LensLimit(s.plain["I_lens_limit"], line) if "I_lens_limit" in s.plain else None
        total += np.exp(-0.5 * s.delta_chi2) * _main(like, line, light).sum(axis=1)
    names = [c.element for c in model.galaxy.components]
    bins = model.kicked.edges.size - 1
    shape = (len(_CLASSES), len(names), bins)
    law, flat, still = np.zeros(shape), np.zeros(shape), np.zeros(shape[:2])
    for (prior, name, host, k), value in zip(keys, total):
        c = _CLASSES.index(name)
        if k < 0:
            still[c, host] += value
        else:
            (law if prior == "law" else flat)[c, host, k] += value
    if not (law.sum() + still.sum() > 0 and flat.sum() > 0):
        raise ConvergenceError(f"{event.name}: no remnant of this scenario explains the data")
    support = np.zeros(shape)
    for c, name in enumerate(_CLASSES):
        for i in range(len(names)):
            pop = model.populations[i]
            born = 0.0 if pop is None else pop.spectra[name].number.sum()
            if born > 0:
                support[c, i] = flat[c, i] / born
        mean = support[c][support[c].sum(axis=1) > 0].mean() if support[c].sum() > 0 else 1.0
        support[c] /= mean
        norm = law[c].sum() + still[c].sum()
        law[c], still[c] = (a[c] / norm if norm > 0 else a[c] for a in (law, still))
        flat[c] = flat[c] / flat[c].sum() if flat[c].sum() > 0 else flat[c]
    held = [i for i in range(len(names)) if law[:, i].sum() + flat[:, i].sum() + still[:, i].sum() > 0]
    found = event_odds(event, event_rates(event.l, event.b, scenario, keep), outlier)
    return KickPosterior(
        event=event.name,
        classes=_CLASSES,
        components=tuple(names[i] for i in held),
        edges=np.asarray(model.kicked.edges),
        law=law[:, held],
        flat=flat[:, held],
        unkicked=still[:, held],
        support=support[:, held],
        probability={name: found.p(name) for name in _CLASSES},
        laws={"neutron_star": scenario.kicks, "black_hole": scenario.bh_kicks},
        scenario=scenario,
        outlier=float(outlier),
        notes=model.warnings,
        references=model.references,
    )
