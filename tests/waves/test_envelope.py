"""Envelope and bound waves against exact second-order solutions, Stokes waves and set-down."""

from functools import partial

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from forecaster.errors import InputError
from forecaster.waves.envelope import (
    SAMPLES_PER_PERIOD,
    BoundWaves,
    continued,
    covered,
    elevation_of,
    free_envelope,
)
from forecaster.waves.linear import GRAVITY, group_velocity, wavenumber
from forecaster.waves.propagate import ForwardRun
from forecaster.waves.spectrum import jonswap

TURN = 2 * np.pi
OMEGA0 = TURN / 10
K0 = OMEGA0**2 / GRAVITY
DT = 10 / 16


def zeta_of(times, omega, amplitude):
    """Analytic signal sum a_j exp(-i omega_j t)."""
    return np.exp(-1j * np.multiply.outer(times, omega)) @ amplitude


def second_order(times, omega, amplitude):
    """Deep-water bound waves pair by pair: (ki + kj)/2 at the sum, -|ki - kj|/2 at the difference.

    Longuet-Higgins 1963, J. Fluid Mech. 17, 459, eqs 3.7-3.8, waves of one direction: an
    independent double sum.
    """
    k = omega**2 / GRAVITY
    total = np.zeros(np.size(times))
    for i in range(len(omega)):
        for j in range(len(omega)):
            both = amplitude[i] * amplitude[j] * np.exp(-1j * (omega[i] + omega[j]) * times)
            total += 0.25 * (k[i] + k[j]) * both.real
            if i != j:
                beat = (
                    amplitude[i] * amplitude[j].conj() * np.exp(-1j * (omega[i] - omega[j]) * times)
                )
                total += -0.25 * abs(k[i] - k[j]) * beat.real
    return total


def sea(steepness, seed, periods=80, low=0.6, high=1.9, bound=True):
    """(times, elevation, components) of a second-order sea, not periodic in its `periods`."""
    generator = np.random.default_rng(seed)
    omega = OMEGA0 * (np.linspace(low, high, 60) + generator.uniform(-0.01, 0.01, 60))
    density = jonswap(omega / TURN, hs=1.0, tp=10.0, gamma=3.3)
    parts = generator.standard_normal((2, 60))
    amplitude = np.sqrt(density / density.sum()) * (parts[0] + 1j * parts[1])
    amplitude *= 2 * steepness / K0 / 4
    times = DT * np.arange(periods * 16)
    elevation = zeta_of(times, omega, amplitude).real
    if bound:
        elevation = elevation + second_order(times, omega, amplitude)
    return times, elevation, (omega, amplitude)


def recovered(elevation, dt=DT, **options):
    """Analytic signal of the free waves on the envelope's own grid, and its times."""
    envelope = free_envelope(elevation, dt, omega0=OMEGA0, **options)
    return envelope.values * np.exp(-1j * envelope.omega0 * envelope.times), envelope.times


# ---- bound waves -------------------------------------------------------------------------------


@pytest.mark.parametrize("kh", [np.inf, 3.0, 1.5, 1.0])
def test_second_harmonic_of_a_regular_wave(kh):
    # published: Stokes 1847; Dean & Dalrymple 1991, eq. 11.38: eta2 =
    # (k a^2 / 4) cosh kh (2 + cosh 2kh) / sinh^3 kh cos 2 theta; deep k a^2 / 2
    depth = kh / (K0 / np.tanh(kh))
    k = float(wavenumber(OMEGA0, depth))
    n, a = 512, 1.3
    t = 40 / n * 8 * np.arange(n)  # 32 periods
    bound = BoundWaves(n, t[1], omega0=OMEGA0, depth=depth)(a * np.exp(-1j * OMEGA0 * t))
    factor = 2.0
    if np.isfinite(kh):
        factor = np.cosh(kh) * (2 + np.cosh(2 * kh)) / np.sinh(kh) ** 3
    np.testing.assert_allclose(bound, 0.25 * k * a**2 * factor * np.cos(2 * OMEGA0 * t), atol=1e-12)


