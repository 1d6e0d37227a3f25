from dataclasses import replace

import numpy as np
import pytest

from forecaster.errors import InputError
from forecaster.learning.ensemble import (
    BAND,
    PEAK_PERIOD,
    draw_sea,
    generate,
    member_generator,
    plan_hash,
    simulate,
)
from forecaster.settings import SeaRecipe, SensorViews
from forecaster.waves.propagate import KEPT
from forecaster.waves.spectrum import jonswap

SMALL = SeaRecipe(
    engine="dysthe", members=5, root_seed=8, steepness=(0.03, 0.08), settling_periods=(10, 12),
    duration_periods=40, after_periods=4, gauges=3, sensors=1, distances_wavelengths=(0.0, 2.5),
    views=SensorViews(record_periods=(20, 30)),
)  # fmt: skip


def shards(folder):
    return {file.name: file.read_bytes() for file in sorted(folder.glob("member-*.npz"))}


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """The small recipe run straight through by one worker."""
    folder = tmp_path_factory.mktemp("whole")
    generate(SMALL, folder)
    return shards(folder)


def test_one_worker_writes_every_member(whole):
    assert len(whole) == SMALL.members


def test_two_workers_give_the_same_bytes(whole, tmp_path):
    generate(SMALL, tmp_path, workers=2)
    assert shards(tmp_path) == whole


def test_a_killed_and_resumed_run_gives_the_same_bytes(whole, tmp_path):
    def killed(done, total):
        if done == 2:
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        generate(SMALL, tmp_path, progress=killed)
    before = shards(tmp_path)
    assert len(before) == 2
    said = []
    generate(SMALL, tmp_path, progress=lambda *counts: said.append(counts))
    assert said == [(2, 5), (3, 5), (4, 5), (5, 5)]
    assert shards(tmp_path) == whole


def test_parts_add_up_to_the_whole(whole, tmp_path):
    generate(SMALL, tmp_path, part=(0, 2))
    assert sorted(shards(tmp_path)) == [f"member-{m:06d}.npz" for m in (0, 2, 4)]
    generate(SMALL, tmp_path, part=(1, 2))
    assert shards(tmp_path) == whole


@pytest.mark.parametrize("part", [(2, 2), (-1, 2), (0, 0)])
def test_a_part_that_is_none_is_refused(part, tmp_path):
    with pytest.raises(InputError, match="part must be i of n"):
        generate(SMALL, tmp_path, part=part)


def test_a_folder_of_another_plan_is_refused(tmp_path):
    generate(replace(SMALL, members=1), tmp_path)
    with pytest.raises(InputError, match="was made by plan"):
        generate(replace(SMALL, members=1, root_seed=9), tmp_path)


def test_a_recipe_grows_in_the_same_folder(whole, tmp_path):
    generate(replace(SMALL, members=2), tmp_path)
    generate(SMALL, tmp_path)
    assert shards(tmp_path) == whole


@pytest.mark.parametrize(
    "change",
    [
        {"members": 77},
        {"views": SensorViews(per_sensor=3, noise=(0, 0.1), record_periods=(20, 30))},
        {"sensors": 2},
        {"distances_wavelengths": (5.0,)},
        {"after_periods": 8.0},
    ],
)
def test_the_plan_does_not_hang_on_who_looks_at_it(change):
    other = replace(SMALL, **change)
    assert plan_hash(other) == plan_hash(SMALL)
    assert np.array_equal(simulate(other, 1)["elevation"], simulate(SMALL, 1)["elevation"])


@pytest.mark.parametrize(
    "change",
    [
        {"engine": "linear"},
        {"root_seed": 9},
        {"gamma": (1.0, 9.0)},
        {"steepness": (0.03, 0.081)},
        {"second_system_share": 0.1},
        {"settling_periods": (10.0, 13.0)},
        {"duration_periods": 41.0},
        {"samples_per_period": 20},
        {"gauges": 4},
        {"gauge_spacing_wavelengths": 1.25},
    ],
)
def test_the_plan_hangs_on_all_that_decides_the_seas(change):
    assert plan_hash(replace(SMALL, **change)) != plan_hash(SMALL)


def test_members_and_purposes_have_numbers_of_their_own():
    draws = {
        tuple(member_generator(seed, member, *purpose).integers(2**62, size=2))
        for seed in (1, 2)
        for member in range(20)
        for purpose in ((), (1,), (2,))
    }
    assert len(draws) == 120


