"""Synthetic seas that teach and test: recipe -> plan -> members -> shards.

Each member draws its sea from its own seed, so the numbers are the same whatever the number of
workers, their order or the machine they run on.
"""

from __future__ import annotations

import json
from collections.abc import Callable
from functools import partial

import numpy as np
from scipy import fft

from forecaster.datatypes import Envelope
from forecaster.errors import InputError
from forecaster.settings import SeaRecipe, settings_to_table
from forecaster.storage import ShardFolder, sha256_of
from forecaster.waves.envelope import elevation_of
from forecaster.waves.hos import FullyNonlinearSea
from forecaster.waves.linear import GRAVITY
from forecaster.waves.propagate import ForwardRun
from forecaster.waves.spectrum import jonswap
from forecaster.waves.synthesis import random_envelope, random_surface

PEAK_PERIOD = 10.0  # s; deep-water seas scale, so one period stands for all
BAND = (0.4, 2.5)  # of the peak frequency: what a drawn sea holds
STEPS_PER_SAMPLE = 2  # of the fully nonlinear engine
MODES_PER_WAVELENGTH = 8
RAMP_PERIODS = 8.0
_SEA_FIELDS = (
    "engine", "root_seed", "gamma", "steepness", "second_system_share", "settling_periods",
    "duration_periods", "samples_per_period", "gauges", "gauge_spacing_wavelengths",
)  # fmt: skip


def plan_hash(recipe: SeaRecipe) -> str:
    """Hash of what decides the seas themselves: neither their number nor who looks at them."""
    table = settings_to_table(recipe)
    return sha256_of(json.dumps({name: table[name] for name in _SEA_FIELDS}).encode())


def member_generator(root_seed: int, member: int, *purpose: int) -> np.random.Generator:
    """The random numbers of one member, for one purpose (none: the sea itself)."""
    return np.random.default_rng(np.random.SeedSequence(root_seed, spawn_key=(member, *purpose)))


def draw_sea(recipe: SeaRecipe, generator) -> dict[str, float]:
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


def simulate(recipe: SeaRecipe, member: int) -> dict[str, np.ndarray]:
    """Run one member of a recipe.

    Returns
    -------
    dict of arrays
        ``elevation`` (gauges, n) float32 [m], the gauges one spacing apart downwave; ``closed``,
        whether the line of gauges closes on itself; ``dt`` [s]; ``gauge_spacing`` [m]; the sea's
        parameters; and ``energy_kept``, the share of energy left at the end of what was left
        after settling (1 where the engine has no breaking).
    """
    generator = member_generator(recipe.root_seed, member)
    drawn = draw_sea(recipe, generator)
    kp = (2 * np.pi / PEAK_PERIOD) ** 2 / GRAVITY
    hs = 2 * drawn["steepness"] / kp
    spacing = recipe.gauge_spacing_wavelengths * 2 * np.pi / kp
    engine = _fully_nonlinear if recipe.engine == "hos" else _envelope_engine
    elevation, kept = engine(recipe, generator, drawn, hs, kp, spacing)
    return {
        "elevation": elevation.astype(np.float32),
        "closed": np.bool_(recipe.engine == "hos"),
        "dt": np.float64(PEAK_PERIOD / recipe.samples_per_period),
        "gauge_spacing": np.float64(spacing),
        "energy_kept": np.float64(kept),
        **{name: np.float64(value) for name, value in drawn.items()},
    }


