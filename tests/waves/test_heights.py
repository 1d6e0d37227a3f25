"""Zero-crossing waves, groups and base rates against exact, published and simulated values."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from forecaster.datatypes import Spectrum, Waves
from forecaster.errors import InputError
from forecaster.waves.heights import (
    correlated_height_exceedance,
    excess_kurtosis_from_bfi,
    expected_largest,
    forristall_crest_exceedance,
    forristall_height_exceedance,
    group_statistics,
    interval_maxima,
    largest_exceedance,
    mori_janssen_height_exceedance,
    predictive_base_rate,
    rayleigh_crest_exceedance,
    rayleigh_height_exceedance,
    rayleigh_largest_quantile,
    tayfun_crest_exceedance,
    wave_groups,
    wave_statistics,
    zero_crossing_waves,
)
from forecaster.waves.spectrum import crest_trough_correlation, hs_sampling_error, jonswap

FIELDS = ("start", "end", "crest_time", "height", "crest", "trough")


def random_sea(seed, n=600, period=16, width=0.35):
    """A smooth random row of about `period` samples a wave."""
    f = np.fft.rfftfreq(n)
    z = np.random.default_rng(seed).standard_normal((2, f.size))
    shape = np.exp(-0.5 * ((f * period - 1) / width) ** 2)
    return np.fft.irfft(shape * (z[0] + 1j * z[1])) * n**0.5


def waves_by_loop(x, dt):
    """Slow twin of `zero_crossing_waves`: one wave at a time, written from the definition."""
    side, crossings = 0, []
    for i, value in enumerate(x):
        if value < 0 and side > 0:
            crossings.append(i - 1 + x[i - 1] / (x[i - 1] - value))
        side = np.sign(value) if value > 0 or value < 0 else side

    def vertex(y, i):
        a, b, c = y[i - 1 : i + 2]
        if b < a or b < c or a - 2 * b + c == 0:
            return i, b
        p = 0.5 * (a - c) / (a - 2 * b + c)
        return i + p, b - 0.25 * (a - c) * p

    waves = []
    for first, last in pairwise(crossings):
        if not np.isfinite(first + last):
            continue
        inside = range(int(np.floor(first)) + 1, int(np.floor(last)) + 1)
        if np.isnan(x[list(inside)]).any():
            continue
        crest = max((vertex(x, i) for i in inside), key=lambda v: v[1])
        trough = max((vertex(-x, i) for i in inside), key=lambda v: v[1])[1]
        waves.append((first, last, crest[0], crest[1] + trough, crest[1], trough))
    return np.array(waves).reshape(-1, 6).T * np.array([dt, dt, dt, 1, 1, 1])[:, None]


# --- waves --------------------------------------------------------------------------------------


@pytest.mark.parametrize("samples", [16, 20.3, 40])
def test_waves_of_a_sine(samples):
    # exact: height 2 a, period T, crests three quarters of a period after the down-crossing
    dt, period = 0.25, 0.25 * samples
    t = dt * np.arange(400)
    waves = zero_crossing_waves(3 * np.sin(2 * np.pi * t / period + 0.4), dt, start=100.0)
    assert waves.height.size == int((t[-1] / period) + 0.4 / (2 * np.pi) - 0.5)
    assert waves.height == pytest.approx(6.0, rel=6e-4)
    assert waves.crest == pytest.approx(3.0, rel=6e-4)
    assert waves.trough == pytest.approx(3.0, rel=6e-4)
    first = 100 + period * (0.5 - 0.4 / (2 * np.pi))
    assert waves.start == pytest.approx(
        first + period * np.arange(waves.height.size), abs=0.02 * dt
    )
    assert waves.end[:-1].tolist() == waves.start[1:].tolist()
    assert waves.crest_time - waves.start == pytest.approx(0.75 * period, abs=0.05 * dt)


def test_waves_of_two_tones():
    # exact: a sin t + b sin 2t, a > 2b, crosses at multiples of pi; its extremes lie where
    # 4 b cos^2 t + a cos t - 2 b = 0
    a, b = 2.0, 0.5
    t = np.linspace(0, 30, 1900)
    waves = zero_crossing_waves(a * np.sin(t) + b * np.sin(2 * t), t[1])
    angle = np.arccos((-a + np.sqrt(a**2 + 32 * b**2)) / (8 * b))
    crest = a * np.sin(angle) + b * np.sin(2 * angle)
    assert waves.start == pytest.approx(np.pi * np.array([1, 3, 5, 7]), abs=1e-3)
    assert waves.crest == pytest.approx(crest, rel=1e-6)
    assert waves.trough == pytest.approx(crest, rel=1e-6)
    assert waves.crest_time == pytest.approx(np.pi * np.array([2, 4, 6, 8]) + angle, abs=1e-4)


def test_touching_the_mean_level_is_no_crossing():
    # by hand: down-crossings after sample 1, and exactly at the zeros 6 and 11
    x = np.array([1, 1, -1, 0, -2, 3, 0, -1, 2, 0, 4, 0, -1.0])
    waves = zero_crossing_waves(x, 1.0)
    assert waves.start.tolist() == [1.5, 6.0]
    assert waves.end.tolist() == [6.0, 11.0]


def test_waves_that_touch_a_gap_are_left_out():
    x = np.sin(2 * np.pi * np.arange(200) / 20 + 0.1)
    whole = zero_crossing_waves(x, 1.0)
    x[85] = np.nan
    gapped = zero_crossing_waves(x, 1.0)
    kept = ~((whole.start < 85) & (whole.end > 85))
    assert kept.sum() == whole.height.size - 1
    assert gapped.height.tolist() == whole.height[kept].tolist()


@given(
    st.lists(
        st.one_of(st.integers(-3, 3).map(float), st.floats(-2, 2, width=16), st.just(np.nan)),
        min_size=2,
        max_size=60,
    )
)
@settings(max_examples=300)
def test_waves_against_the_slow_twin(x):
    # independent code: a loop over crossings; zeros, ties and gaps included
    x = np.array(x)
    waves = zero_crossing_waves(x, 0.5)
    expected = waves_by_loop(x, 0.5)
    for name, values in zip(FIELDS, expected, strict=True):
        assert getattr(waves, name) == pytest.approx(values, rel=1e-12, abs=1e-12), name


@given(st.integers(0, 2**32 - 1), st.floats(1e-3, 1e3), st.floats(-1e4, 1e4), st.floats(0.01, 100))
@settings(max_examples=40)
def test_waves_scale_and_shift(seed, scale, start, dt):
    # exact invariances of the definition
    x = random_sea(seed)
    one, other = zero_crossing_waves(x, 1.0), zero_crossing_waves(scale * x, dt, start=start)
    for name in ("height", "crest", "trough"):
        assert getattr(other, name) == pytest.approx(scale * getattr(one, name), rel=1e-9)
    for name in ("start", "end", "crest_time"):
        assert getattr(other, name) == pytest.approx(start + dt * getattr(one, name), rel=1e-9)


@given(st.integers(0, 2**32 - 1))
@settings(max_examples=40)
def test_waves_upside_down_and_backwards(seed):
    # exact: -x(-t) falls where x(t) falls, so the waves are the same with crest and trough changed
    x = random_sea(seed)
    forth, back = zero_crossing_waves(x, 1.0), zero_crossing_waves(-x[::-1], 1.0)
    assert back.height[::-1] == pytest.approx(forth.height, rel=1e-9)
    assert back.crest[::-1] == pytest.approx(forth.trough, rel=1e-9)
    assert x.size - 1 - back.end[::-1] == pytest.approx(forth.start, rel=1e-9)


@given(st.integers(0, 2**32 - 1), st.integers(1, 300))
@settings(max_examples=40)
def test_later_samples_change_no_earlier_wave(seed, cut):
    x = random_sea(seed)
    whole, part = zero_crossing_waves(x, 1.0), zero_crossing_waves(x[:-cut], 1.0)
    for name in FIELDS:
        assert getattr(whole, name)[: part.height.size].tolist() == getattr(part, name).tolist()


def test_wave_input_is_checked():
    with pytest.raises(InputError, match="one row"):
        zero_crossing_waves(np.zeros((2, 5)), 1.0)
    with pytest.raises(InputError, match="dt"):
        zero_crossing_waves(np.zeros(5), 0.0)
    assert zero_crossing_waves(np.ones(9), 1.0).height.size == 0


def test_interval_maxima_row_by_row():
    # by definition: the largest of the waves whose crest lies in the interval, row by row
    rows = np.array([random_sea(seed) for seed in range(12)]).reshape(3, 4, -1)
    rows[1, 2] = np.abs(rows[1, 2])
    rows[2, 0, 40:90] = np.nan
    edges = np.array([-10.0, 0.0, 30.0, 55.5, 120.0, 299.0, 400.0])
    heights, crests = interval_maxima(rows, 0.5, edges)
    assert heights.shape == crests.shape == (3, 4, 6)
    for index in np.ndindex(3, 4):
        waves = zero_crossing_waves(rows[index], 0.5)
        for j in range(6):
            held = (waves.crest_time >= edges[j]) & (waves.crest_time < edges[j + 1])
            assert heights[index][j] == waves.height[held].max(initial=0.0)
            assert crests[index][j] == waves.crest[held].max(initial=0.0)
    assert not heights[1, 2].any()
    assert interval_maxima(rows[0, 0], 0.5, edges)[0].tolist() == heights[0, 0].tolist()


def test_crest_on_an_edge_belongs_to_the_interval_that_begins_there():
    # by definition: from <= time < to; the crest lies on sample 5, at 2.5 s
    x = np.array([1.0, -1, -2, -1, 1, 2, 1, -1])
    heights, crests = interval_maxima(x, 0.5, [0.0, 2.5, 4.0])
    assert heights.tolist() == [0.0, 4.0]
    assert crests.tolist() == [0.0, 2.0]
    assert interval_maxima(x, 0.5, [0.0, 2.5])[0].tolist() == [0.0]


@pytest.mark.parametrize("edges", [[1.0], [0.0, 0.0], [0.0, 2.0, 1.0], [[0.0, 1.0]], [0, np.nan]])
def test_edges_must_increase(edges):
    with pytest.raises(InputError, match="edges"):
        interval_maxima(np.zeros(10), 1.0, edges)


def gaussian_rows(rng, *, density, rows, n, dt):
    f = np.fft.rfftfreq(n, dt)
    amplitude = np.sqrt(density(f) * f[1])
    z = rng.standard_normal((rows, f.size)) + 1j * rng.standard_normal((rows, f.size))
    return np.fft.irfft(amplitude * z * n / 2, axis=1, n=n)


def exceedance_found(rows, dt, hs, ratios):
    heights, crests = np.concatenate(
        [
            np.array([waves.height, waves.crest])
            for waves in (zero_crossing_waves(row, dt) for row in rows)
        ],
        axis=1,
    )
    return (
        [(heights >= ratio * hs).mean() for ratio in ratios],
        [(crests >= ratio / 2 * hs).mean() for ratio in ratios],
        heights.size,
    )


def test_narrow_gaussian_sea_is_rayleigh():
    # exact: heights of a narrow-band Gaussian sea are Rayleigh (Longuet-Higgins 1952); Hs = 4 m
    rng = np.random.default_rng(21)

    def density(f):
        return np.exp(-0.5 * ((f - 1) / 0.02) ** 2) / (0.02 * np.sqrt(2 * np.pi))

    rows = gaussian_rows(rng, density=density, rows=60, n=2**15, dt=1 / 16)
    ratios = np.array([0.3, 0.7, 1.0, 1.3])
    heights, crests, count = exceedance_found(rows, 1 / 16, 4.0, ratios)
    assert count == pytest.approx(60 * 2**15 / 16, rel=0.01)
    assert heights == pytest.approx(rayleigh_height_exceedance(ratios), rel=0.05)
    assert crests == pytest.approx(rayleigh_crest_exceedance(ratios / 2), rel=0.05)


def test_jonswap_gaussian_sea_is_below_rayleigh():
    # published: Naess 1985, Tayfun 1990 for the large heights of a Gaussian sea of finite width;
    # Forristall 1978 for the same in storms. Crests stay Rayleigh. By Monte Carlo, Hs = 4 m
    rng = np.random.default_rng(22)

    def density(f):
        return np.where(f < 3, jonswap(f, hs=4.0, tp=1.0), 0.0)

    rows = gaussian_rows(rng, density=density, rows=100, n=2**14, dt=1 / 16)
    ratios = np.array([1.2, 1.5])
    heights, crests, _ = exceedance_found(rows, 1 / 16, 4.0, ratios)
    f = np.arange(0, 3, 1e-3)
    r = crest_trough_correlation(Spectrum(f, jonswap(f, hs=4.0, tp=1.0)))
    assert heights == pytest.approx(correlated_height_exceedance(ratios, r), rel=0.12)
    assert heights == pytest.approx(forristall_height_exceedance(ratios), rel=0.25)
    assert (heights < 0.75 * rayleigh_height_exceedance(ratios)).all()
    assert crests == pytest.approx(rayleigh_crest_exceedance(ratios / 2), rel=0.12)


# --- groups -------------------------------------------------------------------------------------


def waves_of(heights, start=None):
    n = len(heights)
    start = np.arange(n, dtype=float) if start is None else np.asarray(start, float)
    return Waves(start, start + 1, start + 0.7, *np.tile(np.asarray(heights, float), (3, 1)))


def test_groups_by_hand():
    # by hand
    waves = waves_of([5, 1, 4, 4, 4, 2, 3, 4])
    first, length = wave_groups(waves, 4)
    assert first.tolist() == [0, 2, 7]
    assert length.tolist() == [1, 3, 1]
    assert group_statistics(waves, 4) == (5 / 3, 3.5)
    assert group_statistics(waves, 6) == (0.0, np.inf)
    # a gap in time parts a run
    first, length = wave_groups(waves_of([5, 5, 5], start=[0, 1, 7]), 4)
    assert (first.tolist(), length.tolist()) == ([0, 2], [2, 1])
    assert [run.size for run in wave_groups(waves_of([]), 1.0)] == [0, 0]


def test_runs_of_independent_waves():
    # published: Goda 1970, mean run 1/(1 - p), mean total run 1/p + 1/(1 - p)
    p = 0.3
    heights = np.random.default_rng(4).random(200_000) < p
    run, total = group_statistics(waves_of(heights), 1.0)
    assert run == pytest.approx(1 / (1 - p), rel=0.01)
    assert total == pytest.approx(1 / p + 1 / (1 - p), rel=0.01)


# --- statistics of a record ---------------------------------------------------------------------


def test_statistics_of_a_modulated_sine_by_hand():
    # by hand: waves of 10 s, of height 5, 2, 5, 6, 2, 2, 7, 2 m, trough first, crests half of that
    # but for the first one's, 4 m; the row begins and ends with an incomplete wave
    amplitude = np.repeat([1, 1, 1, 2.5, 3, 1, 1, 3.5, 1, 1], 100)
    t = np.arange(amplitude.size) * 0.1
    x = -amplitude * np.sin(2 * np.pi * t / 10)
    x[(t > 15) & (t < 20)] *= 4
    found = wave_statistics(zero_crossing_waves(x[50:-50], 0.1, start=105.0), 4.0)
    assert found.count == 8
    assert found.highest == pytest.approx(7.0, rel=1e-3)
    assert found.highest_ratio == pytest.approx(7 / 4, rel=1e-3)
    assert found.highest_time == pytest.approx(100 + 77.5, abs=0.01)
    assert found.highest_crest == pytest.approx(4.0, rel=1e-3)
    assert found.crest_ratio == pytest.approx(1.0, rel=1e-3)
    # three runs reach 4 m: wave 1, waves 3 and 4, wave 7
    assert (found.run_length, found.total_run) == pytest.approx((4 / 3, 3.0))
    assert found.expected_ratio == expected_largest(8, exceedance=forristall_height_exceedance)


def test_statistics_without_waves_and_without_runs():
    # exact: nothing is the largest of nothing
    none = wave_statistics(zero_crossing_waves(np.zeros(100), 0.5), 3.0)
    assert (none.count, none.highest, none.highest_crest, none.expected_ratio) == (0, 0, 0, 0)
    assert np.isnan(none.highest_time)
    assert (none.run_length, none.total_run) == (0, np.inf)
    one = wave_statistics(waves_of([1, 4, 4, 1]), 4.0)
    assert (one.count, one.highest_time, one.run_length, one.total_run) == (4, 1.7, 2, np.inf)
    for hs in (0.0, -1.0, np.nan, np.inf):
        with pytest.raises(InputError, match="hs must be a positive"):
            wave_statistics(waves_of([1, 2]), hs)


def test_largest_of_gaussian_records_by_its_expectation():
    # exact for independent Rayleigh waves; for a Gaussian sea of finite width Forristall 1978
    # lies within a few per cent (the waves of a record are not independent). By Monte Carlo
    rng = np.random.default_rng(31)

    def density(f):
        return np.where(f < 3, jonswap(f, hs=4.0, tp=1.0), 0.0)

    rows = gaussian_rows(rng, density=density, rows=200, n=2048, dt=1 / 16)
    found = [wave_statistics(zero_crossing_waves(row, 1 / 16), 4.0) for row in rows]
    largest, expected = (
        np.array([getattr(one, name) for one in found])
        for name in ("highest_ratio", "expected_ratio")
    )
    assert 130 < np.mean([one.count for one in found]) < 190
    assert largest.mean() == pytest.approx(expected.mean(), rel=0.04)
    # published: Forristall 1978 as a distribution; its largest of 150 scatters by 10 %
    assert largest.std() / largest.mean() == pytest.approx(0.10, abs=0.03)


# --- base rates ---------------------------------------------------------------------------------


def test_rayleigh():
    # published: Longuet-Higgins 1952, exp(-2 z^2), exp(-8 z^2); 1/2981, 1/16,000 and 1/268337
    assert rayleigh_height_exceedance(2.0) == pytest.approx(3.3546e-4, rel=1e-5)
    assert 1 / rayleigh_height_exceedance(2.2) == pytest.approx(15994, rel=1e-4)
    assert rayleigh_crest_exceedance(1.25) == pytest.approx(3.727e-6, rel=1e-4)


def test_rayleigh_means_of_the_highest():
    # exact integrals (Longuet-Higgins 1952; 1.27 and 1.67 printed there)
    def mean_of_highest(fraction):
        at = np.sqrt(-np.log(fraction) / 2)
        return at + quad(rayleigh_height_exceedance, at, 8)[0] / fraction

    third = mean_of_highest(1 / 3)
    assert third == pytest.approx(1.00108, abs=1e-5)
    assert mean_of_highest(0.1) / third == pytest.approx(1.2714, abs=5e-5)
    assert mean_of_highest(0.01) / third == pytest.approx(1.6664, abs=5e-5)
    assert mean_of_highest(1) == pytest.approx(0.62666, abs=1e-5)
    square = quad(lambda z: 2 * z * rayleigh_height_exceedance(z), 0, 8)[0]
    assert np.sqrt(square) == pytest.approx(0.70711, abs=1e-5)


def test_forristall_heights():
    # published: Forristall 1978, exponent 2.126, scale 0.681; also printed as
    # exp(-(H / sqrt m0)^2.126 / 8.42), 8.42^(1/2.126)/4 = 0.68105
    assert forristall_height_exceedance(2.0) == pytest.approx(5.123e-5, rel=1e-4)
    assert 1 / forristall_height_exceedance(2.2) == pytest.approx(179544, rel=1e-5)
    other = np.exp(-((4 * 2.0) ** 2.126) / 8.42)
    assert forristall_height_exceedance(2.0) == pytest.approx(other, rel=2e-3)


def test_forristall_worked_value():
    # published worked value: P(Hmax > 20 m), Hs = 10 m, Tz = 9 s, one hour (400 waves)
    assert largest_exceedance(forristall_height_exceedance(2.0), 3600 / 9) == pytest.approx(
        0.02028495, abs=1e-8
    )
    assert largest_exceedance(rayleigh_height_exceedance(2.0), 400) == pytest.approx(
        0.12559, abs=1e-5
    )


@pytest.mark.parametrize(
    ("n", "mean"),
    [
        (100, 1.59913),
        (200, 1.70488),
        (500, 1.83526),
        (1000, 1.92795),
        (3000, 2.06623),
        (10000, 2.20769),
    ],
)
def test_expected_largest(n, mean):
    # exact integral (Longuet-Higgins 1952), recomputed by independent code
    assert expected_largest(n) == pytest.approx(mean, abs=1e-5)


@pytest.mark.parametrize(("n", "asymptote"), [(100, 1.61252), (1000, 1.93611), (10000, 2.21321)])
def test_asymptote_of_the_expected_largest(n, asymptote):
    # published: Longuet-Higgins 1952, two terms; 0.8, 0.4 and 0.25 % above the integral
    root = np.sqrt(np.log(n))
    assert (root + np.euler_gamma / (2 * root)) / np.sqrt(2) == pytest.approx(asymptote, abs=1e-5)
    assert 1 < asymptote / expected_largest(n) < 1.009


def test_expected_largest_of_measured_records():
    # published: means of 20-min buoy records from two sites are 1.50 and 1.48 (+- 0.02) times
    # Hm0; Forristall 1978 gives 1.50 and 1.52, Rayleigh 1.64 and 1.66
    storm = expected_largest([140, 160], exceedance=forristall_height_exceedance)
    assert storm == pytest.approx([1.50, 1.52], abs=0.02)
    assert expected_largest([140, 160]) == pytest.approx([1.64, 1.66], abs=0.02)


def test_expected_largest_against_quadrature():
    # independent code: scipy's adaptive quadrature; one wave: the mean wave, sqrt(2 pi)/4 Hs
    assert expected_largest(1) == pytest.approx(np.sqrt(2 * np.pi) / 4, rel=1e-9)
    for n in (7, 400, 1e6):
        exact = quad(lambda z, n=n: 1 - (1 - np.exp(-8 * z**2)) ** n, 0, 4, limit=200)[0]
        found = expected_largest(n, exceedance=rayleigh_crest_exceedance)
        assert found == pytest.approx(exact, rel=1e-8)


def test_mode_and_median_of_the_largest():
    # exact: mode where P = 1/n, sqrt(ln n / 2) = 1.85846; median 1.90717 for 1000 waves
    assert rayleigh_height_exceedance(1.85846) == pytest.approx(1e-3, rel=1e-4)
    assert rayleigh_largest_quantile(0.5, 1000) == pytest.approx(1.90717, abs=1e-5)
    below = 1 - largest_exceedance(rayleigh_height_exceedance(1.7), 250)
    assert rayleigh_largest_quantile(below, 250) == pytest.approx(1.7, rel=1e-10)


@pytest.mark.parametrize(("n", "p"), [(100, 0.0330), (500, 0.1544), (1000, 0.2850), (3000, 0.6345)])
def test_twice_hs_among_n_rayleigh_waves(n, p):
    # exact: 1 - (1 - exp(-8))^n
    assert largest_exceedance(rayleigh_height_exceedance(2.0), n) == pytest.approx(p, abs=1e-4)


def test_largest_exceedance_limits():
    # exact: n p for tiny p, far below rounding of 1 - p; certain stays certain; no wave, none
    assert largest_exceedance(1e-20, 12.5) == pytest.approx(1.25e-19, rel=1e-12)
    assert largest_exceedance([0.0, 0.5, 1.0], 1) == pytest.approx([0, 0.5, 1])
    assert largest_exceedance([0.5, 1.0], 0).tolist() == [0, 0]
    # by hand: two waves
    assert largest_exceedance(0.3, 2) == pytest.approx(0.51)


@pytest.mark.parametrize(
    ("r", "one_in"), [(0.6, 22026), (0.65, 16268), (0.7, 12231), (0.75, 9347), (1, 2981)]
)
def test_correlated_heights(r, one_in):
    # published: Naess 1985; Tayfun 1990, exp(-4 z^2 / (1 + r)) (form from memory, numbers exact)
    assert 1 / correlated_height_exceedance(2.0, r) == pytest.approx(one_in, abs=0.6)


@pytest.mark.parametrize(
    ("s1", "directional", "p"),
    [
        (0.05, False, 4.077e-5),
        (0.05, True, 2.967e-5),
        (0.06, False, 6.122e-5),
        (0.06, True, 4.255e-5),
    ],
)
def test_forristall_crests(s1, directional, p):
    # published: Forristall 2000, J. Phys. Oceanogr. 30 (coefficients from memory, numbers
    # recomputed), deep water: Ur = 0
    tm01 = np.sqrt(2 * np.pi * 5 / (9.81 * s1))
    found = forristall_crest_exceedance(1.25, hs=5.0, tm01=tm01, directional=directional)
    assert found == pytest.approx(p, rel=2e-4)


def test_forristall_crests_by_depth():
    # exact: no steepness, Rayleigh (0.3536 is a rounded 1/sqrt 8: 0.4 %); by hand in 20 m:
    # Hs = 5 m, T1 = 10 s, k1 = 0.051826, S1 = 0.032024, Ur = 0.232698
    calm = forristall_crest_exceedance(1.25, hs=1e-9, tm01=10.0)
    assert calm == pytest.approx(rayleigh_crest_exceedance(1.25), rel=4e-3)
    found = forristall_crest_exceedance(1.0, hs=5.0, tm01=10.0, depth=20.0, directional=False)
    a, b = 0.3536 + 0.2892 * 0.032024 + 0.1060 * 0.232698, 2 - 2.1597 * 0.032024
    b += 0.0968 * 0.232698**2
    assert found == pytest.approx(np.exp(-((1 / a) ** b)), rel=1e-4)
    found = forristall_crest_exceedance(1.0, hs=5.0, tm01=10.0, depth=20.0)
    a = 0.3536 + 0.2568 * 0.032024 + 0.0800 * 0.232698
    b = 2 - 1.7912 * 0.032024 - 0.5302 * 0.232698 + 0.284 * 0.232698**2
    assert found == pytest.approx(np.exp(-((1 / a) ** b)), rel=1e-4)


def test_tayfun_crests():
    # published: Tayfun 1980 (form from memory, numbers exact)
    assert tayfun_crest_exceedance(5, 0.05) == pytest.approx(4.0995e-5, rel=2e-5)
    assert tayfun_crest_exceedance(5, 0.1) == pytest.approx(1.8808e-4, rel=3e-5)
    # exact: Rayleigh without steepness; z in standard deviations is 4 times the ratio to Hs
    assert tayfun_crest_exceedance(5, 0) == pytest.approx(rayleigh_crest_exceedance(1.25))
    assert tayfun_crest_exceedance(5, 1e-9) == pytest.approx(np.exp(-12.5), rel=1e-6)


def test_excess_kurtosis_from_bfi():
    # published: Mori & Janssen 2006, pi / sqrt 3 BFI^2
    bfi = np.array([0.4035, 0.6341, 0.8712])
    assert excess_kurtosis_from_bfi(bfi) == pytest.approx([0.295, 0.729, 1.377], abs=5e-4)


@pytest.mark.parametrize("kappa40", [0.0, 0.3, 1.0, 2.5])
def test_mori_janssen_is_a_distribution_with_its_kurtosis(kappa40):
    # exact: all waves exceed 0; the elevation of a narrow-band sea has fourth moment
    # E[R^4] 3/8 = 3 + kappa40 and variance E[R^2]/2 = 1, R = 2 z the envelope in sigma
    assert mori_janssen_height_exceedance(0.0, kappa40) == 1

    def envelope_moment(power):
        return quad(
            lambda r: power * r ** (power - 1) * mori_janssen_height_exceedance(r / 2, kappa40),
            0,
            14,
            epsabs=1e-12,
        )[0]

    assert envelope_moment(2) / 2 == pytest.approx(1, rel=1e-9)
    assert envelope_moment(4) * 3 / 8 == pytest.approx(3 + kappa40, rel=1e-9)


def test_mori_janssen_freak_wave():
    # published: Mori & Janssen 2006, 1 - exp(-N e^-8 (1 + 8 kappa40)) (from memory)
    for kappa40, n in ((0.1, 100), (0.5, 1000)):
        single = mori_janssen_height_exceedance(2.0, kappa40)
        expected = 1 - np.exp(-n * np.exp(-8) * (1 + 8 * kappa40))
        assert largest_exceedance(single, n) == pytest.approx(expected, rel=1e-3)


EXCEEDANCES = [
    rayleigh_height_exceedance,
    rayleigh_crest_exceedance,
    forristall_height_exceedance,
    lambda z: forristall_crest_exceedance(z, hs=6.0, tm01=9.0, depth=40.0),
    lambda z: forristall_crest_exceedance(z, hs=6.0, tm01=9.0, directional=False),
    lambda z: tayfun_crest_exceedance(4 * z, 0.06),
    lambda z: correlated_height_exceedance(z, 0.7),
    lambda z: mori_janssen_height_exceedance(z, 0.4),
]


@pytest.mark.parametrize("exceedance", EXCEEDANCES)
def test_every_exceedance_is_one(exceedance):
    # exact: 1 at and below zero, never rising, 0 in the end
    z = np.linspace(-1, 8, 400)
    p = exceedance(z)
    assert (p[z <= 0] == 1).all()
    assert (np.diff(p) <= 0).all()
    assert p[-1] < 1e-15
    assert np.isnan(exceedance(np.nan))


def test_refused_parameters():
    with pytest.raises(InputError, match="hs and tm01"):
        forristall_crest_exceedance(1.0, hs=0.0, tm01=5.0)
    with pytest.raises(InputError, match="mu"):
        tayfun_crest_exceedance(1.0, -0.1)
    with pytest.raises(InputError, match="r must"):
        correlated_height_exceedance(1.0, 1.2)
    with pytest.raises(InputError, match="probability"):
        largest_exceedance(1.1, 3)
    with pytest.raises(InputError, match="n_waves"):
        largest_exceedance(0.1, -1)
    with pytest.raises(InputError, match="probability"):
        rayleigh_largest_quantile(1.0, 5)
    with pytest.raises(InputError, match="n_waves"):
        rayleigh_largest_quantile(0.5, 0)
    with pytest.raises(InputError, match="hs_error"):
        predictive_base_rate(2.0, 100, -0.1)


def test_predictive_rate_of_a_known_height():
    # exact: without sampling error, the plain value
    ratio = np.array([-1.0, 0.5, 1.0, 2.0, 2.8])
    plain = largest_exceedance(forristall_height_exceedance(ratio), 120)
    assert predictive_base_rate(ratio, 120, 0.0) == pytest.approx(plain, rel=1e-12)
    assert predictive_base_rate(ratio, 120, 1e-7) == pytest.approx(plain, rel=1e-9)


@pytest.mark.parametrize("error", [0.03, 0.06, 0.11, 0.15])
@pytest.mark.parametrize("n", [3, 100, 2000])
def test_predictive_rate_against_quadrature(error, n):
    # independent code: scipy's adaptive quadrature over the stated lognormal law
    def integrand(x, ratio):
        p = rayleigh_height_exceedance(ratio * np.exp(-error * (error + x)))
        return float(largest_exceedance(p, n)) * np.exp(-(x**2) / 2) / np.sqrt(2 * np.pi)

    ratio = np.array([1.0, 1.6, 2.0, 2.4])
    exact = [
        quad(integrand, -12, 12, args=(z,), limit=300, epsabs=0, epsrel=1e-9)[0] for z in ratio
    ]
    found = predictive_base_rate(ratio, n, error, exceedance=rayleigh_height_exceedance)
    assert found == pytest.approx(exact, rel=1e-4)


@pytest.mark.parametrize(("gamma", "periods"), [(1, 32), (3.3, 32), (3.3, 120), (7, 120)])
def test_predictive_rate_of_simulated_records(gamma, periods):
    # exact: the periodogram ordinates of a Gaussian record are independent and exponential, so
    # its measured variance can be drawn; the rate is the mean over it. By Monte Carlo
    rng = np.random.default_rng(6)
    f = np.arange(1, 6 * periods) / periods
    density = jonswap(f, hs=4.0, tp=1.0, gamma=gamma)
    share = density / density.sum()
    measured = np.concatenate([rng.exponential(size=(5000, f.size)) @ share for _ in range(12)])
    error = hs_sampling_error(Spectrum(f, density), periods)
    for ratio in (1.5, 2.0, 2.2):
        rates = largest_exceedance(forristall_height_exceedance(ratio * measured**0.5), 100)
        assert predictive_base_rate(ratio, 100, error) == pytest.approx(rates.mean(), rel=0.06)


def test_predictive_rate_broadcasts():
    found = predictive_base_rate(np.array([1.5, 2.0])[:, None], [10, 100, 1000], 0.08)
    assert found.shape == (2, 3)
    assert found[1, 2] == predictive_base_rate(2.0, 1000, 0.08)
    # an uncertain Hs makes what is rare less rare
    assert predictive_base_rate(2.0, 100, 0.06) > 1.8 * predictive_base_rate(2.0, 100, 0.0)
