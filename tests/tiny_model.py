"""A small ensemble and a model fitted to it in seconds, shared by the tests that need one.

Its probabilities are those of two dozen trees on a dozen seas: tests may rely on how they hang
together, never on what they are.
"""

from functools import cache

import numpy as np

from forecaster.datatypes import Record
from forecaster.learning.dataset import joined, member_rows
from forecaster.learning.ensemble import simulate
from forecaster.learning.registry import save_model
from forecaster.learning.train import fit
from forecaster.settings import SeaRecipe, SensorViews, TrainSettings, settings_to_toml
from forecaster.waves.spectrum import jonswap

RECIPE = SeaRecipe(
    engine="dysthe",
    members=12,
    root_seed=5,
    gamma=(1.0, 7.0),
    steepness=(0.03, 0.12),
    settling_periods=(10.0, 20.0),
    duration_periods=240.0,
    after_periods=40.0,
    gauges=9,
    gauge_spacing_wavelengths=2.5,
    sensors=2,
    distances_wavelengths=(0.0, 5.0, 12.5),
    views=SensorViews(
        clean_share=0.5, record_periods=(32.0, 200.0), noise=(0.0, 0.02), decimation=(1, 2)
    ),
)
SETTINGS = TrainSettings(
    root_seed=3, boosting_rounds=24, learning_rate=0.2, leaves=6, samples_per_leaf=20, bags=2,
    rows_per_bag=20_000,
)  # fmt: skip


@cache
def dataset():
    """Rows of all members of `RECIPE`."""
    members = range(RECIPE.members)
    return joined([member_rows(RECIPE, member, simulate(RECIPE, member)) for member in members])


@cache
def model():
    """A model of both criteria, fitted to `dataset`."""
    return fit(dataset(), SETTINGS, name="tiny", version="1")


def saved(folder, **changes):
    """The model written below `folder`; returns its card."""
    rows = dataset()
    options = {
        "probe": rows.features[::40], "names": rows.names, "summary": "for tests", "card": {},
        "settings_toml": settings_to_toml(SETTINGS),
    }  # fmt: skip
    return save_model(model(), folder, **options | changes)


def sea_record(*, hs=3.0, tp=10.0, dt=0.5, n=3600, gamma=3.3, seed=1, **site):
    """A random linear sea at one place: complex Gaussian modes of a JONSWAP spectrum."""
    generator = np.random.default_rng(seed)
    frequency = np.fft.rfftfreq(n, dt)
    inside = (frequency > 0.4 / tp) & (frequency < 2.5 / tp)
    density = np.zeros(frequency.size)
    density[inside] = jonswap(frequency[inside], hs=hs, tp=tp, gamma=gamma)
    parts = generator.standard_normal((2, frequency.size))
    amplitude = np.sqrt(density * frequency[1]) * (parts[0] + 1j * parts[1])
    elevation = np.fft.irfft(amplitude * n / 2, n)
    return Record(elevation, dt, **site)
