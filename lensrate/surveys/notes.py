"""What a reader of a campaign's forecast should mind, in sentences."""

from scipy.stats import poisson

__all__ = ["campaign_warnings"]

_OUTSIDE = 0.01  # share of a class's events beyond the efficiency curve that is worth a word
_CHANCE = 1e-3  # of an observed number of events, below which a word is said


def campaign_warnings(survey, rows, classes):
    """Return what to mind: the fields' warnings gathered, and events that the efficiency curve does not reach."""
    kinds = {}
    for f in rows:
        for w in f.sightline.warnings:
            kinds.setdefault("".join(c for c in w if not c.isdigit()), []).append((f.field.name, w))
    out = []
    for said in kinds.values():
        more = f" (and {len(said) - 1} fields more)" if len(said) > 1 and len({w for _, w in said}) > 1 else ""
        everywhere = len(said) == len(rows) and not more
        out.append(said[0][1] if everywhere else f"{said[0][0]}: {said[0][1]}{more}")
    for i, name in enumerate(classes):
        worst = max(rows, key=lambda f: f.outside[i])
        if worst.outside[i] > _OUTSIDE and worst.sightline.lenses[name].rate > 0:
            low, high = survey.efficiency.t_E[0], survey.efficiency.t_E[-1]
            out.append(
                f"{worst.outside[i]:.0%} of the {name.replace('_', ' ')} events of field {worst.field.name} have a t_E "
                f"outside the efficiency curve ({low:g}-{high:g} d): not counted, since nothing is known of them"
            )
    smooth = [f for f in rows if f.dust_from == "dust disc"]
    if smooth:
        used = [(f.field.name, a) for f in smooth[:6] for a in f.sightline.sources["extinction"].values()]
        each = ", ".join(f"{name} {a:.2f}" for name, a in used)
        out.append(
            f"no extinction is stated for {len(smooth)} of {len(rows)} field{'s' * (len(rows) > 1)}: the "
            f"smooth dust disc's is used ({each}{' and so on' if len(smooth) > 6 else ''} mag), which knows no clouds; "
            "a measured one moves the number of sources"
        )
    for f in rows:
        seen, expected = f.field.observed_events, f.expected.sum()
        if seen is not None and min(poisson.cdf(seen, expected), poisson.sf(seen - 1, expected)) < _CHANCE:
            out.append(
                f"field {f.field.name}: {seen:g} events observed where {expected:.3g} are expected, far beyond chance: "
                "check stars, efficiency and seasons before scaling"
            )
    rules = dict.fromkeys(f.sources for f in survey.fields)
    if len(rules) > 1 and survey.efficiency.name != "complete" and not survey.efficiency.source_limit:
        out.append(
            f"one efficiency without a source_limit serves sources of {len(rules)} rules ({', '.join(rules)}): that "
            "it is the same for them is taken on trust"
        )
    if any(f.field.extinction_map for f in rows):
        out.append("the extinction map enters source counts and the stars' rate; lens classes share its mean elsewhere")
    return tuple(out)
