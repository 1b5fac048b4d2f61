"""Fields: the grid's own error, symmetries, files, and a small synthesis from orbits to densities."""

import threading
from dataclasses import replace

import astropy.units as u
import numpy as np
import pytest
from mocks import Posted

from lensrate.errors import DataFileError, InputError
from lensrate.galaxy.model import Galaxy
from lensrate.galaxy.potential import Potential
from lensrate.kernels.fields import _part
from lensrate.remnants import element
from lensrate.remnants.cells import cells_of
from lensrate.remnants.fields import GRID_ERROR, Grid, RemnantField
from lensrate.remnants.moments import batch_ratios, encode, frames, gaussians
from lensrate.remnants.synthesis import Settings, synthesize

GALAXY = Galaxy.read("default")
POTENTIAL = Potential.read("default")
BY_NAME = {c.element: c for c in GALAXY.components}
GRID = Grid()


def cell_masses(density, grid, nodes=6):
    """Share of a component's mass in each cell, by Gauss-Legendre."""
    x, w = np.polynomial.legendre.leggauss(nodes)

    def spread(edges):
        half = 0.5 * np.diff(edges)[:, None]
        return (edges[:-1, None] + half * (1 + x)).ravel(), (half * w).ravel()

    (R, wr), (z, wz), (phi, wp) = (spread(e) for e in (*grid.edges(), np.linspace(0, np.pi, grid.n_phi + 1)))
    R, z, phi = np.meshgrid(R, z, phi, indexing="ij")
    points = POTENTIAL.from_bar_frame(np.stack([R * np.cos(phi), R * np.sin(phi), z], axis=-1).reshape(-1, 3))
    mass = density.at(*points.T, GALAXY.R0).reshape(R.shape) * R * wr[:, None, None] * wz[:, None] * wp
    return 4 * mass.reshape(grid.n_R, nodes, grid.n_z, nodes, grid.n_phi, nodes).sum(axis=(1, 3, 5))


def gaussian_field(name):
    """A field of known density and of one Gaussian everywhere, drawn as several that are alike."""
    mass = cell_masses(BY_NAME[name].density, GRID) / cells_of(BY_NAME[name], GALAXY, POTENTIAL).mass
    mean, tensor = np.array([5.0, 150.0, -3.0]), np.array([60.0**2, 50.0**2, 40.0**2, 900.0, -300.0, 200.0])
    pairs = [mean[0] ** 2, mean[1] ** 2, mean[2] ** 2, mean[0] * mean[1], mean[0] * mean[2], mean[1] * mean[2]]
    moments = np.concatenate([[1.0], mean, tensor + pairs])
    inner = (np.arange(GRID.n_R) < GRID.n_four)[:, None, None]
    parts = np.where(inner, 0.25, np.array([0.5, 0.0, 0.5, 0.0]).reshape(4, 1, 1, 1))
    return as_field(name, *encode((parts * mass)[..., None] * moments * 1e6, 1e-6, GRID)), mean, tensor