@pytest.mark.parametrize("pair", [(0.9, 1.0), (1.0, 1.5), (0.5, 2.0)])
def test_set_down_and_sum_wave_of_a_pair(pair):
    # published: Longuet-Higgins 1963, deep water: -|k1 - k2| a1 a2 / 2 and (k1 + k2) a1 a2 / 2
    n, (a1, a2) = 1024, (0.7, 0.4)
    t = 200 / n * np.arange(n)
    w1, w2 = OMEGA0 * np.array(pair)
    k1, k2 = w1**2 / GRAVITY, w2**2 / GRAVITY
    found = BoundWaves(n, t[1], omega0=OMEGA0)(
        a1 * np.exp(-1j * w1 * t) + a2 * np.exp(-1j * w2 * t)
    )
    expected = (
        0.5 * k1 * a1**2 * np.cos(2 * w1 * t)
        + 0.5 * k2 * a2**2 * np.cos(2 * w2 * t)
        + 0.5 * (k1 + k2) * a1 * a2 * np.cos((w1 + w2) * t)
        - 0.5 * abs(k1 - k2) * a1 * a2 * np.cos((w1 - w2) * t)
    )
    np.testing.assert_allclose(found, expected, atol=1e-12)


def test_bound_waves_of_a_random_sea_are_the_double_sum():
    # published: Longuet-Higgins 1963, summed pair by pair apart from the package
    n, generator = 512, np.random.default_rng(2)
    t = 320 / n * np.arange(n)  # period 32 waves
    omega = OMEGA0 * np.arange(16, 64) / 32
    amplitude = np.array([1, 1j]) @ generator.standard_normal((2, omega.size))
    found = BoundWaves(n, t[1], omega0=OMEGA0)(zeta_of(t, omega, amplitude))
    np.testing.assert_allclose(found, second_order(t, omega, amplitude), atol=1e-10)


def set_down(depth, share):
    """Amplitude of the difference wave per a1 a2, for frequencies 1 +- share of the carrier."""
    n = 4096
    t = TURN / OMEGA0 / share / n * np.arange(n)
    w1, w2 = OMEGA0 * (1 - share), OMEGA0 * (1 + share)
    zeta = np.exp(-1j * w1 * t) + np.exp(-1j * w2 * t)
    bound = BoundWaves(n, t[1], omega0=OMEGA0, depth=depth)(zeta)
    return 2 * (bound * np.exp(1j * (w2 - w1) * t)).mean().real


@pytest.mark.parametrize("kh", [0.8, 1.5, 3.0])
def test_set_down_under_long_groups(kh):
    # published: Longuet-Higgins & Stewart 1962, eq. 3.13: long groups carry
    # -(g a^2 / 2)(2 n - 1/2) / (g h - cg^2), here a^2 = 2 + 2 cos(2 share omega0 t)
    depth = kh / (K0 / np.tanh(kh))
    n = 0.5 * (1 + 2 * kh / np.sinh(2 * kh))
    cg = n * GRAVITY / OMEGA0 * np.tanh(kh)
    expected = -GRAVITY * (2 * n - 0.5) / (GRAVITY * depth - cg**2)
    assert set_down(depth, 0.005) == pytest.approx(expected, rel=0.01)


def test_set_down_in_shallow_water():
    # published: Longuet-Higgins & Stewart 1962 (from memory): shallow limit
    # -(3/4) g a^2 / (h^2 omega^2); the expansion is in (kh)^2
    kh = 0.1
    depth = kh / (K0 / np.tanh(kh))
    expected = -2 * 0.75 * GRAVITY / (depth * OMEGA0) ** 2
    assert set_down(depth, 0.0005) == pytest.approx(expected, rel=0.02)


def test_finite_depth_set_down_becomes_the_deep_one():
    # exact limit for narrow pairs; the narrow-band form differs by (k1 - k2)/(4 k0)
    share = 0.01
    deep, finite = set_down(np.inf, share), set_down(60 / K0, share)
    assert deep == pytest.approx(-0.5 * 4 * share * K0, rel=1e-9)
    assert finite == pytest.approx(deep, rel=0.03)


