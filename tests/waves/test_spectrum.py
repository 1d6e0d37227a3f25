"""Standard shapes, estimates and sea-state parameters against published and exact values."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from forecaster.datatypes import Spectrum
from forecaster.errors import InputError
from forecaster.waves.linear import angular_frequency, nonlinear_coefficient, wavenumber
from forecaster.waves.spectrum import (
    SHAPES,
    bandwidth,
    benjamin_feir_index,
    crest_trough_correlation,
    estimate_spectrum,
    gamma_from_hs_tp,
    goda_peakedness,
    hs_sampling_error,
    ittc,
    jonswap,
    jonswap_normaliser,
    mean_period_ratios,
    moment,
    noise_floor,
    peak_frequency,
    pierson_moskowitz,
    sea_state,
    two_peaked,
)

ALL = {"low": 0.0, "high": np.inf}


def wide(shape, **options):
    """A shape with fp = 1 Hz and Hs = 4 m (m0 = 1), resolved so far up that no tail is missing."""
    f = np.concatenate((np.linspace(0, 3, 30001), np.geomspace(3, 3e3, 20001)[1:]))
    return Spectrum(f, shape(f, hs=4.0, tp=1.0, **options))


def gaussian_sea(rng, *, rows, n, dt, gamma, hs=4.0, tp=1.0):
    """Random phases and amplitudes on a period four times the rows, which are cut from it."""
    f = np.fft.rfftfreq(4 * n, dt)
    amplitude = np.sqrt(jonswap(f, hs=hs, tp=tp, gamma=gamma) * f[1])
    z = rng.standard_normal((rows, f.size)) + 1j * rng.standard_normal((rows, f.size))
    return np.fft.irfft(amplitude * z * 2 * n, axis=1, n=4 * n)[:, :n]


# --- shapes -------------------------------------------------------------------------------------


def test_pierson_moskowitz_worked_example():
    # published: a classification society's formula guide, Pierson-Moskowitz section, sea of
    # Hs = 12 m, Tz = 10 s: Tp = 14.077 s, S(omega = 0.5) = 25.84 m^2 s, S(f = 0.0796) = 162.36
    tp = 10 * (5 * np.pi / 4) ** 0.25
    assert tp == pytest.approx(14.077, abs=5e-4)
    f = 0.5 / (2 * np.pi)
    density = pierson_moskowitz(f, hs=12.0, tp=tp)
    assert density == pytest.approx(162.36, rel=1e-4)
    assert density / (2 * np.pi) == pytest.approx(25.84, rel=1e-4)
    whole = Spectrum(*(lambda g: (g, pierson_moskowitz(g, hs=12.0, tp=tp)))(np.arange(0, 9, 1e-4)))
    assert moment(whole, 0) == pytest.approx(9.0, rel=1e-5)


def test_pierson_moskowitz_has_its_original_constants():
    # published: Pierson & Moskowitz 1964, S(omega) = 0.0081 g^2 omega^-5
    # exp(-0.74 (g / U omega)^4); alpha g^2 = (5/16) Hs^2 omega_p^4, 5/4 omega_p^4 = 0.74 (g/U)^4
    g, u = 9.81, 15.0
    omega_p = (0.8 * 0.74) ** 0.25 * g / u
    hs = np.sqrt(16 / 5 * 0.0081) * g / omega_p**2
    omega = np.linspace(0.3, 3, 50)
    expected = 0.0081 * g**2 * omega**-5 * np.exp(-0.74 * (g / (u * omega)) ** 4)
    density = pierson_moskowitz(omega / (2 * np.pi), hs=hs, tp=2 * np.pi / omega_p)
    assert density / (2 * np.pi) == pytest.approx(expected, rel=1e-12)


def test_pierson_moskowitz_period_ratios():
    # exact: moments of x^-5 exp(-5/4 x^-4) are gamma functions
    sea = wide(pierson_moskowitz)
    m = {order: moment(sea, order) for order in (-1, 0, 1, 2)}
    assert np.sqrt(m[0] / m[2]) == pytest.approx(0.710371, rel=1e-5)
    assert m[0] / m[1] == pytest.approx(0.771771, rel=1e-5)
    assert m[-1] / m[0] == pytest.approx(0.857223, rel=1e-5)
    assert goda_peakedness(sea, **ALL) == pytest.approx(2.0, rel=1e-5)


@pytest.mark.parametrize(
    ("gamma", "normaliser"), [(1, 1.0), (2, 0.80281), (3.3, 0.65576), (5, 0.53809), (7, 0.44940)]
)
def test_jonswap_normaliser(gamma, normaliser):
    # independent code: 1 / integral by adaptive quadrature; definition of Hasselmann et al. 1973
    at_peak = jonswap(1.0, hs=4.0, tp=1.0, gamma=gamma)
    exact = at_peak / (5 * np.exp(-1.25) * gamma)
    assert exact == pytest.approx(normaliser, abs=6e-6)
    # published: DNV-RP-C205 3.5.5, 1 - 0.287 ln gamma, stated accuracy by quadrature
    slack = 0.003 if gamma <= 5 else 0.02
    assert jonswap_normaliser(gamma) == pytest.approx(exact, rel=slack)


@given(st.floats(1, 15), st.floats(0.1, 20), st.floats(0.5, 25))
@settings(max_examples=25)
def test_jonswap_has_the_height_asked_for(gamma, hs, tp):
    # exact by definition, Hs = 4 sqrt(m0); adaptive quadrature of scipy as independent code
    def density(f):
        return float(jonswap(f, hs=hs, tp=tp, gamma=gamma))

    ends = np.array([0.2, 0.7, 1.0, 1.3, 2.0, 8.0, 400.0]) / tp
    m0 = sum(quad(density, *pair, epsabs=0, epsrel=1e-11)[0] for pair in pairwise(ends))
    assert 4 * np.sqrt(m0) == pytest.approx(hs, rel=1e-8)


def test_jonswap_of_gamma_one_is_pierson_moskowitz():
    # exact: Hasselmann et al. 1973
    f = np.linspace(0, 1, 400)
    expected = pierson_moskowitz(f, hs=3.0, tp=8.0)
    assert jonswap(f, hs=3.0, tp=8.0, gamma=1) == pytest.approx(expected, rel=1e-14)


@pytest.mark.parametrize(
    ("gamma", "tm01", "tm02", "qp", "nu", "half_width"),
    [
        (1, 0.77177, 0.71037, 2.000, 0.4247, 0.288),
        (2, 0.80630, 0.74644, 2.484, None, None),
        (3.3, 0.83433, 0.77740, 3.143, 0.3896, 0.0951),
        (5, 0.85834, 0.80529, 3.916, None, None),
        (6, None, None, 4.318, 0.3584, 0.0750),
        (7, 0.87747, 0.82850, 4.685, None, None),
    ],
)
def test_jonswap_parameters(gamma, tm01, tm02, qp, nu, half_width):
    # independent code: quadrature of the published form over all frequencies; definitions of
    # Goda 1970 (Qp), Longuet-Higgins 1975 (nu)
    sea = wide(jonswap, gamma=gamma)
    m0, m1, m2 = (moment(sea, order) for order in (0, 1, 2))
    if tm01 is not None:
        assert m0 / m1 == pytest.approx(tm01, rel=2e-5)
        assert np.sqrt(m0 / m2) == pytest.approx(tm02, rel=2e-5)
        # published fits, DNV-RP-C205 3.5.5.4: 0.25 % for 1 <= gamma <= 7
        assert mean_period_ratios(gamma) == pytest.approx((tm01, tm02), rel=2.5e-3)
    assert goda_peakedness(sea, **ALL) == pytest.approx(qp, rel=2e-3)
    if nu is not None:
        assert bandwidth(sea, **ALL) == pytest.approx(nu, rel=1e-3)
        above_half = sea.frequency[sea.density >= sea.density.max() / 2]
        assert np.ptp(above_half) / 2 == pytest.approx(half_width, rel=0.01)


def test_cut_off_of_the_bandwidths():
    # independent code: quadrature; ending at 3 fp raises Qp by 3.1 % (PM), 2.0 % (gamma 3.3)
    for gamma, raised in ((1, 1.031), (3.3, 1.020)):
        sea = wide(jonswap, gamma=gamma)
        cut = goda_peakedness(sea, low=0, high=3.0)
        assert cut / goda_peakedness(sea, **ALL) == pytest.approx(raised, abs=1e-3)
        # by definition: the default band is 0.3 .. 3 times the peak frequency
        fp = peak_frequency(sea)
        assert goda_peakedness(sea) == goda_peakedness(sea, low=0.3 * fp, high=3 * fp)
        assert bandwidth(sea) == bandwidth(sea, low=0.3 * fp, high=3 * fp)


def test_ittc():
    # published: ITTC 7.5-02-07-01.1, A = 173 Hs^2 / T1^4, B = 691 / T1^4; by hand: rounding of
    # the constants, 4 sqrt(173 / (4 * 691)) = 1.0007
    hs, tp = 3.0, 9.0
    t1 = tp * (0.8 * 691) ** 0.25 / (2 * np.pi)
    omega = np.linspace(0.3, 4, 60)
    expected = 173 * hs**2 / t1**4 * omega**-5 * np.exp(-691 / t1**4 * omega**-4)
    density = ittc(omega / (2 * np.pi), hs=hs, tp=tp) / (2 * np.pi)
    assert density == pytest.approx(expected, rel=1e-12)
    sea = wide(ittc)
    assert 4 * np.sqrt(moment(sea, 0)) == pytest.approx(4 * 1.0007, rel=1e-4)
    assert moment(sea, 0) / moment(sea, 1) == pytest.approx(t1 / tp, rel=2e-3)


def test_ittc_form_of_jonswap_has_the_same_peak():
    # published: ITTC 7.5-02-07-01.1, JONSWAP of gamma 3.3 peaks at omega = 5.24 / T1 (memory)
    sea = wide(jonswap)
    t1 = moment(sea, 0) / moment(sea, 1)
    assert 2 * np.pi == pytest.approx(5.24 / t1, rel=1e-3)


def test_two_peaked_is_the_sum_of_its_systems():
    # exact by definition
    f = np.arange(0, 4, 5e-4)
    density = two_peaked(f, hs=3.0, tp=6.0, gamma=2.0, second_share=0.25, second_tp_ratio=2.0)
    expected = jonswap(f, hs=3 * np.sqrt(0.75), tp=6.0, gamma=2.0) + jonswap(f, hs=1.5, tp=12.0)
    assert density == pytest.approx(expected, rel=1e-13)
    assert 4 * np.sqrt(moment(Spectrum(f, density), 0)) == pytest.approx(3.0, rel=1e-4)
    alone = two_peaked(f, hs=3.0, tp=6.0, second_share=0.0)
    assert alone == pytest.approx(jonswap(f, hs=3.0, tp=6.0), rel=1e-14)


@pytest.mark.parametrize("name", SHAPES)
@given(scale=st.floats(0.01, 100), stretch=st.floats(0.1, 10))
@settings(max_examples=10)
def test_shapes_scale(name, scale, stretch):
    # exact: dimensional analysis, S = hs^2 tp F(f tp); no density at frequency 0
    f = np.linspace(0, 2, 50)
    base = SHAPES[name](f, hs=1.0, tp=5.0)
    assert base[0] == 0
    scaled = SHAPES[name](f / stretch, hs=scale, tp=5.0 * stretch)
    assert scaled == pytest.approx(base * scale**2 * stretch, rel=1e-8, abs=1e-200)


@pytest.mark.parametrize("name", SHAPES)
@pytest.mark.parametrize(
    ("frequency", "options", "match"),
    [
        (-0.1, {"hs": 1, "tp": 1}, "frequency"),
        (np.nan, {"hs": 1, "tp": 1}, "frequency"),
        (0.1, {"hs": -1, "tp": 1}, "hs"),
        (0.1, {"hs": 1, "tp": 0}, "tp"),
    ],
)
def test_shapes_refuse(name, frequency, options, match):
    with pytest.raises(InputError, match=match):
        SHAPES[name](frequency, **options)


def test_refused_options():
    with pytest.raises(InputError, match="gamma"):
        jonswap(0.1, hs=1, tp=5, gamma=0.9)
    with pytest.raises(InputError, match="gamma"):
        jonswap_normaliser(0.5)
    with pytest.raises(InputError, match="second_share"):
        two_peaked(0.1, hs=1, tp=5, second_share=1.5)
    with pytest.raises(InputError, match=r"gamma must lie in 1"):
        mean_period_ratios(8)
    with pytest.raises(InputError, match="positive"):
        gamma_from_hs_tp(0.0, 5.0)


@pytest.mark.parametrize(
    ("x", "gamma"), [(3.0, 5.0), (3.6, 5.0), (3.6 + 1e-9, 5.003), (4.4, 1.9937), (5.0, 1), (7, 1)]
)
def test_gamma_from_height_and_period(x, gamma):
    # published: DNV-RP-C205 3.5.5.5 (form from memory); exp(5.75 - 1.15 x) by hand
    assert gamma_from_hs_tp(4.0, 2 * x) == pytest.approx(gamma, abs=2e-4)


# --- estimates ----------------------------------------------------------------------------------


def test_estimate_against_scipy():
    # independent code: scipy.signal.welch, Hann taper, half overlap, segment means removed
    from scipy.signal import welch

    x = np.random.default_rng(3).standard_normal(1024) + 5
    ours = estimate_spectrum(x, 0.5, segment=64.0)
    f, density = welch(x, 2.0, nperseg=128, detrend="constant")
    assert ours.frequency == pytest.approx(f)
    assert ours.density == pytest.approx(density, rel=1e-12)


def test_degrees_of_freedom():
    # exact: a chi-square estimate of nu degrees of freedom has relative variance 2 / nu
    rng = np.random.default_rng(11)
    spectra = [estimate_spectrum(x, 1.0, segment=64) for x in rng.standard_normal((3000, 512))]
    density = np.array([s.density[3:-3] for s in spectra])
    scatter = (density.std(axis=0) / density.mean(axis=0)).mean()
    assert 2 / scatter**2 == pytest.approx(spectra[0].degrees_of_freedom, rel=0.03)
    # exact: white noise of unit variance has one-sided density 2 dt
    assert density.mean() == pytest.approx(2.0, rel=0.005)


def test_last_sample_counts():
    # a record that whole segments do not fill is used to its end
    x = np.zeros(150)
    x[-20:] = np.sin(np.arange(20))
    assert moment(estimate_spectrum(x, 1.0, segment=64), 0) > 0


def test_degenerate_records():
    with pytest.raises(InputError, match="16 samples"):
        estimate_spectrum(np.zeros(10), 1.0)
    with pytest.raises(InputError, match="gaps"):
        estimate_spectrum(np.full(100, np.nan), 1.0)
    with pytest.raises(InputError, match="dt"):
        estimate_spectrum(np.ones(100), 0.0)
    with pytest.raises(InputError, match="segment"):
        estimate_spectrum(np.ones(100), 1.0, segment=101.0)
    with pytest.raises(InputError, match="no energy"):
        sea_state(np.ones(100), 1.0)


def test_moment_of_a_straight_line():
    # by hand: S = f on 0 .. 4: m0 = 8, m0 over 1 .. 2.5 = (2.5^2 - 1)/2; m(-1) = 4 less the first
    # half step, whose value at 0 is left out
    f = np.linspace(0, 4, 4001)
    line = Spectrum(f, f)
    assert moment(line, 0) == pytest.approx(8)
    assert moment(line, 0, low=1, high=2.5) == pytest.approx(2.625)
    assert moment(line, -1) == pytest.approx(4 - 0.0005)
    assert moment(line, 0, low=5) == 0


def test_peak_frequency_of_a_symmetric_peak():
    # exact by symmetry, off the grid of frequencies
    f = np.arange(0, 1, 0.01)
    sea = Spectrum(f, np.exp(-0.5 * ((f - 0.3137) / 0.02) ** 2))
    assert peak_frequency(sea) == pytest.approx(0.3137, abs=1e-8)


def test_peakedness_of_a_narrow_gaussian():
    # exact: S = m0 N(fp, sigma): Qp = fp / (sigma sqrt(pi)), so delta = sigma / fp
    # (Janssen & Bidlot 2009)
    f = np.arange(0, 3, 1e-4)
    sea = Spectrum(f, 2.5 * np.exp(-0.5 * ((f - 1) / 0.05) ** 2))
    assert goda_peakedness(sea) == pytest.approx(1 / (0.05 * np.sqrt(np.pi)), rel=1e-6)
    # exact: nu of the same is sigma / fp
    assert bandwidth(sea) == pytest.approx(0.05, rel=1e-6)
    # exact: envelope of the autocovariance exp(-(2 pi sigma tau)^2 / 2) at tau = 1/2
    r = crest_trough_correlation(sea)
    assert r == pytest.approx(np.exp(-((np.pi * 0.05) ** 2) / 2), rel=1e-6)


@pytest.mark.parametrize(("gamma", "delta"), [(1, 0.2821), (3.3, 0.1795), (6, 0.1307)])
def test_bandwidth_of_the_benjamin_feir_index(gamma, delta):
    # independent code: delta = 1 / (Qp sqrt(pi)) (Janssen & Bidlot 2009), no cut-off
    qp = goda_peakedness(wide(jonswap, gamma=gamma), **ALL)
    assert np.sqrt(0.5) / benjamin_feir_index(1.0, qp) == pytest.approx(delta, rel=5e-3)


@pytest.mark.parametrize(("gamma", "bfi"), [(1, 0.4035), (3.3, 0.6341), (6, 0.8712)])
def test_benjamin_feir_index(gamma, bfi):
    # published definition, Janssen 2003: sqrt 2 kp sqrt(m0) / delta; by hand for Hs = 8 m,
    # Tp = 10 s in deep water, kp sqrt(m0) = 0.08049
    kp = wavenumber(2 * np.pi / 10)
    assert kp * 2 == pytest.approx(0.08049, rel=1e-4)
    qp = goda_peakedness(wide(jonswap, gamma=gamma), **ALL)
    assert benjamin_feir_index(kp * 8 / 2, qp) == pytest.approx(bfi, rel=5e-3)


@pytest.mark.parametrize("kph", [1.5, 2.0, 3.0, 6.0, 30.0])
def test_benjamin_feir_index_in_finite_depth(kph):
    # published: Janssen & Onorato 2007, factor -(cg/c)^2 g X / (k omega omega''); omega' and
    # omega'' here by central differences
    k, step = 0.05, 1e-5
    depth = kph / k
    below, omega, above = angular_frequency(k + step * np.array([-1, 0, 1]), depth)
    cg, curvature = (above - below) / (2 * step), (above - 2 * omega + below) / step**2
    factor = -((cg * k / omega) ** 2) * 9.81 * nonlinear_coefficient(kph) / (k * omega * curvature)
    deep = benjamin_feir_index(0.1, 3.0)
    assert benjamin_feir_index(0.1, 3.0, kph=kph) / deep == pytest.approx(np.sqrt(factor), rel=1e-4)


def test_benjamin_feir_index_limits_of_depth():
    # exact: deep water is the limit; published: no focusing below kh = 1.363 (Hasimoto & Ono 1972)
    assert benjamin_feir_index(0.1, 3.0, kph=1e5) == pytest.approx(
        benjamin_feir_index(0.1, 3.0), rel=1e-4
    )
    values = benjamin_feir_index(0.1, 3.0, kph=[0.6, 1.362, 1.364])
    assert values[:2].tolist() == [0, 0]
    assert values[2] > 0


def test_sampling_error_of_white_band():
    # by hand: flat spectrum of width B: var(m0)/m0^2 = 1/(B T), Hs has half that error
    # (Bendat & Piersol 2010, section 8.2)
    f = np.linspace(0, 2, 2001)
    flat = Spectrum(f, np.where((f > 0.4995) & (f < 1.5005), 1.0, 0.0))
    assert hs_sampling_error(flat, 400.0) == pytest.approx(0.5 / np.sqrt(400), rel=1e-3)
    with pytest.raises(InputError, match="duration"):
        hs_sampling_error(flat, 0.0)


@pytest.mark.parametrize(("periods", "error"), [(120, 0.06), (32, 0.11)])
def test_sampling_error_of_a_jonswap_sea(periods, error):
    # common practice, no source: about 6 % for 120 peak periods, 11 % for 32
    assert hs_sampling_error(wide(jonswap), periods) == pytest.approx(error, abs=0.005)


def test_scatter_of_an_estimate_is_cleared():
    # exact: E[S^2] of a chi-square estimate of nu degrees of freedom is (1 + 2/nu) times S^2
    exact = wide(jonswap)
    estimate = Spectrum(exact.frequency, exact.density, 10.0)
    assert goda_peakedness(estimate) == pytest.approx(goda_peakedness(exact) / 1.2)
    assert hs_sampling_error(estimate, 100.0) == pytest.approx(
        hs_sampling_error(exact, 100.0) / np.sqrt(1.2)
    )


def test_sea_state_of_simulated_records():
    # exact: the parameters of the spectrum that a Gaussian sea was drawn from; by Monte Carlo
    rng = np.random.default_rng(5)
    records = gaussian_sea(rng, rows=200, n=2048, dt=0.8, gamma=3.3, hs=3.0, tp=10.0)
    states = [sea_state(x, 0.8, depth=30.0) for x in records]
    mean = {k: np.mean([getattr(s, k) for s in states]) for k in ("hs", "tp", "tm02", "qp")}
    assert mean["hs"] == pytest.approx(3.0, rel=0.012)
    assert mean["tp"] == pytest.approx(10.0, rel=0.015)
    assert mean["tm02"] == pytest.approx(7.774, rel=0.03)
    assert mean["qp"] == pytest.approx(3.2, rel=0.1)
    # the stated sampling error is the scatter found
    found = np.std([s.hs for s in states]) / 3.0
    assert np.mean([s.hs_error for s in states]) == pytest.approx(found, rel=0.15)


def test_sea_state_is_put_together_from_its_definitions():
    # by hand from the definitions: kp by the finite-depth dispersion, steepness = kp hs / 2
    x = gaussian_sea(np.random.default_rng(8), rows=1, n=2048, dt=0.5, gamma=5.0, tp=8.0)[0]
    state = sea_state(x, 0.5, depth=25.0, spread=15.0)
    assert state.hs == 4 * np.std(x)
    assert 9.81 * state.kp * np.tanh(state.kp * 25) == pytest.approx((2 * np.pi / state.tp) ** 2)
    assert state.steepness == state.kp * state.hs / 2
    assert state.kph == state.kp * 25
    assert (state.depth, state.spread) == (25.0, 15.0)
    assert state.bfi == pytest.approx(state.steepness * state.qp * np.sqrt(np.pi / 2))
    expected = benjamin_feir_index(state.steepness, state.qp, kph=state.kp * 25)
    assert state.bfi_depth == expected < state.bfi
    assert state.tm02 < state.tm01 < state.tp
    assert sea_state(x, 0.5).kph == np.inf
    assert sea_state(x, 0.5).bfi_depth == sea_state(x, 0.5).bfi


@given(seed=st.integers(0, 2**32 - 1), scale=st.floats(1e-3, 1e3), stretch=st.floats(0.05, 20))
@settings(max_examples=15)
def test_sea_state_scales(seed, scale, stretch):
    # exact: dimensional analysis; numbers without a unit do not change, whatever the sign,
    # the mean level or the sense of time
    x = gaussian_sea(np.random.default_rng(seed), rows=1, n=600, dt=0.1, gamma=3.3)[0]
    one = sea_state(x, 0.1)
    other = sea_state(scale * (3 - x), 0.1 * stretch)
    assert other.hs == pytest.approx(scale * one.hs)
    for name in ("tp", "tm01", "tm02"):
        assert getattr(other, name) == pytest.approx(stretch * getattr(one, name))
    for name in ("qp", "bandwidth", "hs_error"):
        assert getattr(other, name) == pytest.approx(getattr(one, name))
    assert other.steepness == pytest.approx(one.steepness * scale / stretch**2)


def test_noise_floor():
    # exact: white noise of variance v has one-sided density 2 v dt; by Monte Carlo
    rng = np.random.default_rng(2)
    dt, v = 1 / 16, 0.02
    found = []
    for x in gaussian_sea(rng, rows=100, n=2048, dt=dt, gamma=3.3):
        noisy = x + np.sqrt(v) * rng.standard_normal(x.size)
        found.append(noise_floor(estimate_spectrum(noisy, dt), 1.0))
    assert np.mean(found) == pytest.approx(2 * v * dt, rel=0.15)
    # nothing can be said when the record ends below 4 fp
    coarse = gaussian_sea(rng, rows=1, n=256, dt=0.2, gamma=3.3)[0]
    assert noise_floor(estimate_spectrum(coarse, 0.2), 1.0) == 0.0
