"""A posterior averaged over a family of assumptions."""

import numpy as np
import pytest
from mocks import draw_table

from lensrate import Family, InputError
from lensrate.events.observed import Sample
from lensrate.inference.constrain import constrain


def test_averaged_over_a_family(kicked, tmp_path):
    """Shares of the cases are weights times evidences; weights of nothing leave the base alone."""
    sample = Sample.from_table(draw_table(kicked, 5))
    alternative = {"kicks": "hobbs2005", "source": "test"}
    family = {"axis": {"law": {"base_weight": 0.8, "alternatives": [{**alternative, "weight": 0.2}]}}}
    asked = {"forecast": kicked, "points": 9, "counts": "shape"}
    alone = constrain(sample, ["neutron_stars"], **asked)
    other = constrain(sample, ["neutron_stars"], scenario=kicked.scenario.replace(kicks="hobbs2005"), **asked)
    both = constrain(sample, ["neutron_stars"], family=Family.from_dict(family), **asked)
    odds = 4 * np.exp(alone.ln_evidence - other.ln_evidence)
    assert both.cases["base"] == pytest.approx(odds / (1 + odds), rel=1e-9)
    assert both.made["galaxies_prior"] == pytest.approx({"base": 0.8, "law: hobbs2005": 0.2})
    np.testing.assert_allclose(
        both.weight, both.cases["base"] * alone.weight + (1 - both.cases["base"]) * other.weight, rtol=1e-9
    )
    family["axis"]["law"]["base_weight"], family["axis"]["law"]["alternatives"][0]["weight"] = 1.0, 0.0
    sure = constrain(sample, ["neutron_stars"], family=Family.from_dict(family), **asked)
    np.testing.assert_allclose(sure.weight, alone.weight, rtol=1e-12)
    even = constrain(sample, ["neutron_stars"], family="kicks", axes=["bh_kicks"], **asked)
    assert len(set(even.made["galaxies_prior"].values())) == 1 and even.made["family_weights"] == "even"
    for wrong, word in (({"axes": ["kicks"]}, "none is given"), ({"family": "default"}, "choose axes"),
                        ({"family": "kicks", "galaxies": ["default"]}, "both given"),
                        ({"family": "kicks", "axes": ["kick"]}, "did you mean 'kicks'")):  # fmt: skip
        with pytest.raises(InputError, match=word):
            constrain(sample, ["neutron_stars"], **asked, **wrong)
    with pytest.raises(InputError, match="without kick_bins"):
        constrain(sample, ["kick_bins"], family="kicks", **asked)
