"""Synthetic seas that teach and test: recipe -> member -> shard.

Each member draws its sea from its own seed, so the numbers are the same whatever the number of
workers, their order or the machine they run on.
"""

from __future__ import annotations

from functools import partial

import numpy as np

from forecaster.waves.hos import FullyNonlinearSea
from forecaster.waves.linear import GRAVITY
from forecaster.waves.spectrum import jonswap
from forecaster.waves.synthesis import random_surface

PEAK_PERIOD = 10.0  # s; deep-water seas scale, so one period stands for all
BAND = (0.4, 2.5)  # of the peak frequency: what a drawn sea holds
STEPS_PER_SAMPLE = 2  # of the fully nonlinear engine
MODES_PER_WAVELENGTH = 8
RAMP_PERIODS = 8.0


def member_generator(root_seed: int, member: int, *purpose: int) -> np.random.Generator:
    """The random numbers of one member, for one purpose (none: the sea itself)."""
    return np.random.default_rng(np.random.SeedSequence(root_seed, spawn_key=(member, *purpose)))


def draw_sea(recipe, generator) -> dict[str, float]:
    """Parameters of one sea: steepness kp Hs/2, peak enhancement, second system, settling.

    Uniform in steepness, log-uniform in gamma.  With the recipe's probability a second system
    holds part of the energy at a higher peak frequency.
    """
    steepness = generator.uniform(*recipe.steepness)
    gamma = np.exp(generator.uniform(*np.log(recipe.gamma)))
    settling = generator.uniform(*recipe.settling_periods)
    second = generator.uniform() < recipe.second_system_share
    share, ratio = generator.uniform(0.15, 0.5), generator.uniform(1.3, 1.9)
    return {
        "steepness": float(steepness),
        "gamma": float(gamma),
        "settling_periods": float(settling),
        "second_share": float(share) if second else 0.0,
        "second_frequency_ratio": float(ratio) if second else 1.0,
    }


def _density(sea: dict[str, float], hs: float):
    main = partial(jonswap, hs=hs, tp=PEAK_PERIOD, gamma=sea["gamma"])
    if sea["second_share"] == 0:
        return main
    other = partial(jonswap, hs=hs, tp=PEAK_PERIOD / sea["second_frequency_ratio"], gamma=2.0)
    share = sea["second_share"]
    return lambda frequency: (1 - share) * main(frequency) + share * other(frequency)


def simulate(recipe, member: int) -> dict[str, np.ndarray]:
    """Run one member of a recipe whose engine is ``hos``.

    Returns
    -------
    dict of arrays
        ``elevation`` (gauges, n) float32 [m], the gauges one spacing apart downwave on a line
        that closes on itself; ``dt`` [s]; ``gauge_spacing`` [m]; the sea's parameters; and
        ``energy_kept``, the share of energy left at the end of what was left after settling.
    """
    generator = member_generator(recipe.root_seed, member)
    drawn = draw_sea(recipe, generator)
    omega_p = 2 * np.pi / PEAK_PERIOD
    kp = omega_p**2 / GRAVITY
    wavelength = 2 * np.pi / kp
    hs = 2 * drawn["steepness"] / kp
    wavelengths = recipe.gauges * recipe.gauge_spacing_wavelengths
    sea = FullyNonlinearSea(
        wavelengths * wavelength,
        peak_wavenumber=kp,
        modes=round(MODES_PER_WAVELENGTH * wavelengths),
    )
    start = random_surface(
        sea, _density(drawn, hs), generator, hs=hs,
        band=(BAND[0] / PEAK_PERIOD, BAND[1] / PEAK_PERIOD),
    )  # fmt: skip
    dt = PEAK_PERIOD / recipe.samples_per_period
    step = dt / STEPS_PER_SAMPLE
    _, settled = sea.march(
        start,
        step=step,
        samples=0,
        settle=round(drawn["settling_periods"] * PEAK_PERIOD / step),
        ramp=RAMP_PERIODS * PEAK_PERIOD,
    )
    places = np.arange(recipe.gauges) * (sea.points // recipe.gauges)
    elevation, end = sea.march(
        settled,
        step=step,
        samples=round(recipe.duration_periods * recipe.samples_per_period),
        steps_per_sample=STEPS_PER_SAMPLE,
        places=places,
    )
    return {
        "elevation": elevation.T.astype(np.float32),
        "dt": np.float64(dt),
        "gauge_spacing": np.float64(recipe.gauge_spacing_wavelengths * wavelength),
        "energy_kept": np.float64(sea.energy(end) / sea.energy(settled)),
        **{name: np.float64(value) for name, value in drawn.items()},
    }
