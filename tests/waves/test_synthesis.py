"""Random seas against their spectrum, Gaussian statistics and the linear dispersion relation."""

import numpy as np
import pytest
from scipy import stats

from forecaster.errors import InputError
from forecaster.waves.hos import FullyNonlinearSea
from forecaster.waves.linear import GRAVITY, wavenumber
from forecaster.waves.spectrum import jonswap
from forecaster.waves.synthesis import random_envelope, random_surface

TURN = 2 * np.pi
KP = (TURN / 10) ** 2 / GRAVITY
BAND = (0.05, 0.24)
SEA = FullyNonlinearSea(40 * TURN / KP, peak_wavenumber=KP, modes=320)
SHALLOW = FullyNonlinearSea(40 * TURN / KP, peak_wavenumber=KP, modes=320, depth=25.0)


def density(frequency):
    return jonswap(frequency, hs=1.0, tp=10.0, gamma=3.3)


def surface(seed, sea=SEA, hs=3.0, band=BAND):
    return random_surface(sea, density, np.random.default_rng(seed), hs=hs, band=band)


def envelope(seed, hs=3.0, n=2048, band=BAND):
    return random_envelope(
        density, np.random.default_rng(seed), n=n, dt=1.25, omega0=TURN / 10, hs=hs, band=band
    )


def modes_of(values):
    return 2 * np.fft.rfft(values) / values.size


@pytest.mark.parametrize("sea", [SEA, SHALLOW])
def test_expected_variance_of_a_surface(sea):
    # exact: E[variance] = hs^2 / 16; the mean of 400 seas scatters by about
    # sqrt(2 / degrees of freedom) = 1.5 %
    variances = [np.var(surface(seed, sea).elevation) for seed in range(400)]
    assert np.mean(variances) == pytest.approx(3.0**2 / 16, rel=0.04)
    assert np.std(variances) / np.mean(variances) > 0.05  # amplitudes are random


def test_expected_variance_of_an_envelope():
    # exact: E|A|^2 / 2 = hs^2 / 16
    variances = [np.mean(np.abs(envelope(seed)) ** 2) / 2 for seed in range(200)]
    assert np.mean(variances) == pytest.approx(3.0**2 / 16, rel=0.03)


def test_energy_lies_where_the_spectrum_says():
    # exact: E|a_j|^2 / 2 = S(f_j) df_j, here over three bands of frequency
    power = np.mean([np.abs(modes_of(surface(seed).elevation)) ** 2 for seed in range(300)], axis=0)
    frequency = np.sqrt(GRAVITY * TURN / SEA.length * np.arange(power.size)) / TURN
    fine = np.linspace(*BAND, 20001)
    total = np.trapezoid(density(fine), fine)
    for low, high in ((0.05, 0.095), (0.095, 0.105), (0.105, 0.15), (0.15, 0.24)):
        inside = (frequency >= low) & (frequency < high)
        part = np.linspace(low, high, 5001)
        expected = np.trapezoid(density(part), part) / total
        assert power[inside].sum() / power.sum() == pytest.approx(expected, abs=0.03)


def test_mode_amplitudes_are_rayleigh_and_phases_uniform():
    # published: Tucker, Challenor & Carter 1984: |a|^2 exponential, phase uniform, independent
    amplitude = np.array([modes_of(surface(seed).elevation) for seed in range(200)])
    power = np.abs(amplitude[:, 30:60]) ** 2
    scaled = (power / power.mean(axis=0)).ravel()
    assert stats.kstest(scaled, "expon").pvalue > 0.001
    assert (
        stats.kstest(np.angle(amplitude[:, 30:60]).ravel() / TURN + 0.5, "uniform").pvalue > 0.001
    )
    assert abs(np.corrcoef(power[:, 5], power[:, 6])[0, 1]) < 0.25


def test_elevation_is_gaussian_over_seas():
    # exact: a sum of Gaussian modes; excess kurtosis of one point over seas is 0 +- sqrt(24/n)
    here = np.array([surface(seed).elevation[::160] for seed in range(400)]).ravel()
    assert abs(stats.skew(here)) < 4 * np.sqrt(6 / here.size)
    assert abs(stats.kurtosis(here)) < 4 * np.sqrt(24 / here.size)


@pytest.mark.parametrize(("sea", "depth"), [(SEA, np.inf), (SHALLOW, 25.0)])
def test_potential_belongs_to_waves_that_run_one_way(sea, depth):
    # exact: psi = -i (g / omega) a exp(i k x), omega^2 = g k tanh kh (Airy 1845)
    drawn = surface(3, sea)
    elevation, potential = modes_of(drawn.elevation), modes_of(drawn.potential)
    k = TURN / sea.length * np.arange(elevation.size)
    omega = np.sqrt(GRAVITY * k * (np.tanh(k * depth) if np.isfinite(depth) else 1.0))
    used = np.abs(elevation) > 1e-9
    np.testing.assert_allclose(
        potential[used], -1j * GRAVITY / omega[used] * elevation[used], atol=1e-9
    )
    # and the linear engine moves every crest downwave at its own phase speed
    linear = FullyNonlinearSea(
        sea.length, peak_wavenumber=KP, modes=sea.modes, depth=depth, order=1
    )
    later = linear.march(drawn, step=1.7, samples=1)[1].elevation
    np.testing.assert_allclose(
        modes_of(later)[used], elevation[used] * np.exp(-1j * omega[used] * 1.7), atol=1e-9
    )


def test_mode_of_an_envelope_is_the_wave_of_its_frequency():
    # exact: eta = Re{A exp(-i omega0 t)} holds exactly the frequencies of the band
    a = envelope(5, band=(0.12, 0.14))
    t = 1.25 * np.arange(a.size)
    frequency = np.fft.rfftfreq(a.size, 1.25)
    spectrum = np.abs(np.fft.rfft((a * np.exp(-1j * TURN / 10 * t)).real))
    inside = (frequency > 0.12 - 1e-9) & (frequency < 0.14 + 1e-9)
    assert spectrum[inside].min() > 0
    assert spectrum[~inside].max() < 1e-9 * spectrum.max()


@pytest.mark.parametrize(("sea", "depth"), [(SEA, np.inf), (SHALLOW, 25.0)])
def test_nothing_lies_outside_the_band(sea, depth):
    # exact
    amplitude = np.abs(modes_of(surface(1, sea).elevation))
    k = TURN / sea.length * np.arange(amplitude.size)
    low, high = (wavenumber(TURN * f, depth) for f in BAND)
    assert amplitude[(k < low) | (k > high)].max() < 1e-12
    assert (amplitude[(k > low * 1.001) & (k < high * 0.999)] > 0).all()


def test_a_seed_gives_its_sea_and_hs_scales_it():
    # exact
    one, same, other = surface(7), surface(7), surface(8)
    np.testing.assert_array_equal(one.elevation, same.elevation)
    np.testing.assert_array_equal(one.potential, same.potential)
    assert np.corrcoef(one.elevation, other.elevation)[0, 1] < 0.3
    np.testing.assert_allclose(surface(7, hs=6.0).elevation, 2 * one.elevation, atol=1e-12)
    np.testing.assert_array_equal(envelope(7), envelope(7))
    np.testing.assert_allclose(envelope(7, hs=6.0), 2 * envelope(7), atol=1e-12)
    assert abs(np.corrcoef(envelope(7), envelope(8))[0, 1]) < 0.3


def test_refuses_a_band_without_energy():
    with pytest.raises(InputError, match="energy"):
        surface(1, band=(0.001, 0.002))
    with pytest.raises(InputError, match="energy"):
        envelope(1, band=(0.9, 1.0))
