"""What a notebook shows: results know how to present themselves as HTML, and draw into axes they are given."""

from pathlib import Path

import astropy.units as u
import matplotlib.pyplot as plt

import lensrate

scenario = lensrate.Scenario.read("default").replace(kicks="none")
forecast = lensrate.sightline(1.0 * u.deg, -3.9 * u.deg, scenario)
Path("forecast.html").write_text(scenario._repr_html_() + forecast._repr_html_())

figure, (left, right) = plt.subplots(1, 2, figsize=(11, 4.5), layout="constrained")
forecast.plot(ax=left)
forecast.plot(ax=right, kind="pi_E")
figure.savefig("notebook.png", dpi=120)
print(forecast.to_pandas()[["rate", "mean_t_E", "share_of_events"]])
