"""Invented surveys and samples for tests: events from the event sampler, independent of the folding under test."""

import pickle

import numpy as np
from astropy.table import Table

from lensrate.events.observed import Sample
from lensrate.lensing.sampler import Sampler
from lensrate.surveys.campaign import Campaign
from lensrate.surveys.yields import campaign

FIELDS = [
    {"name": "A", "l": 1.0, "b": -2.9, "radius_deg": 0.5, "limit": "I=20", "extinction": {"I": 1.2},
     "monitored_stars": 3e7},
    {"name": "B", "l": 4.0, "b": -4.9, "radius_deg": 0.5, "limit": "I=20", "extinction": {"I": 0.7},
     "monitored_stars": 2e7},
]  # fmt: skip


class Posted:
    """An executor that sends work as to another machine: nothing that cannot be pickled gets there."""

    def map(self, func, items):
        func = pickle.loads(pickle.dumps(func))
        return (pickle.loads(pickle.dumps(func(item))) for item in pickle.loads(pickle.dumps(list(items))))


def survey(folder, fields=FIELDS):
    """A campaign of small fields, its efficiency curve written into a folder; also as a file there."""
    curve = Table({"t_E": [1.0, 10.0, 100.0, 300.0], "efficiency": [0.02, 0.2, 0.4, 0.1]})
    curve.meta = {"per": "source", "includes": [], "note": "invented"}
    curve.write(folder / "curve.ecsv", format="ascii.ecsv", overwrite=True)
    table = {
        "season": [{"start": "2031-01-01", "end": "2031-12-31"}],
        "efficiency": {"file": "curve.ecsv"},
        "field": fields,
    }
    text = 'name = "two fields (invented)"\n[[season]]\nstart = 2031-01-01\nend = 2031-12-31\n'
    text += '[efficiency]\nfile = "curve.ecsv"\n'
    for f in fields:
        text += "[[field]]\n"
        for key, value in f.items():
            if isinstance(value, dict):
                text += f"{key} = {{ I = {value['I']} }}\n"
            else:
                text += f'{key} = "{value}"\n' if isinstance(value, str) else f"{key} = {value}\n"
    (folder / "survey.toml").write_text(text)
    return Campaign.from_dict(table, folder / "survey.toml")


def two_fields(folder, scenario):
    """Its forecast."""
    return campaign(survey(folder), scenario)


_samplers = {}


def draw_table(forecast, seed, parallax=False):
    """Events of a forecast: Poisson numbers, found with the efficiency of their t_E, measured with errors."""
    rng, rows = np.random.default_rng(seed), []
    curve = forecast.campaign.efficiency
    years = forecast.campaign.calendar.exposure(curve.includes).sum() / 365.25
    for f in forecast.fields:
        sampler = _samplers.setdefault(id(f.sightline), (f.sightline, Sampler.of(f.sightline)))[1]
        n = int(rng.poisson(f.sources * f.rate_factor * years * sampler.rate))
        d = sampler.draw(n, rng, weighted=False)
        for j in np.flatnonzero(rng.random(n) < curve.of(d.t_E)):
            s, e = 0.02 + 0.06 * rng.random(), 0.02 + 0.2 * d.pi_E[j]
            t = d.t_E[j] * np.exp(s * rng.standard_normal())
            noise = e * rng.standard_normal(2)
            turn = rng.uniform(0, 2 * np.pi)
            north, east = d.pi_E[j] * np.cos(turn) + noise[0], d.pi_E[j] * np.sin(turn) + noise[1]
            rows.append((f"{f.field.name}{j}", f.field.l_deg, f.field.b_deg, t, t * s, north, east, e, e))
    names = ["event", "l", "b", "t_E", "t_E_err", "pi_EN", "pi_EE", "pi_EN_err", "pi_EE_err"]
    table = Table(rows=rows, names=names)
    if not parallax:
        table = table[names[:5]]
    table.meta.update({"frame": "heliocentric", "invented": True})
    return table


def draw_sample(forecast, seed, parallax=False):
    """The same as a Sample."""
    return Sample.from_table(draw_table(forecast, seed, parallax))
