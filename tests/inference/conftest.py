"""One field with kick-resolved remnants, forecast once for all tests of inference."""

import pytest
from mocks import survey

from lensrate.inference.templates import Templates
from lensrate.surveys.yields import campaign

DEEP = [{"name": "D", "l": 1.0, "b": -2.9, "area_deg2": 1.0, "limit": "I=20", "extinction": {"I": 1.2},
         "monitored_stars": 1.2e8}]  # fmt: skip


@pytest.fixture(scope="session")
def kicked(tmp_path_factory):
    return campaign(survey(tmp_path_factory.mktemp("deep"), DEEP), "default")


@pytest.fixture(scope="session")
def templates(kicked):
    return Templates.of(kicked)
