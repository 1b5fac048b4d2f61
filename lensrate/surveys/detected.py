"""Mock events of a campaign's forecast, each weighed by how many like it are expected to be found."""

from dataclasses import dataclass

import numpy as np

from ..lensing.sampler import Sampler, seeds
from ..parallel import run_map
from .stars import field_curve

__all__ = ["Detected", "detected_events"]

_COLUMNS = ("lens_class", "M", "D_L", "D_S", "mu_rel_l", "mu_rel_b", "t_E", "theta_E", "pi_rel", "pi_E")


@dataclass(frozen=True, eq=False)
class Detected:
    """Mock events of all fields of a campaign.

    Attributes
    ----------
    field : ndarray of int, shape (n,)
        Index of the campaign's field.
    columns : dict of str to ndarray
        As `lensing.sampler.Draws`, heliocentric.
    weight : ndarray, shape (n,)
        Expected events that each stands for, efficiency included.
    classes : list of str
    """

    field: np.ndarray
    columns: dict
    weight: np.ndarray
    classes: list

    def __getitem__(self, name):
        return self.columns[name]

    def quantiles(self, name, q=(0.16, 0.5, 0.84)):
        """Return weighted quantiles of a column by class, dict of str to tuple; classes without events left out."""
        out = {}
        for i, lens in enumerate(self.classes):
            mine = self["lens_class"] == i
            w = self.weight[mine]
            if not w.sum() > 0:
                continue
            order = np.argsort(self[name][mine])
            cum = np.cumsum(w[order])
            at = np.searchsorted(cum, np.asarray(q) * cum[-1])
            out[lens] = tuple(float(x) for x in self[name][mine][order][np.minimum(at, order.size - 1)])
        return out


def detected_events(forecast, n=20_000, seed=1, jobs=1):
    """Draw events of each field and weigh them with the campaign's sources, exposure and efficiency.

    Parameters
    ----------
    forecast : CampaignForecast
    n : int
        Events a field; every class gets its equal share, so that rare ones are sampled too.
    seed : int
        Same seed, same events, whatever `jobs`.
    jobs : int
        Threads over fields.

    Returns
    -------
    Detected
        Weights of each class and field sum to the forecast's expected events.
    """
    children = seeds(seed).spawn(len(forecast.fields))

    def one(i):
        f = forecast.fields[i]
        draws = Sampler.of(f.sightline).draw(n, children[i], tilt="equal")
        survey = forecast.campaign
        curve = field_curve(survey.efficiency, survey.u_0_limit, f.sightline._integrals.ready)
        weight = draws.weight * curve.of(draws.t_E)
        expected = f.expected.sum(axis=1)
        drawn = np.bincount(draws.lens_class, weight, minlength=expected.size)
        weight = weight * np.divide(expected, drawn, out=np.zeros_like(drawn), where=drawn > 0)[draws.lens_class]
        return {name: getattr(draws, name) for name in _COLUMNS}, weight

    parts = run_map(one, range(len(forecast.fields)), jobs)
    columns = {name: np.concatenate([p[0][name] for p in parts]) for name in _COLUMNS}
    columns["mu_rel"] = np.hypot(columns["mu_rel_l"], columns["mu_rel_b"])
    number = np.repeat(np.arange(len(parts)), [p[1].size for p in parts])
    return Detected(number, columns, np.concatenate([p[1] for p in parts]), list(forecast.classes))
