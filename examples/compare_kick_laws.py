"""How the neutron-star events of one sightline change with the natal-kick law: one set of integrals, many laws."""

import time

import astropy.units as u

import lensrate

forecast = lensrate.sightline(1.0 * u.deg, -2.9 * u.deg, sources="limit:I=21", extinction={"I": 1.25})
start = time.perf_counter()
for law in ("hobbs2005", "igoshev2020", "verbunt2017", "disbergmandel2025", "maxwell:100", "none"):
    other = forecast.reforecast(kicks=law)
    star = other.lenses["neutron_star"]
    print(f"{law:18s} rate {1e6 * star.rate:.4f} per million stars and year, median t_E {star.median_t_E:.1f} d")
print(f"six laws in {1e3 * (time.perf_counter() - start):.0f} ms")
ax = forecast.reforecast(kicks="hobbs2005").plot(kind="stacked")
ax.figure.savefig("stacked_hobbs2005.png", dpi=150)