@settings(max_examples=20)
@given(angle=st.floats(0, TURN), shift=st.integers(0, 255), depth=st.sampled_from([np.inf, 40.0]))
def test_bound_waves_are_quadratic_and_have_no_origin(angle, shift, depth):
    # exact: zeta -> zeta e^{i angle} turns the sum part only; a shift in time shifts the result
    t = 160 / 256 * np.arange(256)
    omega, amplitude = OMEGA0 * np.arange(10, 28) / 16, np.random.default_rng(4).standard_normal(18)
    zeta = zeta_of(t, omega, amplitude)
    bound = BoundWaves(256, t[1], omega0=OMEGA0, depth=depth)
    np.testing.assert_allclose(bound(np.roll(zeta, shift)), np.roll(bound(zeta), shift), atol=1e-11)
    np.testing.assert_allclose(bound(3 * zeta), 9 * bound(zeta), atol=1e-10)
    slow = 0.5 * (bound(zeta) + bound(1j * zeta))  # what a quarter turn does not change
    turned = zeta * np.exp(1j * angle)
    np.testing.assert_allclose(0.5 * (bound(turned) + bound(1j * turned)), slow, atol=1e-11)


# ---- from record to envelope -------------------------------------------------------------------


@pytest.mark.parametrize("steepness", [0.02, 0.05, 0.09])
def test_free_waves_of_a_second_order_sea_come_back(steepness):
    # exact: the record is free waves plus their second-order waves, summed pair by pair.  What is
    # left comes from the ends of the record and does not depend on steepness
    times, elevation, (omega, amplitude) = sea(steepness, 6)
    zeta, at = recovered(elevation)
    inner = (at > times[0] + 80) & (at < times[-1] - 80)
    true = zeta_of(at[inner], omega, amplitude)
    error = np.abs(zeta[inner] - true)
    scale = np.sqrt(np.mean(np.abs(true) ** 2))
    assert np.sqrt(np.mean(error**2)) < 0.004 * scale
    # without removal of bound waves the error is about the steepness
    plain, _ = recovered(elevation - second_order(times, omega, amplitude))
    with_bound_left = np.abs(plain[inner] - true)
    assert np.sqrt(np.mean(with_bound_left**2)) > 0.2 * steepness * scale


def fenton(theta, eps):
    """k times the elevation of a deep-water Stokes wave, eps = k H / 2.

    Fenton 1985, J. Waterw. Port Coast. Ocean Eng. 111, 216, eq. 12 with Table 1 at infinite depth.
    """
    c = [np.cos(j * theta) for j in range(6)]
    return (
        eps * c[1]
        + eps**2 / 2 * c[2]
        + 3 / 8 * eps**3 * (c[3] - c[1])
        + eps**4 / 3 * (c[2] + c[4])
        + eps**5 / 384 * (-422 * c[1] + 297 * c[3] + 125 * c[5])
    )


@pytest.mark.parametrize("eps", [0.05, 0.1])
def test_a_stokes_wave_has_a_constant_envelope_to_third_order(eps):
    # published: Fenton 1985 (from memory): first harmonic eps - 3/8 eps^3 - 422/384 eps^5.  By
    # hand: removing the second-order wave leaves (1/3 + 3/8) eps^4 at twice the frequency, which
    # modulates the envelope by 17/24 eps^3
    t = DT * np.arange(300 * 16)
    envelope = free_envelope(fenton(-OMEGA0 * t, eps) / K0, DT, omega0=OMEGA0)
    inner = (envelope.times > 900) & (envelope.times < 2100)
    first = eps - 3 / 8 * eps**3 - 422 / 384 * eps**5
    ratio = K0 * np.abs(envelope.values[inner]) / first
    assert ratio.mean() == pytest.approx(1, abs=0.2 * eps**3)
    assert np.sqrt(2) * ratio.std() == pytest.approx(17 / 24 * eps**3, rel=0.05)


@pytest.mark.parametrize("depth", [np.inf, 40.0])
def test_elevation_goes_out_and_comes_back(depth):
    # exact: bound waves are taken out and put back by the same relations
    t = DT * np.arange(80 * 16)
    omega, amplitude = sea(0.06, 9)[2]
    zeta = zeta_of(t, omega, amplitude)
    grid = BoundWaves(t.size, DT, omega0=OMEGA0, depth=depth)
    envelope = free_envelope(zeta.real + grid(zeta), DT, omega0=OMEGA0, depth=depth)
    elevation, step = elevation_of(envelope, refine=8)
    inner = (t > 80) & (t < 720)
    back = np.interp(t[inner], envelope.start + step * np.arange(elevation.size), elevation)
    truth = (zeta.real + grid(zeta))[inner]
    assert np.std(back - truth) < 0.01 * np.std(truth)


