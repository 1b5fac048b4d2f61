"""Every row of ``data/published`` recomputed; sources and tolerances stand in the tables, computations in verify."""

from importlib import import_module

import pytest

from lensrate.verify.engine import GROUPS, check, rows_of

TABLES = [group for group in GROUPS if group != "files"]
STATES = {"id", "quantity", "unit", "source", "status", "used_in_tuning", "group"}
MAY = {"published", "low", "high", "error", "tolerance", "slack", "sigmas", "note", "expected_to_differ", "why"}


def compute_of(group):
    return import_module(f"lensrate.verify.{group}").COMPUTE


def parameters():
    for group in TABLES:
        for row in rows_of(group):
            marks = []
            if row.get("expected_to_differ"):
                marks = [pytest.mark.xfail(strict=True, raises=AssertionError, reason=row["why"])]
            yield pytest.param(row, marks=marks, id=f"{group}-{row['id']}")


@pytest.mark.parametrize("row", list(parameters()))
def test_value(row):
    result = check(row, compute_of(row["group"])[row["id"]])
    assert result.agrees, f"{result.computed} is outside {result.accepted}: {result.note}"


@pytest.mark.parametrize("group", TABLES)
def test_table_and_functions_agree(group):
    rows = rows_of(group)
    ids = [row["id"] for row in rows]
    assert sorted(ids) == sorted(compute_of(group))
    for row in rows:
        assert STATES <= set(row) <= STATES | MAY, row["id"]
        assert row["group"] == group
        assert row["status"] in ("seen", "memory", "computed")
        assert ("published" in row) != ("low" in row and "high" in row), row["id"]
        assert {"tolerance", "sigmas", "slack"} & set(row), row["id"]
        assert bool(row.get("expected_to_differ")) == bool(row.get("why")), row["id"]
        assert "sigmas" not in row or "error" in row, row["id"]
        assert all(str(text).isascii() for text in row.values()), row["id"]


def test_ids_are_unique():
    ids = [row["id"] for group in TABLES for row in rows_of(group)]
    assert len(ids) == len(set(ids))


def test_bands_are_the_surveys_own_laws():
    # OGLE-IV: Mroz+ 2019 (memory); MOA-II: Nunota+ 2025 (seen); amplitude at |b| = 3 and e-folds per degree
    from math import exp, pi

    laws = {"tau": ((1.36e-6, 0.39), (1.75e-6, 0.34)), "rate": ((13.4e-6, 0.49), (16.08e-6, 0.44))}
    rows = {row["id"]: row for row in rows_of("surveys")}
    for side in ("south", "north"):
        for b in (1.5, 2, 3, 4, 5, 6):
            both = {name: [a * exp(k * (3 - b)) for a, k in pair] for name, pair in laws.items()}
            both["t_E"] = [2 / pi * tau / rate * 365.25 for tau, rate in zip(both["tau"], both["rate"])]
            for name, edges in both.items():
                row = rows[f"{name}_{side}_{b:g}"]
                assert (row["low"], row["high"]) == pytest.approx((min(edges), max(edges)), rel=1e-3)
                assert row["slack"] == (0.20 if name == "t_E" else 0.15)
        for name, pair in laws.items():
            row = rows[f"{name}_{side}_slope"]
            assert (row["low"], row["high"]) == (min(k for _, k in pair), max(k for _, k in pair))
