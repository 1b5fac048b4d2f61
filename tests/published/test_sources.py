"""Source stars and dust against published values; sources and tolerances stand in the table."""

import pytest

from lensrate.datafiles import read_set
from lensrate.verify.sources import COMPUTE

ROWS = read_set("published", "sources")["check"]


@pytest.mark.parametrize("row", ROWS, ids=lambda row: row["id"])
def test_value(row):
    assert COMPUTE[row["id"]]() == pytest.approx(row["published"], rel=0, abs=row["tolerance"])


def test_table_and_functions_agree():
    assert sorted(row["id"] for row in ROWS) == sorted(COMPUTE)
    keys = {"id", "quantity", "published", "tolerance", "unit", "source", "status", "used_in_tuning", "group"}
    assert all(set(row) - {"error"} == keys for row in ROWS)