@pytest.mark.parametrize("samples_per_period, duration", [(16, 40.0), (17, 41.0), (20, 40.025)])
def test_what_is_stored(samples_per_period, duration):
    recipe = replace(SMALL, samples_per_period=samples_per_period, duration_periods=duration)
    sea = simulate(recipe, 0)
    gauges, samples = sea["elevation"].shape
    assert gauges == recipe.gauges
    assert abs(samples - duration * samples_per_period) <= 1
    assert sea["dt"] == pytest.approx(PEAK_PERIOD / samples_per_period)
    assert not sea["closed"]
    # exact: deep-water wavelength g T^2 / 2 pi = 156.131 m at 10 s
    assert sea["gauge_spacing"] == pytest.approx(2.5 * 156.131, rel=1e-5)
    assert np.isfinite(sea["elevation"]).all()


# --- the seas drawn ---


def drawn(recipe, number):
    seas = [draw_sea(recipe, member_generator(recipe.root_seed, m)) for m in range(number)]
    return {name: np.array([sea[name] for sea in seas]) for name in seas[0]}


def test_seas_are_drawn_as_the_recipe_says():
    recipe = replace(SMALL, gamma=(1.0, 9.0), steepness=(0.02, 0.12), second_system_share=0.25)
    n = 2000
    sea = drawn(recipe, n)
    # by hand: quartiles of a uniform law, within 4 standard errors sqrt(q (1 - q) / n)
    for values, low, high in (
        (sea["steepness"], 0.02, 0.12),
        (np.log(sea["gamma"]), 0.0, np.log(9.0)),
        (sea["settling_periods"], 10.0, 12.0),
    ):
        share = (values - low) / (high - low)
        assert share.min() >= 0 and share.max() <= 1
        for q in (0.25, 0.5, 0.75):
            assert abs((share < q).mean() - q) < 4 * np.sqrt(q * (1 - q) / n)
    second = sea["second_share"] > 0
    assert abs(second.mean() - 0.25) < 4 * np.sqrt(0.25 * 0.75 / n)
    assert (sea["second_frequency_ratio"][~second] == 1).all()
    assert (sea["second_frequency_ratio"][second] >= 1.3).all()


@pytest.fixture(scope="module")
def linear_seas():
    """(seas, n) elevations at the first gauge of 240 linear seas, gamma 3.3, over their Hs."""
    recipe = replace(
        SMALL, engine="linear", gamma=(3.3, 3.3), steepness=(1e-6, 1e-6), gauges=1,
        distances_wavelengths=(0.0,), duration_periods=64.0,
    )  # fmt: skip
    kp = (2 * np.pi / PEAK_PERIOD) ** 2 / 9.81
    hs = 2 * 1e-6 / kp  # by hand: steepness kp Hs / 2
    return np.array([simulate(recipe, m)["elevation"][0] / hs for m in range(240)], float)


def test_seas_have_the_height_asked_for_and_scatter_as_gaussian_seas_do(linear_seas):
    variance = 16 * linear_seas.var(axis=1)
    assert variance.mean() == pytest.approx(1, abs=4 * variance.std() / np.sqrt(240))
    # published: var(m0) = integral S^2 df / T (Bendat & Piersol 2010, section 8.2)
    f = np.linspace(BAND[0], BAND[1], 4000) / PEAK_PERIOD
    density = jonswap(f, hs=1.0, tp=PEAK_PERIOD, gamma=3.3)
    step = f[1] - f[0]
    expected = np.sqrt((density**2).sum() * step / (64 * PEAK_PERIOD)) / (density.sum() * step)
    # 4 standard errors of a standard deviation from 240 values, and a little for skewness
    assert variance.std() == pytest.approx(expected, rel=4 / np.sqrt(2 * 240) + 0.05)


def test_amplitudes_are_random_too(linear_seas):
    # exact: |a|^2 of a complex Gaussian amplitude is exponential, so <|a|^4> = 2 <|a|^2>^2
    # (published: Tucker, Challenor & Carter 1984: fixed amplitudes make the sea too regular)
    power = np.abs(np.fft.rfft(linear_seas, axis=1)) ** 2
    energetic = power.mean(axis=0) > 0.05 * power.mean(axis=0).max()
    ratio = (power**2).mean(axis=0)[energetic] / power.mean(axis=0)[energetic] ** 2
    assert ratio.mean() == pytest.approx(2, abs=0.15)