def test_elevation_of_refines_by_interpolation():
    # exact: a finer grid holds the coarser one
    _, elevation, _ = sea(0.06, 3)
    envelope = free_envelope(elevation, DT, omega0=OMEGA0)
    coarse, step = elevation_of(envelope, refine=2)
    fine, half = elevation_of(envelope, refine=4)
    assert step == 2 * half == envelope.dt / 2
    np.testing.assert_allclose(fine[::2], coarse, atol=2e-4 * coarse.std())


@pytest.mark.parametrize("samples_per_period", [4, 8, 16, 20])
def test_sampling_does_not_matter(samples_per_period):
    # exact for waves below half the sampling frequency
    _, _, (omega, amplitude) = sea(0.03, 12, low=0.6, high=1.6)
    fine = zeta_of(DT / 2 * np.arange(80 * 32), omega, amplitude).real
    dt = 10 / samples_per_period
    coarse = zeta_of(dt * np.arange(80 * samples_per_period), omega, amplitude).real
    (reference, at), (zeta, times) = recovered(fine, DT / 2), recovered(coarse, dt)
    inner = (at > 80) & (at < 720)
    # the two grids differ: band-limited interpolation (Shannon 1949)
    found = np.sinc((at[inner][:, None] - times) / (times[1] - times[0])) @ zeta.real
    scale = reference.real[inner].std()
    assert np.std(found - reference.real[inner]) < 0.02 * scale


@pytest.mark.parametrize("start", [0.0, 1234.5])
def test_time_of_the_record_is_time_of_the_envelope(start):
    # exact: a crest stays where it is
    t = DT * np.arange(60 * 16)
    group = np.exp(-(((t - 300) / 30) ** 2))
    elevation = 1e-3 * group * np.cos(OMEGA0 * (t - 300))  # linear
    envelope = free_envelope(elevation, DT, omega0=OMEGA0, start=start)
    peak = np.argmax(np.abs(envelope.values))
    assert envelope.times[peak] == pytest.approx(start + 300, abs=envelope.dt)
    phase = envelope.values[peak] * np.exp(-1j * envelope.omega0 * envelope.times[peak])
    ahead = OMEGA0 * (envelope.times[peak] - start - 300)
    assert np.angle(phase * np.exp(1j * ahead)) == pytest.approx(0, abs=0.02)
    assert envelope.dt <= 10 / SAMPLES_PER_PERIOD * 1.001
    turns = envelope.omega0 * envelope.dt * envelope.values.size / TURN
    assert turns == pytest.approx(round(turns), abs=1e-9)


def test_margin_is_kept_empty():
    _, elevation, _ = sea(0.05, 3)
    envelope = free_envelope(elevation, DT, omega0=OMEGA0, margin=500.0)
    assert envelope.start == pytest.approx(-500, abs=DT)
    assert envelope.times[-1] >= 799 + 499
    size = np.abs(envelope.values)
    far = (envelope.times < -150) | (envelope.times > 950)
    assert size[far].max() < 0.02 * size.max()


def test_refuses_gaps_and_coarse_sampling():
    _, elevation, _ = sea(0.05, 3)
    broken = elevation.copy()
    broken[7] = np.nan
    with pytest.raises(InputError, match="gaps"):
        free_envelope(broken, DT, omega0=OMEGA0)
    with pytest.raises(InputError, match="coarse"):
        free_envelope(elevation, 10 / 3.5, omega0=OMEGA0)
    free_envelope(elevation[::4], 2.5, omega0=OMEGA0)  # 4 samples per period are enough


# ---- the fresh end -----------------------------------------------------------------------------


def autoregressive(n, seed, first=1.7, second=-0.95):
    """An AR(2) row x_t = first x_{t-1} + second x_{t-2} + e_t."""
    e = np.random.default_rng(seed).standard_normal(n)
    x = np.zeros(n)
    for i in range(2, n):
        x[i] = first * x[i - 1] + second * x[i - 2] + e[i]
    return x