def _fully_nonlinear(recipe, generator, drawn, hs, kp, spacing):
    sea = FullyNonlinearSea(
        recipe.gauges * spacing,
        peak_wavenumber=kp,
        modes=round(MODES_PER_WAVELENGTH * recipe.gauges * recipe.gauge_spacing_wavelengths),
    )
    band = (BAND[0] / PEAK_PERIOD, BAND[1] / PEAK_PERIOD)
    start = random_surface(sea, _density(drawn, hs), generator, hs=hs, band=band)
    step = PEAK_PERIOD / recipe.samples_per_period / STEPS_PER_SAMPLE
    _, settled = sea.march(
        start,
        step=step,
        samples=0,
        settle=round(drawn["settling_periods"] * PEAK_PERIOD / step),
        ramp=RAMP_PERIODS * PEAK_PERIOD,
    )
    elevation, end = sea.march(
        settled,
        step=step,
        samples=round(recipe.duration_periods * recipe.samples_per_period),
        steps_per_sample=STEPS_PER_SAMPLE,
        places=np.arange(recipe.gauges) * (sea.points // recipe.gauges),
    )
    return elevation.T, sea.energy(end) / sea.energy(settled)


def _envelope_engine(recipe, generator, drawn, hs, kp, spacing):
    """A time-periodic sea marched downwave; ageing is distance, 2 Tp a wavelength."""
    omega0 = 2 * np.pi / PEAK_PERIOD
    n = round(recipe.duration_periods * recipe.samples_per_period / 2)
    samples = 2 * n  # the envelope has every other sample
    dt = 2 * PEAK_PERIOD / recipe.samples_per_period
    duration = n * dt
    omega0 = 2 * np.pi / duration * round(omega0 * duration / (2 * np.pi))
    band = (BAND[0] / PEAK_PERIOD, BAND[1] / PEAK_PERIOD)
    values = random_envelope(
        _density(drawn, hs), generator, n=n, dt=dt, omega0=omega0, hs=hs, band=band
    )
    k0 = omega0**2 / GRAVITY
    run = ForwardRun(Envelope(values, dt, 0.0, omega0, k0), equation=recipe.engine)
    first = 0.5 * drawn["settling_periods"] * 2 * np.pi / kp
    rows = run.march(first + spacing * np.arange(recipe.gauges))
    elevation = np.empty((recipe.gauges, samples))
    offset = -2 * np.pi * fft.fftfreq(n, dt)
    for place, row in enumerate(rows):
        # from the moving frame back to one clock: the sea is periodic in time
        shifted = fft.ifft(fft.fft(row.values) * np.exp(1j * offset * row.start))
        still = Envelope(shifted, dt, 0.0, omega0, k0)
        elevation[place], _ = elevation_of(still, refine=2)
    return elevation, 1.0


def generate(
    recipe: SeaRecipe,
    folder,
    *,
    workers: int = 1,
    part: tuple[int, int] = (0, 1),
    progress: Callable[[int, int], None] = lambda done, total: None,
) -> ShardFolder:
    """Compute the members of a recipe that a folder does not hold yet.

    Parameters
    ----------
    recipe : SeaRecipe
    folder : path
        Of the shards; finished members are kept, so a stopped run goes on where it was.
    workers : int
        Processes.
    part : (i, n)
        Compute only members with number = i modulo n: several machines share a recipe.
    progress : callable
        Called with (members finished, members wanted) of this part.

    Raises
    ------
    InputError
        For a folder of another plan, or a part that is not i of n.
    """
    import joblib

    index, parts = part
    if not 0 <= index < parts:
        raise InputError(f"part must be i of n with 0 <= i < n, got {index} of {parts}")
    shards = ShardFolder(folder, plan_hash=plan_hash(recipe))
    wanted = range(index, recipe.members, parts)
    finished = shards.finished()
    missing = [member for member in wanted if member not in finished]
    done = len(wanted) - len(missing)
    progress(done, len(wanted))
    with joblib.parallel_config(backend="loky", inner_max_num_threads=1):
        results = joblib.Parallel(n_jobs=workers, return_as="generator_unordered")(
            joblib.delayed(_member)(recipe, member) for member in missing
        )
        for member, arrays in results:
            shards.write(member, arrays)
            done += 1
            progress(done, len(wanted))
    return shards


def _member(recipe, member):
    return member, simulate(recipe, member)
