"""Dispersion, speeds and the nonlinear coefficient against published and exact values."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from scipy.optimize import brentq

from forecaster.errors import InputError
from forecaster.waves.linear import (
    GRAVITY,
    angular_frequency,
    group_ratio,
    group_velocity,
    nonlinear_coefficient,
    phase_speed,
    wavenumber,
)


def omega(period):
    return 2 * np.pi / period


@pytest.mark.parametrize(
    ("period", "length"), [(5, 39.033), (8, 99.924), (10, 156.131), (12, 224.829)]
)
def test_deep_wavelength(period, length):
    # exact: lambda = g T^2 / 2 pi with g = 9.81 (Airy 1845)
    assert 2 * np.pi / wavenumber(omega(period)) == pytest.approx(length, rel=1e-5)


def test_deep_wave_of_a_worked_example():
    # published: a classification society's formula guide, Pierson-Moskowitz example, eqs
    # 3.1.48-3.1.53, waves of Tz = 10 s and Tp = 14.077 s
    assert wavenumber(omega(10)) == pytest.approx(0.040243, rel=1e-4)
    assert phase_speed(omega(10)) == pytest.approx(15.613, rel=1e-4)
    assert group_velocity(omega(10)) == pytest.approx(7.8066, rel=1e-4)
    assert wavenumber(0.44634) == pytest.approx(0.020308, rel=1e-4)
    assert phase_speed(0.44634) == pytest.approx(21.979, rel=1e-4)
    assert group_velocity(0.44634) == pytest.approx(10.989, rel=1e-4)


@pytest.mark.parametrize(
    ("period", "depth", "length", "n"),
    [
        (10, 20, 121.237, 0.76499),
        (10, 50, 151.298, 0.5653),
        (8, 10, 70.898, 0.81012),
        (12, 30, 177.042, 0.75684),
    ],
)
def test_finite_depth(period, depth, length, n):
    # independent code: the Airy relations solved apart from this package, g = 9.81
    k = wavenumber(omega(period), depth)
    assert 2 * np.pi / k == pytest.approx(length, rel=1e-5)
    assert group_ratio(k * depth) == pytest.approx(n, rel=1e-4)


def test_speeds_at_finite_depth():
    # independent code: T = 10 s in 20 m, g = 9.81
    assert phase_speed(omega(10), 20) == pytest.approx(12.1237, rel=1e-5)
    assert group_velocity(omega(10), 20) == pytest.approx(9.2745, rel=1e-5)


def test_period_of_a_short_tank_wave():
    # by hand: lambda = 1.2 m, T = sqrt(2 pi lambda / g)
    assert omega(1) / angular_frequency(2 * np.pi / 1.2) == pytest.approx(0.87669, rel=1e-5)
    assert omega(1) / angular_frequency(2 * np.pi / 1.2, 1.0) == pytest.approx(0.87671, rel=1e-5)


def test_deep_at_half_a_wavelength():
    # exact: tanh(pi) = 0.99627, the trade's rule for deep water costs 0.37 % of omega^2
    k = 0.1
    ratio = (angular_frequency(k, np.pi / k) / angular_frequency(k)) ** 2
    assert ratio == pytest.approx(0.99627, abs=1e-5)


@given(st.floats(0.01, 60), st.floats(1e-3, 1e5))
def test_dispersion_against_a_root_finder(w, depth):
    # independent code: Brent's method of scipy on omega^2 = g k tanh(k h)
    k = wavenumber(w, depth)
    assert GRAVITY * k * np.tanh(k * depth) == pytest.approx(w**2, rel=1e-12)
    root = brentq(lambda x: GRAVITY * x * np.tanh(x * depth) - w**2, 0.5 * k, 2 * k, xtol=1e-14 * k)
    assert k == pytest.approx(root, rel=1e-11)


@given(st.floats(0.05, 10), st.floats(0.5, 500))
def test_group_velocity_is_the_slope_of_the_dispersion(w, depth):
    # exact: cg = d omega / d k, by central difference
    k = wavenumber(w, depth)
    step = 1e-5 * k
    slope = (angular_frequency(k + step, depth) - angular_frequency(k - step, depth)) / (2 * step)
    assert group_velocity(w, depth) == pytest.approx(slope, rel=1e-7)


def test_limits_of_depth():
    # exact: c = cg = sqrt(g h) in shallow, cg = c / 2 in deep water
    assert phase_speed(1e-4, 2.0) == pytest.approx(np.sqrt(GRAVITY * 2), rel=1e-6)
    assert group_velocity(1e-4, 2.0) == pytest.approx(np.sqrt(GRAVITY * 2), rel=1e-6)
    assert group_velocity(1.0) == phase_speed(1.0) / 2
    assert group_ratio(0.0) == 1
    assert wavenumber(0.0, 10.0) == 0
    assert wavenumber(2.0, 1e9) == wavenumber(2.0)


def test_wavenumber_broadcasts():
    k = wavenumber(np.array([[0.5], [1.0]]), np.array([5.0, 50.0, np.inf]))
    assert k.shape == (2, 3)
    # exact: waves shorten in shallow water
    assert (np.diff(k, axis=1) < 0).all()


@pytest.mark.parametrize(
    ("kh", "x"),
    [(2, 0.4239), (2.604, 0.5769), (3, 0.6377), (5, 0.7895), (10, 0.8974), (20, 0.9494)],
)
def test_nonlinear_coefficient(kh, x):
    # published form, Hasimoto & Ono 1972; Janssen & Onorato 2007, J. Phys. Oceanogr. 37;
    # numbers recomputed by independent code
    assert nonlinear_coefficient(kh) == pytest.approx(x, abs=6e-5)


def test_focusing_ends_at_the_critical_depth():
    # published: kh = 1.363 (Hasimoto & Ono 1972); two published forms share the root 1.3627828
    root = brentq(nonlinear_coefficient, 1.2, 1.5, xtol=1e-12)
    assert root == pytest.approx(1.3627828, abs=1e-6)
    assert nonlinear_coefficient(np.inf) == 1
    assert nonlinear_coefficient(1e5) == pytest.approx(1, abs=2e-5)


def test_nonlinear_coefficient_in_its_other_published_form():
    # published: Mei (1983), The Applied Dynamics of Ocean Surface Waves, ch. 12, frequency shift
    # omega k^2 |A|^2 alpha of a wave train that carries its own mean flow; X = 2 T alpha
    # (from memory; the agreement of two forms derived apart is the check)
    kh = np.linspace(0.8, 6, 40)
    t, n = np.tanh(kh), group_ratio(kh)
    stokes = (np.cosh(4 * kh) + 8 - 2 * t**2) / (16 * np.sinh(kh) ** 4)
    mean = (2 * np.cosh(kh) ** 2 + n) ** 2 / (2 * np.sinh(2 * kh) ** 2) / (kh / t - n**2)
    assert 2 * t * (stokes - mean) == pytest.approx(nonlinear_coefficient(kh), rel=1e-9)


@pytest.mark.parametrize("depth", [0.0, -1.0, np.nan])
def test_depth_must_be_positive(depth):
    with pytest.raises(InputError, match="depth"):
        wavenumber(1.0, depth)


@pytest.mark.parametrize("w", [-1.0, np.nan, np.inf])
def test_frequency_must_be_finite_and_not_negative(w):
    with pytest.raises(InputError, match="omega"):
        wavenumber(w)


@pytest.mark.parametrize("kh", [0.0, -2.0, np.nan])
def test_relative_depth_must_be_positive(kh):
    with pytest.raises(InputError, match="kh"):
        nonlinear_coefficient(kh)