def test_conditional_mean_of_an_autoregressive_row():
    # exact: the conditional mean of AR(2) is its own recursion from the last two values
    # (Brockwell & Davis 1991, section 5.1); the coefficients are estimated from 20 000 values,
    # and 0.1 % of white noise is assumed
    x = autoregressive(20000, 1)
    found = continued(x, 1.0, period=12.4, samples=15)
    expected = [x[-2], x[-1]]
    for _ in range(15):
        expected.append(1.7 * expected[-1] - 0.95 * expected[-2])
    np.testing.assert_allclose(found, expected[2:], atol=0.12 * x.std())


def test_first_continued_value_is_the_dense_conditional_mean():
    # independent code: C(future, past) C(past, past)^-1 past by a dense solve
    _, x, _ = sea(0.06, 21)
    period, order = 10.0, 192
    found = continued(x, DT, period=period, samples=1)
    n = x.size
    c = np.array([x[: n - lag] @ x[lag:] for lag in range(order + 1)]) / n
    c[0] *= 1.001
    lags = np.abs(np.subtract.outer(np.arange(order), np.arange(order)))
    weights = np.linalg.solve(c[lags], c[np.arange(order, 0, -1)])
    assert found[0] == pytest.approx(weights @ x[-order:], rel=1e-6)


def test_a_sinusoid_continues():
    # exact in the limit of a long record: a sinusoid is its own conditional mean; the sample
    # autocovariance of 100 periods fades by lag / n
    t = DT * np.arange(100 * 16)
    later = t[-1] + DT * np.arange(1, 33)
    found = continued(np.cos(OMEGA0 * t + 0.4), DT, period=10.0, samples=32)
    np.testing.assert_allclose(found, np.cos(OMEGA0 * later + 0.4), atol=0.1)


def test_a_continuation_follows_the_sea_and_then_forgets():
    # independent: the sea itself goes on; a conditional mean errs less than no forecast (1), and
    # fades.  Measured: 0.04 one sample ahead, 0.33 a third of a period ahead
    errors = []
    for seed in range(12):
        _, whole, _ = sea(0.06, seed, periods=110, bound=False)
        x, truth = whole[: 70 * 16], whole[70 * 16 :]
        found = continued(x, DT, period=10.0, samples=40 * 16)
        errors.append(((found - truth) / x.std()) ** 2)
        assert np.abs(found[-80:]).max() < 0.2 * x.std()
    error = np.sqrt(np.mean(errors, axis=0))
    assert error[0] < 0.06
    assert error[4] < 0.45
    assert error[:12].max() < 0.9
    assert error[-160:].mean() == pytest.approx(1, abs=0.25)


def test_a_flat_record_continues_flat():
    # exact
    assert (continued(np.zeros(500), DT, period=10.0, samples=20) == 0).all()


def test_continuation_is_linear_in_the_record():
    # exact
    _, x, _ = sea(0.06, 23)
    part = partial(continued, dt=DT, period=10.0, samples=40)
    np.testing.assert_allclose(part(-2.5 * x), -2.5 * part(x), atol=1e-9)


def record_that_ends_in_an_extreme_wave(age):
    """A record whose largest crest comes `age` seconds before its end, its continuation, where."""
    times, _, (omega, amplitude) = sea(0.07, 31, periods=120)
    crest = 700.0
    hs = 4 * zeta_of(times, omega, amplitude).real.std()
    density = jonswap(omega / TURN, hs=1.0, tp=10.0, gamma=3.3)
    focused = density / density.sum() * np.exp(1j * omega * crest)
    amplitude = 0.6 * amplitude + 0.95 * hs * focused
    elevation = zeta_of(times, omega, amplitude).real + second_order(times, omega, amplitude)
    n = round((crest + age) / DT) + 1
    return elevation[:n], elevation, crest, hs


