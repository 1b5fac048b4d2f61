"""Odds as they are reported: probabilities, masses and distances by class, tables, plain dictionaries."""

from dataclasses import dataclass, field, replace

import astropy.units as u
import numpy as np

from .._version import __version__
from ..lensing.points import Axes

__all__ = ["SMALLEST", "EventOdds", "Odds", "SolutionOdds"]

#: probabilities below are only said to be below
SMALLEST = 1e-6
_QUANTILES = {"p16": 0.16, "p50": 0.5, "p84": 0.84}


@dataclass(frozen=True, eq=False)
class SolutionOdds:
    """One degenerate solution: class probabilities, and its weight before it is normalised over solutions."""

    name: str
    delta_chi2: float
    probability: np.ndarray
    evidence: float
    rests: tuple


@dataclass(frozen=True, eq=False)
class EventOdds:
    """What kind of lens one event had.

    Attributes
    ----------
    name : str
    l, b : float
        [deg]
    frame : str
        Of t_E, the parallax and mu_rel.
    classes : tuple of str
    probability, prior : ndarray
        By class: given the data; of all events on this sightline.
    outlier_weight : float
        Probability that the fit is wrong in everything but t_E.
    floors : dict of float to ndarray
        Probabilities with the outlier share multiplied by the key.
    histogram : ndarray, shape (classes, 4, n, 2)
        Posterior weight, and weight times value, of the quantities of `Axes`.
    solutions : tuple of SolutionOdds
    effective_samples : float or None
        Of posterior samples.
    rests : tuple of str
        Quantities that entered.
    pi_E, pi_E_range : float, (float, float), or None
        Size of the best solution's parallax, and the ends of its error bar.
    range : tuple of ndarray or None
        Lowest and highest probability over the scenarios of a spread, this one included.
    """

    name: str
    l: float
    b: float
    frame: str
    classes: tuple
    probability: np.ndarray
    prior: np.ndarray
    outlier_weight: float
    floors: dict
    histogram: np.ndarray
    solutions: tuple
    effective_samples: float | None
    rests: tuple
    t_E: object
    pi_E: float | None = None
    pi_E_range: tuple | None = None
    range: tuple | None = None

    def with_range(self, others):
        """Return a copy with the range of probabilities over further scenarios (same classes in the same order)."""
        every = np.array([self.probability, *(p for p in others if p.size == self.probability.size)])
        return replace(self, range=(every.min(axis=0), every.max(axis=0)))

    def p(self, name):
        """Return the probability of one class."""
        return float(self.probability[self.classes.index(name)])

    @property
    def most_likely(self):
        """The likeliest class."""
        return self.classes[int(np.argmax(self.probability))]

    def quantiles(self, quantity, name=None):
        """Return p16, p50 and p84 of a quantity of `Axes`, of one class or of all; None where there is nothing."""
        k = Axes.names.index(quantity)
        hist = self.histogram[:, k] if name is None else self.histogram[[self.classes.index(name)], k]
        return _quantiles(hist.sum(axis=0))

    def says(self):
        """Return one plain line on what the answer rests on."""
        rests = set(self.rests)
        if self.outlier_weight > 0.5 and rests - {"t_E"}:
            return "the measured values do not fit together: probabilities rest on t_E alone"
        if "theta_E" in rests and "pi_E" in rests:
            q = self.quantiles("mass_msun")
            return f"theta_E and pi_E are measured: the lens's mass decides, about {q['p50']:.3g} Msun"
        if {"mu_rel", "pi_E"} <= rests:
            return "mu_rel and t_E give theta_E, and with pi_E the lens's mass decides"
        if "theta_E" in rests or "mu_rel" in rests:
            return "pi_E is not measured: mass and distance are known only together, the Galaxy's stars decide"
        if "pi_E" in rests:
            if self.most_likely != "star":
                return "theta_E is not measured: probabilities rest on how the Galaxy's lenses move, not on a mass"
            return "theta_E is not measured: probabilities follow the Galaxy's ordinary stars, not the lens's own mass"
        return "only t_E is measured: probabilities follow the Galaxy's ordinary stars"

    def warnings(self):
        """Return what to mind about this event."""
        out = []
        top = float(self.probability.max())
        for factor, p in self.floors.items():
            moved = p[int(np.argmax(self.probability))]
            if abs(moved - top) > 0.1:
                out.append(f"{self.name}: with an outlier share {factor:g} times as large it is {moved:.2f}")
        if self.outlier_weight > 0.3:
            p = f"{self.outlier_weight:.2f}" if self.outlier_weight < 0.995 else "more than 0.99"
            out.append(f"{self.name}: the fit is wrong (outlier branch) with probability {p}; check values and units")
        return out

    def to_dict(self):
        """Return plain numbers under the keys of ``lensrate odds --json``."""
        star = self.probability[self.classes.index("star")] if "star" in self.classes else np.nan
        shown = np.maximum(self.probability, SMALLEST)
        quantities = [q for q in Axes.names if q != "mu_rel_mas_per_yr"]
        total = sum(s.evidence for s in self.solutions)
        out = {
            "event": self.name,
            "l_deg": self.l,
            "b_deg": self.b,
            "frame": self.frame,
            "probability": dict(zip(self.classes, shown.tolist())),
            "below": [c for c, p in zip(self.classes, self.probability) if p < SMALLEST],
            "prior": dict(zip(self.classes, self.prior.tolist())),
            "odds_against_star": {
                c: float(max(p, SMALLEST) / max(star, SMALLEST)) for c, p in zip(self.classes, self.probability)
            },
            "outlier_weight": self.outlier_weight,
            "outlier_floors": {f"{f:g}": dict(zip(self.classes, p.tolist())) for f, p in self.floors.items()},
            "most_likely": self.most_likely,
            "mass_msun": self.quantiles("mass_msun"),
            "distance_kpc": self.quantiles("distance_kpc"),
            "theta_E_mas": self.quantiles("theta_E_mas"),
            "mu_rel_mas_per_yr": self.quantiles("mu_rel_mas_per_yr"),
            "by_class": {c: {q: self.quantiles(q, c) for q in quantities} for c in self.classes},
            "solutions": [
                {
                    "solution": s.name,
                    "delta_chi2": s.delta_chi2,
                    "weight": float(s.evidence / total) if total > 0 else None,
                    "probability": dict(zip(self.classes, np.maximum(s.probability, SMALLEST).tolist())),
                }
                for s in self.solutions
            ],
            "effective_samples": self.effective_samples,
            "measured": list(self.rests),
            "rests_on": self.says(),
        }
        if self.range is not None:
            low, high = self.range
            out["range"] = {c: [float(a), float(b)] for c, a, b in zip(self.classes, low, high)}
        return out


