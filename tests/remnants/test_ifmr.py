"""Initial-final mass relations: chances, masses, joins and boundaries."""

import numpy as np
import pytest

from lensrate.errors import InputError
from lensrate.remnants.ifmr import DEAD, Ifmr

MASSES = np.unique(np.concatenate([np.geomspace(0.8, 119, 300), [7.999, 8, 8.999, 9, 25, 45, 60]]))


@pytest.mark.parametrize("name", Ifmr.names())
def test_contract(name):
    relation = Ifmr.read(name)
    outcomes = relation.outcomes(MASSES)
    assert [o.name for o in outcomes] == list(DEAD)
    np.testing.assert_allclose(sum(o.probability for o in outcomes), 1, rtol=1e-14)
    for o in outcomes:
        assert o.weight.sum() == pytest.approx(1, rel=1e-12)
        used = o.probability > 0
        assert np.all(o.mass[used] > 0.4)
        assert np.all(o.mass[used] @ o.weight < MASSES[used])  # nothing grows by dying
    assert np.all(outcomes[0].probability[MASSES < relation.white_dwarf_below] == 1)
    assert relation.references


def test_default_values():
    dwarf, neutron, hole = Ifmr.read("default").outcomes([1.0, 20.0, 30.0])
    assert (dwarf.mass @ dwarf.weight)[0] == pytest.approx(0.569)
    assert neutron.probability.tolist() == [0, 1, 0] and np.all(neutron.mass == 1.4)
    mean = hole.mass[2] @ hole.weight
    assert mean == pytest.approx(7.8)
    assert np.sqrt((hole.mass[2] - mean) ** 2 @ hole.weight) == pytest.approx(1.2)


def joins(name, which):
    """Jumps of the mean mass where one law hands over to the next."""
    laws = dict(Ifmr.read(name).laws)[which]
    return {b.start: float(b.mean(np.array(b.start)) - a.mean(np.array(b.start))) for a, b in zip(laws, laws[1:])}


def test_pieces_join():
    assert all(abs(jump) < 0.002 for jump in joins("default", "white_dwarf").values())
    # the printed forms, from memory, do not join: the file says by how much
    neutron = joins("raithel2018", "neutron_star")
    jumps = [neutron[mass] for mass in (13.0, 15.0, 17.8)]
    np.testing.assert_allclose(jumps, [-0.096, -0.231, 0.080], atol=0.001)
    assert joins("raithel2018", "black_hole")[45.0] == pytest.approx(-4.22, abs=0.01)


def test_islands():
    neutron, hole = Ifmr.read("raithel2018").outcomes([14, 16, 18, 20, 23, 26, 40, 100.0])[1:]
    assert neutron.probability.tolist() == [1, 0.679, 0.833, 0.5, 0, 0.652, 0, 0.4]
    assert np.allclose(hole.probability, 1 - neutron.probability)
    scattered = neutron.mass[3]
    assert scattered @ neutron.weight == pytest.approx(1.60)
    assert np.sqrt((scattered - 1.60) ** 2 @ neutron.weight) == pytest.approx(0.158)
    assert np.all(np.abs(neutron.mass[5] - 1.696) < 0.001)


def test_boundaries_can_be_moved():
    moved = Ifmr.read("default").with_boundaries(star_above=0.075, white_dwarf_below=9, black_hole_above=20)
    chance = {o.name: o.probability.tolist() for o in moved.outcomes([8.5, 15, 22])}
    assert chance == {"white_dwarf": [1, 0, 0], "neutron_star": [0, 1, 0], "black_hole": [0, 0, 1]}
    with pytest.raises(InputError, match="by turns"):
        Ifmr.read("raithel2018").with_boundaries(black_hole_above=20)
    with pytest.raises(InputError, match="must be positive and rise"):
        Ifmr.read("default").with_boundaries(white_dwarf_below=30)


OWN = """
reference = "me"
star_above = 0.08
white_dwarf_below = 8
black_hole_above = 25
[[white_dwarf]]
coefficients = [0.6]
[[neutron_star]]
coefficients = [1.4]
[[black_hole]]
coefficients = [7.0]
"""


@pytest.mark.parametrize(
    "old, new, match",
    [
        ("[0.6]", "[0.6]\nscater = 0.1", "did you mean 'scatter'"),
        ("black_hole_above = 25", "", "either black_hole_above"),
        ("star_above = 0.08", "star_above = 0.08\nwhite_dwarfs_below = 7", "did you mean 'white_dwarf_below'"),
        ("[1.4]", "[nan]", "nan is not a finite number"),
        ("[1.4]", "[true]", "not a finite number"),
        ("star_above = 0.08", 'star_above = {value = 0.08, unit = "kpc"}', "cannot be converted"),
        ("star_above = 0.08", "star_above = -1", "at least 0"),
        ("[0.6]", "[0.6]\nfrom = 3\n[[white_dwarf]]\ncoefficients = [1.0]\nfrom = 2", "must rise"),
    ],
)
def test_own_file_is_checked(tmp_path, old, new, match):
    path = tmp_path / "own.toml"
    path.write_text(OWN)
    assert Ifmr.read(str(path)).outcomes(20)[1].mass[0, 0] == 1.4
    path.write_text(OWN.replace(old, new))
    with pytest.raises(InputError, match=match):
        Ifmr.read(str(path))


def test_negative_remnant_is_named(tmp_path):
    path = tmp_path / "own.toml"
    path.write_text(OWN.replace("[7.0]", "[-7.0]"))
    with pytest.raises(InputError, match="a black_hole of -7 Msun from a star of 30 Msun"):
        Ifmr.read(str(path)).outcomes([20, 30])