@pytest.mark.parametrize("age", [5.0, 10.0, 20.0])
def test_an_extreme_wave_at_the_end_of_the_record_survives(age):
    # exact: the same sea recorded to long after the wave
    cut, whole, crest, hs = record_that_ends_in_an_extreme_wave(age)
    assert np.abs(whole).max() > 0.9 * hs  # an extreme wave it is
    found, full = (free_envelope(e, DT, omega0=OMEGA0) for e in (cut, whole))

    def highest(envelope, around, width=15.0):
        near = np.abs(envelope.times - around) < width
        return 2 * np.abs(envelope.values[near]).max()

    assert highest(full, crest) > 1.8 * hs
    assert highest(found, crest) == pytest.approx(highest(full, crest), rel=0.1)
    # 5 peak wavelengths downwave
    distance = 5 * TURN / K0
    arrival = crest + distance / float(group_velocity(OMEGA0))
    (late,), (truth,) = (
        ForwardRun(e, equation="dysthe-pair").march(distance) for e in (found, full)
    )
    assert highest(late, arrival, 40.0) == pytest.approx(highest(truth, arrival, 40.0), rel=0.15)


# ---- coverage ----------------------------------------------------------------------------------


def share_covered(times, distance, *, frequency, density, **options):
    """Share of the energy that is covered at each time."""
    return covered(times, distance, frequency=frequency, **options) @ (density / density.sum())


@pytest.mark.parametrize("distance", [0.0, 500.0, 3000.0])
def test_coverage_of_one_frequency_is_a_box(distance):
    # exact: energy of frequency f arrives distance / (g / 4 pi f) later (deep water)
    frequency = np.array([0.1, 0.11])
    travel = distance * 4 * np.pi * 0.1 / GRAVITY
    at = travel + np.array([-1.0, 1.0, 599.0, 601.0])
    found = share_covered(
        at, distance, frequency=frequency, density=np.array([1.0, 0.0]), start=0.0, end=600.0
    )
    np.testing.assert_array_equal(found, [0, 1, 1, 0])


def test_coverage_of_a_flat_spectrum():
    # by hand: at time t the covered frequencies are g (t - end) / (4 pi x) .. g t / (4 pi x)
    frequency = np.linspace(0.08, 0.14, 60001)
    distance, end = 3000.0, 300.0
    times = np.linspace(200, 900, 29)
    low = np.clip(GRAVITY * (times - end) / (4 * np.pi * distance), 0.08, 0.14)
    high = np.clip(GRAVITY * times / (4 * np.pi * distance), 0.08, 0.14)
    found = share_covered(
        times, distance, frequency=frequency, density=np.ones(60001), start=0.0, end=end
    )
    np.testing.assert_allclose(found, (high - low) / 0.06, atol=1e-4)
    assert found.max() < 1 and found.min() == 0


def test_coverage_at_the_sensor_is_the_record_itself():
    # exact
    frequency = np.linspace(0.005, 0.5, 100)
    density = jonswap(frequency, hs=2.0, tp=10.0)
    found = share_covered(
        np.array([-0.1, 0.0, 50.0, 100.0, 100.1]), 0.0,
        frequency=frequency, density=density, start=0.0, end=100.0,
    )  # fmt: skip
    np.testing.assert_allclose(found, [0, 1, 1, 1, 0])


@settings(max_examples=30)
@given(
    distance=st.floats(1, 1e4),
    depth=st.sampled_from([np.inf, 50.0, 15.0]),
    shift=st.floats(-1e4, 1e4),
)
def test_coverage_is_a_share_and_moves_with_the_record(distance, depth, shift):
    # exact: a share; a longer record covers more; times are relative
    frequency = np.linspace(0.05, 0.3, 101)
    density = jonswap(frequency, hs=2.0, tp=10.0)
    times = np.linspace(0.1237, 3000, 41)
    part = partial(share_covered, frequency=frequency, density=density, depth=depth)
    found = part(times, distance, start=0.0, end=600.0)
    assert ((found >= 0) & (found <= 1 + 1e-12)).all()
    assert (part(times, distance, start=-100.0, end=700.0) >= found - 1e-12).all()
    moved = part(times + shift, distance, start=shift, end=600.0 + shift)
    # rounding may move one frequency of the grid over the edge of the record
    np.testing.assert_allclose(moved, found, atol=1.01 * density.max() / density.sum())
