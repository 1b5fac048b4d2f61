"""How well the Gaussians of a cell stand for the tracers: rate and tails of t_E, summed over a kick law.

    python tests/benchmarks/bench_closure.py [tracers per component] [fields]

Three components are followed with kicks drawn from a law; wherever a tracer passes a place on one of five sightlines
its velocity is noted. The relative motion to bulge-like sources of 8.2 kpc then gives the rate (mean speed) and the
distribution of t_E at that place, once from the tracers themselves and once from the shipped fields' Gaussians.
Both fill the same ball around the place. None of the sightlines was used when the rule for the Gaussians was chosen:
the fourth moment that it fits was, at (2, -2), (-4, 3), (8, -4), (0.5, 2) and (-1.5, -5).
The table ends with what each sightline sees: the means over places and components, weighted as their neutron stars
contribute to the rate.
"""

import sys

import numba
import numpy as np

from lensrate.galaxy import Galaxy
from lensrate.galaxy.density import stellar_mass
from lensrate.galaxy.potential import Potential
from lensrate.kernels.orbits import PX, PY, PZ, ROWS, TIME, WEIGHT, load, take_steps
from lensrate.kernels.potential import LANES
from lensrate.remnants.births import draw, window
from lensrate.remnants.equilibrium import solve
from lensrate.remnants.kicked import read_field
from lensrate.remnants.kicks import parse_kick
from lensrate.remnants.orbits import states_energies, step
from lensrate.units import KMS_PER_MASYR_KPC

SIGHTLINES = [(3.0, -3.0), (-2.5, -2.5), (6.0, 3.0), (-7.0, -2.0), (1.0, 4.5)]
DISTANCES = (4.0, 6.0, 7.0, 8.2)
WIDTHS = (3.0, 1.5, 1.1, 0.9)  # kpc of the sightline that a distance stands for
COMPONENTS = ("thin_disc", "thick_disc", "bulge")  # of the thin disc its oldest part
LAW = "igoshev2020"
RADIUS = 0.2  # kpc around a place
SOURCE = 110.0  # km/s, dispersion of the sources per axis, at 8.2 kpc
BALL = 100  # points at which the fields are read there
FAR = 8.5  # kpc, distance of the sources in the geometry of the rate
DRAWS = 8  # source velocities per note


@numba.njit(error_model="numpy")
def notes(kinds, pars, omega, ds, states, young, old, growth, places, radius, out):
    """Follow tracers and note weight and velocity near any image of a place; returns how many notes were made."""
    s = np.zeros(ROWS * LANES)
    n = 0
    for first in range(0, states.shape[0], LANES):
        used = load(states, first, s)
        running = True
        while running:
            take_steps(kinds, pars, omega, ds, s, 4)
            running = False
            for i in range(used):
                age = s[TIME + i]
                if age >= old:
                    continue
                running = True
                if age < young:
                    continue
                x, y, z = s[i], s[LANES + i], s[2 * LANES + i]
                for p in range(places.shape[0]):
                    for turn in (1.0, -1.0):
                        dx, dy = turn * x - places[p, 0], turn * y - places[p, 1]
                        if dx * dx + dy * dy > radius * radius:
                            continue
                        for up in (1.0, -1.0):
                            dz = up * z - places[p, 2]
                            if dx * dx + dy * dy + dz * dz < radius * radius and n < out.shape[0]:
                                out[n, 0] = p
                                out[n, 1] = np.exp(growth * age) / s[WEIGHT + i]
                                out[n, 2] = turn * s[PX + i]
                                out[n, 3] = turn * s[PY + i]
                                out[n, 4] = up * s[PZ + i]
                                n += 1
    return n


def speeds(velocity, weight, line, D, rng):
    """Relative proper motion [mas/yr] and rate weight of lenses seen against the sources."""
    mu = (velocity - line.v_sun) @ line.axes[1:].T / (KMS_PER_MASYR_KPC * D)
    source = rng.normal(scale=SOURCE / (KMS_PER_MASYR_KPC * 8.2), size=mu.shape)
    source -= (line.axes[1:] @ line.v_sun) / (KMS_PER_MASYR_KPC * 8.2)
    speed = np.hypot(*(mu - source).T)
    return speed, weight * speed


def from_field(field, component, shares, point, n, rng):
    """Velocities drawn from the fields' Gaussians around a place, kick bins weighted by a law, and the density."""
    import astropy.units as u

    ball = rng.normal(size=(BALL, 3))
    ball *= RADIUS * rng.uniform(size=(BALL, 1)) ** (1 / 3) / np.linalg.norm(ball, axis=1)[:, None]
    rho, mean, tensor = (q.value for q in field.rows(*((point + ball).T * u.kpc)))
    per_element = len(rho) // field.n_elements
    first = field.element(component, 0)
    rows = slice(per_element * first, per_element * (first + len(shares)))
    weight = np.repeat(shares, per_element)[:, None] * rho[rows]
    mean, tensor = mean[rows][weight > 0], tensor[rows][weight > 0]
    chosen = rng.choice(len(mean), size=n, p=weight[weight > 0] / weight.sum())
    root = np.linalg.cholesky(tensor[:, [0, 3, 4, 3, 1, 5, 4, 5, 2]].reshape(-1, 3, 3))
    drawn = mean[chosen] + np.einsum("nij,nj->ni", root[chosen], rng.normal(size=(n, 3)))
    return drawn, weight.sum() / BALL


