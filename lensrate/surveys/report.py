"""What a campaign's forecast looks like in a proposal: headline, tables, LaTeX, methods paragraph."""

import astropy.units as u
import numpy as np

from ..remnants.classes import LABELS

__all__ = ["headline", "latex", "methods", "table_by_class", "table_by_field"]


def table_by_class(forecast):
    """Return a QTable, a row per lens class and one for all."""
    from astropy.table import QTable

    from .yields import poisson_68

    events, scaled = forecast.by_class(), forecast.scaled_by_class()
    sampling = np.sum([f.sampling for f in forecast.fields], axis=0)
    poisson = np.array([poisson_68(e) for e in events])
    table = QTable()
    table["lens"] = [*forecast.classes, "all"]
    table["events"] = events
    table["poisson_low"], table["poisson_high"] = poisson.T
    if forecast.ranges is not None:
        table["range_low"], table["range_high"] = forecast.ranges.T
    table["field_sampling"] = np.append(sampling, sampling.sum())
    table["p_at_least_one"] = -np.expm1(-events)
    if scaled is not None:
        table["scaled_to_observed"] = scaled
    described = {
        "lens": "lens class",
        "events": "expected events",
        "poisson_low": "central 68 % of counts",
        "poisson_high": "central 68 % of counts",
        "range_low": f"least over family '{forecast.family}', one assumption at a time",
        "range_high": f"most over family '{forecast.family}', one assumption at a time",
        "field_sampling": "sampling error of the kick-resolved fields, events",
        "p_at_least_one": "probability of one event or more",
        "scaled_to_observed": f"share times observed, fields {', '.join(forecast.scaled_fields())}",
    }
    for name in table.colnames:
        table[name].info.description = described[name]
    return table


def table_by_field(forecast):
    """Return a QTable, a row per field, season and lens class."""
    from astropy.table import QTable

    seasons = forecast.campaign.calendar.seasons
    rows = []
    for f in forecast.fields:
        scaled, total = f.scaled(), f.expected.sum(axis=1)
        for i, name in enumerate(forecast.classes):
            for j, season in enumerate(seasons):
                share = f.expected[i, j] / total[i] if total[i] > 0 else 0.0
                rows.append(
                    (f.field.name, f.field.l_deg, f.field.b_deg, season.name, name, f.expected[i, j],
                     np.nan if scaled is None else scaled[i] * share, f.efficiency[i], f.outside[i], f.sources)
                )  # fmt: skip
    names = ("field", "l", "b", "season", "lens", "events", "scaled_to_observed", "mean_efficiency",
             "outside_efficiency", "n_sources")  # fmt: skip
    table = QTable(rows=rows, names=names)
    table["l"].unit = table["b"].unit = u.deg
    dust = {f.field.name: f.sightline.sources["extinction"] for f in forecast.fields}
    for band in dict.fromkeys(band for each in dust.values() for band in each):
        table[f"A_{band}"] = np.array([dust[name].get(band, np.nan) for name in table["field"]]) * u.mag
    table["extinction_from"] = [{f.field.name: f.dust_from for f in forecast.fields}[name] for name in table["field"]]
    return table


def headline(forecast):
    """Return one line: how many events, and how many of them remnants."""
    events = dict(zip([*forecast.classes, "all"], forecast.by_class()))
    ranges = None if forecast.ranges is None else dict(zip([*forecast.classes, "all"], forecast.ranges))

    def said(name):
        text = _short(events[name])
        if ranges is not None:
            text += f" ({_short(ranges[name][0])}-{_short(ranges[name][1])})"
        return text

    dark = [n for n in ("white_dwarf", "neutron_star", "black_hole") if n in events]
    parts = ", ".join(f"{said(n)} by {n.replace('_', ' ')}s" for n in dark)
    among = f"; in brackets the range over {_listed(forecast.range_over)}" if forecast.range_over else ""
    return f"{forecast.campaign.name}: {said('all')} events, {parts}{among}"


def _listed(words):
    """Words in a row, the last after an "and"."""
    return " and ".join(filter(None, [", ".join(words[:-1]), *words[-1:]]))


def _short(x):
    """Three significant digits, trailing zeros kept."""
    return f"{x:#.3g}".rstrip(".") if 0 < x < 1000 else f"{x:.0f}"