def test_the_spectrum_is_the_one_drawn_and_stays_in_its_band(linear_seas):
    n = linear_seas.shape[1]
    dt = PEAK_PERIOD / 16
    f = np.fft.rfftfreq(n, dt)
    top = min(BAND[1], KEPT[1])  # of what is drawn, and of what a run carries
    density = 2 * dt / n * (np.abs(np.fft.rfft(linear_seas, axis=1)) ** 2).mean(axis=0)
    inside = (f > 0.6 / PEAK_PERIOD) & (f < 0.99 * top / PEAK_PERIOD)
    outside = (f < 0.98 * BAND[0] / PEAK_PERIOD) | (f > 1.02 * top / PEAK_PERIOD)
    assert density[outside].max() < 1e-6 * density.max()
    wanted = jonswap(f[inside], hs=1.0, tp=PEAK_PERIOD, gamma=3.3)
    wanted *= density[inside].sum() / wanted.sum()
    # exact: the mean of 240 exponential estimates has a relative standard error of 1/sqrt(240)
    scatter = density[inside] / wanted - 1
    assert np.abs(scatter).max() < 5 / np.sqrt(240)
    assert scatter.std() == pytest.approx(1 / np.sqrt(240), rel=0.25)


def test_linear_waves_run_from_gauge_to_gauge_by_the_dispersion_relation():
    # exact: k = omega^2 / g in deep water (Airy 1845); a sea so gentle has no bound waves
    recipe = replace(
        SMALL, engine="linear", steepness=(1e-7, 1e-7), gauges=4, gamma=(1.0, 1.0),
        duration_periods=60.0,
    )  # fmt: skip
    sea = simulate(recipe, 0)
    modes = np.fft.fft(sea["elevation"].astype(float), axis=1)
    omega = -2 * np.pi * np.fft.fftfreq(modes.shape[1], sea["dt"])
    running = (omega > 0) & (np.abs(modes[0]) > 0.03 * np.abs(modes[0]).max())
    assert running.sum() > 40
    k = omega[running] ** 2 / 9.81
    for gauge in (1, 2, 3):
        carried = modes[0, running] * np.exp(1j * k * gauge * sea["gauge_spacing"])
        np.testing.assert_allclose(modes[gauge, running] / carried, 1, atol=1e-4)


def test_a_second_system_holds_its_share_of_the_energy_higher_up():
    recipe = replace(
        SMALL, engine="linear", second_system_share=1.0, gamma=(7.0, 7.0), gauges=1,
        distances_wavelengths=(0.0,), steepness=(1e-6, 1e-6),
    )  # fmt: skip
    high = []
    for share in (0.0, 1.0):
        seas = [simulate(replace(recipe, second_system_share=share), m) for m in range(60)]
        power = np.array([np.abs(np.fft.rfft(sea["elevation"][0])) ** 2 for sea in seas])
        f = np.fft.rfftfreq(seas[0]["elevation"].shape[1], seas[0]["dt"]) * PEAK_PERIOD
        high.append((power[:, f > 1.25].sum(axis=1) / power.sum(axis=1)).mean())
    # by hand: a share uniform in 0.15 .. 0.5 lies mostly above 1.25 fp
    assert 0.1 < high[1] - high[0] < 0.33


def test_fully_nonlinear_seas_close_on_themselves_and_keep_or_lose_energy():
    recipe = replace(
        SMALL, engine="hos", members=1, gauges=4, steepness=(0.05, 0.05), gamma=(3.3, 3.3),
        samples_per_period=16,
    )  # fmt: skip
    sea = simulate(recipe, 0)
    assert sea["closed"]
    assert sea["elevation"].shape == (4, 640)
    assert 0.95 < sea["energy_kept"] <= 1 + 1e-3
    assert np.array_equal(simulate(recipe, 0)["elevation"], sea["elevation"])
    # by hand: Hs = 2 steepness / kp; one short line of water scatters widely about it
    hs = 2 * 0.05 / ((2 * np.pi / PEAK_PERIOD) ** 2 / 9.81)
    assert 0.5 * hs < 4 * sea["elevation"].std() < 1.6 * hs