def tails(speed, rate):
    """Speeds at which 5 and 95 per cent of the events lie: the long and the short tail of t_E."""
    order = np.argsort(speed)
    cumulative = np.cumsum(rate[order]) / rate.sum()
    return np.interp([0.05, 0.95], cumulative, speed[order])


def main(tracers=400_000, fields="default"):
    rng = np.random.default_rng(20261201)
    galaxy, potential, field = Galaxy.read("default"), Potential.read("default"), read_field(fields)
    felt, law = potential.for_orbits(), parse_kick(LAW)
    weights = law.bin_weights(field.kick_edges)
    shares = np.concatenate([[weights.unkicked], weights.inside])
    lines = [galaxy.sightline(*np.radians(s)) for s in SIGHTLINES]
    points = np.array([line.xyz(D) for line in lines for D in DISTANCES])
    places = np.ascontiguousarray(felt.to_bar_frame(points))
    kinds, pars = felt.packed
    print(f"{tracers} tracers a component, law {LAW}, fields {fields}; errors of Gaussians against tracers in per cent")
    print("component        l     b    D   notes   rate  +-   long 5 %  short 5 %")
    summary = []
    for component in {c.name: c for c in galaxy.components if c.name in COMPONENTS}.values():
        name = component.element
        mass = stellar_mass(component.density, galaxy.R0)
        equilibrium = solve(component, galaxy, felt, rng, jobs=2)
        ages = window(component)
        kept = []
        for _ in range(max(1, tracers // 50_000)):
            rows = draw(equilibrium, min(tracers, 50_000), rng)
            direction = rng.normal(size=(len(rows), 3))
            speed = law.sample(len(rows), rng)
            rows[:, 3:] += direction * (speed / np.linalg.norm(direction, axis=1))[:, None]
            energy = states_energies(felt, rows)[:, 0]
            rows = np.ascontiguousarray(rows[np.argsort(energy)][: np.count_nonzero(energy < 0)])
            out = np.empty((2_000_000, 5))
            n = notes(kinds, pars, felt.omega, step(0.15), rows, ages.young, ages.old, ages.growth, places, RADIUS, out)
            kept.append(out[:n].copy())
        kept = np.concatenate(kept)
        for p in range(len(points)):
            line, D = lines[p // len(DISTANCES)], DISTANCES[p % len(DISTANCES)]
            mine = kept[kept[:, 0] == p]
            if len(mine) < 2000:
                continue
            velocity = felt.from_bar_frame(np.repeat(mine[:, 2:], DRAWS, axis=0))
            a, ra = speeds(velocity, np.repeat(mine[:, 1], DRAWS), line, D, rng)
            drawn, density = from_field(field, name, shares, points[p], 400_000, rng)
            b, rb = speeds(drawn, np.ones(len(drawn)), line, D, rng)
            rate = rb.mean() / (ra.sum() / np.repeat(mine[:, 1], DRAWS).sum()) - 1
            noise = np.std(a) / np.mean(a) / np.sqrt(len(mine))
            low, high = tails(a, ra)
            long = rb[b < low].sum() / rb.sum() / 0.05 - 1
            short = rb[b > high].sum() / rb.sum() / 0.05 - 1
            lensing = WIDTHS[p % len(DISTANCES)] * D**2 * np.sqrt(max(1 / D - 1 / FAR, 0.0)) * rb.mean()
            summary.append((p // len(DISTANCES), mass * density * lensing, rate, long, short))
            l, b_ = SIGHTLINES[p // len(DISTANCES)]
            where = f"{name:15s} {l:5.1f} {b_:5.1f} {D:4.1f} {len(mine):7d}"
            print(f"{where} {100 * rate:6.2f} {100 * noise:4.2f} {100 * long:8.1f} {100 * short:9.1f}")
    table = np.array(summary)
    print("by sightline:    l     b                 rate       long 5 %  short 5 %")
    for i, (l, b_) in enumerate(SIGHTLINES):
        rows = table[table[:, 0] == i]
        rate, long, short = 100 * np.average(rows[:, 2:], axis=0, weights=rows[:, 1])
        print(f"              {l:5.1f} {b_:5.1f}               {rate:6.2f}      {long:8.1f} {short:9.1f}")


if __name__ == "__main__":
    main(*(int(a) if a.isdigit() else a for a in sys.argv[1:]))