def as_field(name, ln_rho, four, two):
    """A field of one element."""
    blocks = np.full((1, 1, 2, GRID.n_R // 2, GRID.n_z // 2, GRID.n_phi // 2), 1000, dtype=np.int16)
    ends = {k: np.zeros((1, 1)) for k in ("escaped", "beyond_20_kpc", "outside_grid")}
    edges = np.array([0.0, 1.0, np.inf])
    return RemnantField(
        (name,), np.array([0.0]), GRID, ln_rho[None, None], four[None, None], two[None, None], blocks, ends,
        np.zeros((1, 1, 2)), edges, np.radians(27), {}, {"seed": 1},
    )


def whole_moments(field, place, element=0):
    """Mean velocity and dispersion tensor of an element's Gaussians together."""
    rho, v, c = (q.value[4 * element : 4 * element + 4, 0] for q in field.rows(*(np.array([q]) * u.kpc for q in place)))
    second = c[:, [0, 3, 4, 3, 1, 5, 4, 5, 2]].reshape(4, 3, 3) + v[:, :, None] * v[:, None]
    mean = rho @ v / rho.sum()
    return mean, np.tensordot(rho, second, 1) / rho.sum() - np.outer(mean, mean)


def test_volumes_fill_the_cylinder():
    assert GRID.volumes().sum() * GRID.n_phi == pytest.approx(np.pi * 20**2 * 12, rel=1e-12)


@pytest.mark.parametrize("name, worst", [("thick_disc", 0.01), ("thin_disc_old", 0.015), ("bulge", 0.02)])
def test_the_grid_itself_errs_by_less_than_a_per_cent(name, worst):
    field, _, _ = gaussian_field(name)
    mass = cells_of(BY_NAME[name], GALAXY, POTENTIAL).mass
    for l, b in ((1.0, -3.0), (0.0, -1.5), (5.0, 4.0), (0.5, -6.0)):
        line = GALAXY.sightline(np.radians(l), np.radians(b))
        D = np.linspace(4.5, 11.0, 400)
        x, y, z = line.xyz(D)
        truth = BY_NAME[name].density.at(x, y, z, GALAXY.R0) / mass
        found = field.density(name, [1.0], x * u.kpc, y * u.kpc, z * u.kpc).value
        assert found.sum() == pytest.approx(truth.sum(), rel=GRID_ERROR)
        assert found == pytest.approx(truth, rel=worst)


def test_velocities_come_back_and_fold_by_the_exact_symmetries():
    field, mean, tensor = gaussian_field("thick_disc")
    # at the Sun's side, y = 0: outward is -x, along the rotation is +y
    rho, v, c = field.rows([-8.0, -8.0, 8.0, -1.5] * u.kpc, [0.0, 0.0, 0.0, 0.0] * u.kpc, [0.5, -0.5, 0.5, 0.5] * u.kpc)
    v, c = v.value, c.value
    assert v[0, 0] == pytest.approx([-mean[0], mean[1], mean[2]], abs=0.2)
    assert v[0, 1] == pytest.approx([-mean[0], mean[1], -mean[2]], abs=0.2)
    assert v[0, 2] == pytest.approx([mean[0], -mean[1], mean[2]], abs=0.2)
    rr, tt, zz, rt, rz, tz = tensor
    assert c[0, 0] == pytest.approx([rr, tt, zz, -rt, -rz, tz], abs=60)
    assert c[0, 1] == pytest.approx([rr, tt, zz, -rt, rz, -tz], abs=60)
    assert c[0, 2] == pytest.approx([rr, tt, zz, -rt, rz, -tz], abs=60)
    assert np.all(rho.value[[1, 3], :3] == 0) and np.all(rho.value[2, :3] == rho.value[0, :3])
    assert rho.value[:, 3] == pytest.approx(np.full(4, rho.value[0, 3]), rel=1e-9)
    outside = field.rows([25.0] * u.kpc, [0.0] * u.kpc, [0.0] * u.kpc)[0]
    assert np.all(outside.value == 0)


def test_profile_agrees_with_rows():
    field, _, _ = gaussian_field("thick_disc")
    line = GALAXY.sightline(np.radians(5.0), np.radians(-2.0))
    D = np.array([1.0, 6.0])
    x, y, z = line.xyz(D)
    rho, v, c = (q.value for q in field.rows(x * u.kpc, y * u.kpc, z * u.kpc))
    profile = field.profile(line, D)
    assert profile[0] == pytest.approx(rho, rel=1e-12)
    k = 4.740470463533349  # km/s per mas/yr and kpc: astronomical unit over a Julian year (IAU 2012 B2)
    mu = (v[0] - line.v_sun) @ line.axes[1:].T / (k * D[:, None])
    assert profile[1:3, 0].T == pytest.approx(mu, rel=1e-9)
    xx, yy, zz, xy, xz, yz = c[0, 1]
    tensor = np.array([[xx, xy, xz], [xy, yy, yz], [xz, yz, zz]])
    assert profile[3, 0, 1] == pytest.approx(line.axes[1] @ tensor @ line.axes[1] / (k * D[1]) ** 2, rel=1e-9)


def test_rare_cells_borrow_from_their_ring():
    sums = np.zeros((GRID.n_R, GRID.n_z, GRID.n_phi, 10))
    moments = np.array([1.0, 10, 150, 0, 100 + 2500, 150**2 + 1600, 900, 1500, 0, 0])
    sums[10, 3] = 1e4 * moments
    sums[10, 3, 5] = moments * 1e-3
    numbers = gaussians(sums[None], GRID)[0]
    assert numbers[10, 3, 5] == pytest.approx([1, 10, 150, 0, 50, 40, 30, 0, 0, 0], abs=0.1)
    assert np.all(np.isfinite(numbers)) and np.all(numbers[..., 4:7] > 0)


def ball_deposits(rng, n, power, scale):
    """Velocities with density r^power exp(-r^2 / 2), the same in every cell, divided as orbits are."""
    direction = rng.normal(size=(n, 3))
    r = np.sqrt(2 * rng.gamma(0.5 * (3 + power), size=n))
    v = direction / np.linalg.norm(direction, axis=1)[:, None] * r[:, None] * scale + [10.0, 80.0, 0.0]
    products = [v[:, a] * v[:, b] for a, b in ((0, 0), (1, 1), (2, 2), (0, 1), (0, 2), (1, 2))]
    rows = np.column_stack([np.ones(n), v, *products])
    frame = frames(np.tile(rows.sum(axis=0), (GRID.n_R, GRID.n_z, GRID.n_phi, 1)), GRID)
    x = (v - frame[0, 0, 0, :3]) * frame[0, 0, 0, 3:]
    part = np.array([_part.py_func(True, *row) for row in x])
    sums = np.zeros((4, GRID.n_R, GRID.n_z, GRID.n_phi, 10))
    sums[:] = np.array([rows[part == i].sum(axis=0) for i in range(4)])[:, None, None, None]
    fourth = np.full(sums.shape[1:4], np.sum(np.sum(x**2, axis=1) ** 2))
    return v, part, sums, frame, fourth


@pytest.mark.parametrize("power", [0, 2])
def test_four_gaussians_keep_the_second_and_fit_the_fourth_moments(power):
    rng = np.random.default_rng(8)
    v, part, sums, frame, fourth = ball_deposits(rng, 40_000, power, 60.0)
    assert np.bincount(part) / part.size == pytest.approx(np.full(4, 0.25), abs=0.01)  # equal cones
    share, m, s, c = np.split(gaussians(sums, GRID, frame, fourth)[:, 3, 3, 3], (1, 4, 7), axis=1)
    pairs = c[:, [0, 0, 1, 0, 0, 2, 1, 2, 0]].reshape(4, 3, 3)
    tensor = s[:, :, None] * s[:, None] * np.where(np.eye(3) == 1, 1.0, pairs)
    mean = np.sum(share * m, axis=0)
    second = np.sum(share[..., None] * (tensor + (m - mean)[:, :, None] * (m - mean)[:, None]), axis=0)
    assert mean == pytest.approx(v.mean(axis=0), abs=0.1)
    assert second == pytest.approx(np.cov(v.T), abs=0.005 * second[0, 0])
    drawn = np.concatenate(
        [rng.multivariate_normal(a, t, round(100_000 * w)) for a, t, w in zip(m, tensor, share[:, 0])]
    )
    # <r^4> / <r^2>^2 is 5 / 3 for a Gaussian, and 35 / 5^2 for r^2 exp(-r^2 / 2), whose r^2 is a chi square of five
    square = np.sum((drawn - mean) ** 2, axis=1)
    wanted = {0: 5 / 3, 2: 1.4}[power]
    assert np.mean(square**2) / np.mean(square) ** 2 == pytest.approx(wanted, rel=0.02)


def test_cells_with_four_and_two_gaussians_agree_on_second_moments_everywhere():
    v, _, sums, frame, fourth = ball_deposits(np.random.default_rng(8), 40_000, 2, 60.0)
    sums[0, GRID.n_four :] += sums[1, GRID.n_four :]
    sums[2, GRID.n_four :] += sums[3, GRID.n_four :]
    sums[1::2, GRID.n_four :] = 0.0
    field = as_field("ball", *encode(sums, 1e-9, GRID, frame, fourth))
    border = GRID.edges()[0][GRID.n_four]
    # at the middle of four, across the border to two, in the plane where each cell meets its mirror image, and below it
    for place in ([-1.0, 0, 0.5], [-border, 0, 0.5], [-3.0, 0, 0.5], [-1.0, 0, 0.0], [-1.0, 0, 0.005], [-1.0, 0, -0.5]):
        mean, tensor = whole_moments(field, place)
        assert mean == pytest.approx([-10, 80, 0], abs=1)
        assert tensor == pytest.approx(np.cov(v.T) * np.outer([-1, 1, 1], [-1, 1, 1]), abs=0.015 * 6000)


def test_batches_measure_the_scatter():
    counts = np.random.default_rng(1).poisson(50.0, (8, GRID.n_R, GRID.n_z, GRID.n_phi)).astype(float)
    ratio = batch_ratios(counts) / 1000
    assert ratio.mean(axis=0) == pytest.approx(np.ones(ratio.shape[1:]), abs=1e-3)
    assert np.sqrt(np.mean(np.var(ratio, axis=0, ddof=1))) == pytest.approx(1 / np.sqrt(400), rel=0.03)


def test_file_round_trip(tmp_path):
    field, _, _ = gaussian_field("bulge")
    path = field.write(tmp_path / "field.fits")
    again = RemnantField.read(path)
    for name in ("ln_rho", "four", "two", "batches", "heights", "kick_edges", "height_edges"):
        assert np.array_equal(getattr(field, name), getattr(again, name))
    assert again.components == ("bulge",) and again.provenance == {"seed": 1} and again.grid == GRID
    with pytest.raises(InputError, match="exists"):
        field.write(path)


def test_damaged_and_foreign_files_are_named(tmp_path):
    from astropy.io import fits

    field, _, _ = gaussian_field("bulge")
    path = field.write(tmp_path / "field.fits")
    whole = path.read_bytes()
    for at in (len(whole) // 3, len(whole) // 2):
        path.write_bytes(whole[:at] + bytes([whole[at] ^ 0x55]) + whole[at + 1 :])
        with pytest.raises(DataFileError, match=r"field\.fits: damaged"):
            RemnantField.read(path)
    path.write_bytes(whole[: len(whole) // 2])
    with pytest.raises(DataFileError, match=r"field\.fits: damaged"):
        RemnantField.read(path)
    other = tmp_path / "other.fits"
    fits.PrimaryHDU(np.zeros(3)).writeto(other)
    with pytest.raises(DataFileError, match=r"other\.fits: not a file"):
        RemnantField.read(other)
    with pytest.raises(DataFileError, match="no such file"):
        RemnantField.read(tmp_path / "none.fits")


SMALL = Settings(tracers=1024, bundles=128, iterations=100, kick_edges=(0, 40, 250, 1500), seed=3)
THICK = GALAXY.replace(components=(BY_NAME["thick_disc"],))


@pytest.fixture(scope="module")
def small():
    return synthesize(THICK, POTENTIAL, SMALL)


def test_synthesis_does_not_depend_on_threads_and_resumes(small, tmp_path):
    again = synthesize(THICK, POTENTIAL, SMALL, jobs=2, checkpoint=tmp_path)
    resumed = synthesize(THICK, POTENTIAL, SMALL, checkpoint=tmp_path)
    for other in (again, resumed):
        for name in ("ln_rho", "four", "two", "batches", "heights"):
            assert np.array_equal(getattr(small, name), getattr(other, name))
    assert len(list(tmp_path.glob("*/*.npz"))) == 5  # four elements and their equilibrium
    assert resumed.mismatch == small.mismatch
    other = synthesize(THICK, POTENTIAL, replace(SMALL, seed=4), checkpoint=tmp_path)
    assert not np.array_equal(small.ln_rho, other.ln_rho)


def test_a_synthesis_can_be_sent_elsewhere(tmp_path):
    tiny = Settings(tracers=256, batches=2, kick_edges=(0.0, 100.0), bundles=64, iterations=5, eta=0.5)
    here = synthesize(THICK, POTENTIAL, tiny)
    there = synthesize(THICK, POTENTIAL, tiny, executor=Posted(), checkpoint=tmp_path, progress=lambda *_: None)
    assert np.array_equal(here.ln_rho, there.ln_rho) and np.array_equal(here.four, there.four)


def test_an_element_left_at_any_block_goes_on_to_the_same_result(monkeypatch):
    monkeypatch.setattr(element, "_BLOCK", 128)
    monkeypatch.setattr(element, "_KEEP_EVERY", -1.0)
    settings, kept, leave = replace(SMALL, tracers=1024, kick_edges=(0.0, 50.0)), [], threading.Event()

    def keep(done):
        kept.append({k: v.copy() for k, v in done.items()})
        if len(kept) == leave_after:
            leave.set()

    def make(part=None):
        stream = np.random.SeedSequence(7)
        return element.element(BY_NAME["nuclear_disc"], None, 1, stream, GALAXY, POTENTIAL, settings, leave, part)

    leave_after = 0
    whole = make()
    # in the pilot run, at the end of a batch, within a batch
    for leave_after in (1, 3, 4):
        kept.clear()
        leave.clear()
        with pytest.raises(KeyboardInterrupt):
            make((lambda: None, keep))
        leave.clear()
        again = make((lambda last=kept[-1]: last, lambda done: None))
        assert len(kept) == leave_after and all(np.array_equal(whole[k], again[k]) for k in whole)


def test_unkicked_tracers_stay_where_the_stars_are(small):
    regions = small.mismatch["thick_disc"]["regions"]
    assert set(regions) >= {"6<R<10,|z|<0.8", "R<10,0.8<|z|<3"}
    for name in ("3<R<6,|z|<0.8", "6<R<10,|z|<0.8", "R<10,0.8<|z|<3"):
        assert regions[name] == pytest.approx(1, abs=0.1)
    assert small.ends["outside_grid"][0, 0] < 0.05
    # Bensby+ 2003 (seen): lag 46 km/s, dispersions 67, 38, 35 km/s; only the density was asked of the weights
    v, c = whole_moments(small, [-8.2, 0.0, 0.2])
    assert v[1] == pytest.approx(233 - 46, abs=15) and abs(v[0]) < 20
    assert np.sqrt(c[0, 0]) == pytest.approx(67, rel=0.2)
    assert np.sqrt(c[2, 2]) == pytest.approx(35, rel=0.2)


def test_kicks_puff_up_and_expel(small):
    escaped = small.ends["escaped"][0]
    assert escaped[0] == 0 and escaped[1] == 0
    assert escaped[3] > 0.75
    middle = 0.5 * (small.height_edges[1:-1] + np.append(small.height_edges[2:-1], 50.0))
    median = [np.interp(0.5, np.cumsum(h[1:]) / h[1:].sum(), middle) for h in small.heights[0, :3]]
    assert median[0] < median[1] < median[2]
    # exponential height 0.9 kpc: half the stars lie below 0.9 ln 2
    assert median[0] == pytest.approx(0.9 * np.log(2), rel=0.2)


def test_escape_against_kicks_in_closed_form(small):
    # a kick at the Sun needs v_esc for escape; averaged over the disc the share lies between those of 4 and 12 kpc
    rng = np.random.default_rng(1)
    direction = rng.normal(size=(200_000, 3))
    kick = direction / np.linalg.norm(direction, axis=1)[:, None] * rng.uniform(250, 1500, 200_000)[:, None]
    share = []
    for radius in (1.0, 12.0):
        v = kick + [0, POTENTIAL.circular_speed(radius * u.kpc).value, 0]
        share.append(np.mean(np.linalg.norm(v, axis=1) > POTENTIAL.escape_speed(radius * u.kpc).value))
    assert share[0] < small.ends["escaped"][0, 3] < share[1]


def test_complaints(small):
    with pytest.raises(InputError, match="bar stands at"):
        synthesize(GALAXY, replace(POTENTIAL, bar_angle=20 * u.deg), SMALL)
    with pytest.raises(InputError, match="tracers: 3"):
        Settings(tracers=3)
    with pytest.raises(InputError, match="kick_edges"):
        Settings(kick_edges=(5, 1))
    with pytest.raises(InputError, match="did you mean 'thick_disc'"):
        small.element("thickdisc", 0)
    with pytest.raises(InputError, match="kick_weights"):
        small.density("thick_disc", [1.0], *np.zeros((3, 1)) * u.kpc)
