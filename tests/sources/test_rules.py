"""Source rules read from text."""

import pytest

from lensrate.errors import InputError
from lensrate.sources.bands import BANDS
from lensrate.sources.rules import ClumpRule, DistanceRule, LimitRule, parse_rule


@pytest.mark.parametrize(
    "text, rule",
    [
        ("clump", ClumpRule()),
        ("clump:all", ClumpRule(discs=True)),
        ("limit:I=21", LimitRule("I", 21.0)),
        ("limit:Ks=17.25", LimitRule("Ks", 17.25)),
        ("distance:8", DistanceRule(8.0)),
        ("distance:0.05", DistanceRule(0.05)),
    ],
)
def test_read(text, rule):
    assert parse_rule(text) == rule == parse_rule(rule.text) == parse_rule(rule)


def test_every_band():
    assert [parse_rule(f"limit:{band}=20").band for band in BANDS] == list(BANDS)


@pytest.mark.parametrize(
    "text, match",
    [
        ("clmp", "did you mean 'clump'"),
        ("", "is not a rule"),
        ("clump:al", "did you mean 'all'"),
        ("clump:", "is not a rule"),
        ("limit", "not complete"),
        ("limit:21", "limit:BAND=MAGNITUDE"),
        ("limit:K=14", "did you mean 'Ks'"),
        ("limit:I=nan", "not a finite number"),
        ("limit:I=inf", "not a finite number"),
        ("limit:I=", "not a finite number"),
        ("limit:I=-3", "above 0"),
        ("limit:I=99", "at most 40"),
        ("distance:", "not a finite number"),
        ("distance:0.04", "0.05 to 1000"),
        ("distance:-8", "0.05 to 1000"),
        ("distance:8kpc", "not a finite number"),
    ],
)
def test_refused(text, match):
    with pytest.raises(InputError, match=match):
        parse_rule(text)