@dataclass(frozen=True, eq=False)
class Odds:
    """Odds of a sample of events under one scenario.

    Attributes
    ----------
    events : tuple of EventOdds
    scenario : Scenario
    outlier : float
        Share of events whose fit is taken to be wrong in everything but t_E.
    notes, failed, references : tuple of str
        What to mind; events that got no odds, with the reason; what the numbers rest on.
    sample : str
        File name.
    invented : bool
        Whether the sample says that it is invented.
    spread : tuple of str
        Labels of the further scenarios.
    """

    events: tuple
    scenario: object
    outlier: float
    notes: tuple = ()
    failed: tuple = ()
    references: tuple = ()
    sample: str = ""
    invented: bool = False
    spread: tuple = ()
    version: str = field(default=__version__)

    def __len__(self):
        return len(self.events)

    def __iter__(self):
        return iter(self.events)

    def header(self):
        """Return the line that stands above the table."""
        frames = sorted({e.frame for e in self.events})
        rule = f"sources {self.scenario.sources}; frame of the data {' and '.join(frames) or '-'}"
        floor = (
            f"{self.outlier:.3g} of fits taken as wrong in all but t_E (pi_E, theta_E, mu_rel then log-uniform over "
            "four decades)"
        )
        return f"{rule}; {floor}"

    def meta(self):
        """Return how this was made, for the metadata of tables and pictures."""
        return {
            "program": "lensrate",
            "version": self.version,
            "header": self.header(),
            "sample": self.sample,
            "invented": self.invented,
            **self.scenario.made(),
            "seed": None,
            "outlier": self.outlier,
            "spread": list(self.spread),
            "warnings": list(self.warnings()),
            "references": list(self.references),
        }

    def warnings(self):
        """Return the notes on the sample and on its events."""
        return [*self.notes, *(w for e in self.events for w in e.warnings())]

    def to_dict(self):
        """Return the list that ``lensrate odds --json`` prints."""
        return [e.to_dict() for e in self.events]

    def to_table(self):
        """Return a table, a row per event.

        Returns
        -------
        astropy.table.QTable
            event, l, b, frame, P and prior by class (and P_CLASS_low, P_CLASS_high of a spread), most_likely, mass and
            distance with their 16th and 84th percentiles, outlier weight, effective samples, what it rests on.
        """
        from astropy.table import QTable

        table = QTable()
        table["event"] = [e.name for e in self.events]
        table["l"] = np.array([e.l for e in self.events]) * u.deg
        table["b"] = np.array([e.b for e in self.events]) * u.deg
        table["frame"] = [e.frame for e in self.events]
        classes = self.events[0].classes if self.events else ()
        for c in classes:
            table[f"P_{c}"] = np.array([e.p(c) for e in self.events])
            table[f"P_{c}"].info.description = f"probability of {c.replace('_', ' ')}"
        for c in classes:
            table[f"prior_{c}"] = np.array([e.prior[e.classes.index(c)] for e in self.events])
            table[f"prior_{c}"].info.description = "share of all events on the sightline"
        if classes and all(e.range is not None for e in self.events):
            for i, c in enumerate(classes):
                for end, word in ((0, "low"), (1, "high")):
                    table[f"P_{c}_{word}"] = np.array([e.range[end][i] for e in self.events])
                    text = f"{('lowest', 'highest')[end]} probability over the family of assumptions"
                    table[f"P_{c}_{word}"].info.description = text
        table["most_likely"] = [e.most_likely for e in self.events]
        for quantity, unit, column in (
            ("mass_msun", u.Msun, "M"),
            ("distance_kpc", u.kpc, "D_L"),
            ("theta_E_mas", u.mas, "theta_E"),
            ("mu_rel_mas_per_yr", u.mas / u.yr, "mu_rel"),
        ):
            for key in _QUANTILES:
                values = [(e.quantiles(quantity) or {}).get(key, np.nan) for e in self.events]
                table[f"{column}_{key}"] = np.array(values, dtype=float) * unit
        table["outlier_weight"] = np.array([e.outlier_weight for e in self.events])
        samples = [np.nan if e.effective_samples is None else e.effective_samples for e in self.events]
        table["effective_samples"] = np.array(samples)
        table["rests_on"] = [e.says() for e in self.events]
        table.meta.update(self.meta())
        return table

    def to_pandas(self):
        """Return `to_table` as a pandas DataFrame, units dropped."""
        return self.to_table().to_pandas()

    def plot(self, ax=None, **style):
        """Draw the events on the plane of t_E and pi_E over the predicted densities of the classes."""
        import importlib

        return importlib.import_module("lensrate.plots").odds(self, ax=ax, **style)


def _quantiles(hist):
    """p16, p50 and p84 from a histogram of logarithms with the mean inside each bin."""
    weight, first = hist[:, 0], hist[:, 1]
    some = weight > 0
    if not some.any():
        return None
    w, x = weight[some], first[some] / weight[some]
    middle = (np.cumsum(w) - 0.5 * w) / w.sum()
    return {key: float(np.exp(np.interp(q, middle, x))) for key, q in _QUANTILES.items()}