def latex(forecast):
    """Return a LaTeX table of expected events by class."""
    table = table_by_class(forecast)
    ranged, scaled = "range_low" in table.colnames, "scaled_to_observed" in table.colnames
    columns = "lrc" + "c" * ranged + "r" + "r" * scaled
    titles = ["Lens", "Events", r"68\,\% counts"]
    titles += ["Range"] * ranged + [r"$P(\geq 1)$"] + ["Scaled"] * scaled
    lines = [
        "% " + forecast.header(),
        *([f"% Range: over {_listed(forecast.range_over)}"] if ranged else []),
        *([f"% Scaled: share of each class times the events observed in {', '.join(forecast.scaled_fields())}"]
          if scaled else []),
        f"% scenario {forecast.scenario.name} ({forecast.scenario.hash}), lensrate {forecast.version}",
        rf"\begin{{tabular}}{{{columns}}}",
        r"\hline",
        " & ".join(titles) + r" \\",
        r"\hline",
    ]
    for row in table:
        cells = [LABELS.get(row["lens"], str(row["lens"]).replace("_", " ")), _short(row["events"])]
        cells.append(f"{row['poisson_low']}--{row['poisson_high']}")
        if ranged:
            cells.append(f"{_short(row['range_low'])}--{_short(row['range_high'])}")
        p = row["p_at_least_one"]
        cells.append(f"{p:.2f}" if p < 0.995 else r"$>$0.99")
        if scaled:
            cells.append(_short(row["scaled_to_observed"]))
        lines.append(" & ".join(cells) + r" \\")
    return "\n".join([*lines, r"\hline", r"\end{tabular}"])


def methods(forecast):
    """Return a paragraph for a proposal: what was computed, from what, and what it leaves out."""
    s, c = forecast.scenario, forecast.campaign
    first = forecast.fields[0].sightline
    counted = {f.counted for f in forecast.fields}
    modelled = "those of the source model (not tested against counts in bulge fields)"
    stars = {("stated",): "stated by the survey", ("source model",): modelled}.get(
        tuple(counted), f"stated by the survey where known, else {modelled}"
    )
    kicked = {first.lenses[n].kinematics for n in ("neutron_star", "black_hole")}
    dark = (
        "neutron stars and black holes follow density and velocity fields from their own orbits in the Galaxy's "
        f"potential, for natal kicks after {s.kicks} (black holes: {s.bh_kicks})"
        if kicked & {"kicked", "mixed"}
        else "neutron stars and black holes follow the stars of their birth component, without natal kicks"
    )
    n, days = len(c.calendar.seasons), c.calendar.exposure(c.efficiency.includes).sum()
    found = "every event is taken as found" if c.efficiency.name == "complete" else (
        f"the detection efficiency is one per {c.efficiency.per.replace('_', ' ')} against t_E and "
        + (f"already includes {_listed(list(c.efficiency.includes))}" if c.efficiency.includes else
           "holds no loss by seasons, gaps or blending")
    )  # fmt: skip
    spread = (
        f" The range is the least and most over {_listed(forecast.range_over)} (family '{forecast.family}'), each "
        "changed alone; it is no standard deviation."
        + (f" It leaves out {_listed(forecast.range_without)}." if forecast.range_without else "")
        if forecast.range_over
        else ""
    )
    scaled = (
        f" Numbers scaled to observed counts are the share of each class times the events found in "
        f"{', '.join(forecast.scaled_fields())}."
        if forecast.scaled_fields()
        else ""
    )
    by_rule = {}
    for f in c.fields:
        by_rule.setdefault(f.sources, []).append(f.name)
    one = len(by_rule) == 1
    rules = _listed([k if one else f"{k} ({_fields(v, forecast)})" for k, v in by_rule.items()])
    shared = " Stars that fields share are counted once." if c.overlaps == "count_once" else ""
    lost = c.calendar.exposure().sum()
    already = (
        f" ({lost:.0f} d of them open: what the efficiency holds already is not taken off again)" if days > lost else ""
    )
    dust = {}
    for f in forecast.fields:
        dust.setdefault(f.dust_from, []).append(f.field.name)
    said = {
        "stated": "is stated for", "map": "is that of a map for",
        "dust disc": "is that of a smooth disc of dust, which knows no clouds, for",
    }  # fmt: skip
    parts = [f"{words} {_fields(dust[key], forecast)}" for key, words in said.items() if key in dust]
    extinction = f" Extinction {_listed(parts)}." if parts else ""
    return (
        f"Expected events of {c.name} were computed with lensrate {forecast.version} (scenario {s.name}, "
        f"{s.hash}; Galaxy set {s.galaxy}). For the centre of each of the {len(c.fields)} fields the event rate per "
        f"source and its distribution over t_E were integrated over lens and source distances and velocities, with "
        f"sources {rules} and u_0 < {c.u_0_limit:g}; {dark}. The "
        "stars' own rate carries the change over a field's area where its shape is stated."
        f"{shared}{extinction} Numbers of sources are {stars}; {found}; "
        f"the exposure is {days:.0f} d in {n} season{'s' if n > 1 else ''}{already}. "
        f"Intervals are the central 68 % of Poisson counts.{spread}{scaled} Binary lenses and sources, finite source "
        "size and blending beyond the stated efficiency are left out."
    )


def _fields(names, forecast):
    return "all fields" if len(names) == len(forecast.fields) else _listed(names[:8]) + " and others" * (len(names) > 8)
