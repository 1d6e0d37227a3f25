"""The forward run against exact solutions, published growth rates and exact pair dispersion.

Runs are written in the run's own units: T = omega0 (t - x/cg), X = k0 x, a = k0 A.
"""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from forecaster.datatypes import Envelope
from forecaster.errors import InputError, NumericsError
from forecaster.waves.linear import GRAVITY, group_velocity, wavenumber
from forecaster.waves.propagate import (
    EQUATIONS,
    KEPT,
    STEPPERS,
    ForwardRun,
    pair_residual,
    phase_coherence,
)
from forecaster.waves.spectrum import jonswap
from forecaster.waves.synthesis import random_envelope

OMEGA0 = 2 * np.pi / 10
NONLINEAR = [name for name, equation in EQUATIONS.items() if equation.cubic]
TURN = 2 * np.pi


def envelope_of(a, span, depth=np.inf):
    """Envelope whose k0 A are the values `a` on a period of `span` in T."""
    k0 = float(wavenumber(OMEGA0, depth))
    return Envelope(np.asarray(a) / k0, span / len(a) / OMEGA0, 0.0, OMEGA0, k0, depth)


def carried(a, span, reach, depth=np.inf, **options):
    """(m, n) values a at each X of `reach`, or (n,) if that is one number."""
    envelope = envelope_of(a, span, depth)
    run = ForwardRun(envelope, **options)
    reach = np.asarray(reach, float)
    downwave = run.march(np.atleast_1d(reach) / envelope.k0)
    values = np.array([envelope.k0 * step.values for step in downwave])
    values *= np.exp(-1j * np.atleast_1d(reach))[:, None]
    return values if reach.ndim else values[0]


def grid(n, span):
    """T from -span/2."""
    return span / n * (np.arange(n) - n // 2)


def sea(steepness, seed, n=1024, gamma=3.3):
    """Random envelope of a sea whose peak is the carrier; its span in T is 2 pi n / 8."""
    hs = 2 * steepness * GRAVITY / OMEGA0**2
    a = random_envelope(
        lambda f: jonswap(f, hs=1.0, tp=10.0, gamma=gamma),
        np.random.default_rng(seed),
        n=n, dt=10.0 / 8, omega0=OMEGA0, hs=hs, band=(0.04, 0.22),
    )  # fmt: skip
    return a * OMEGA0**2 / GRAVITY, TURN * n / 8


every_nonlinear = pytest.mark.parametrize("equation", NONLINEAR)
every_equation = pytest.mark.parametrize("equation", EQUATIONS)
every_stepper = pytest.mark.parametrize("stepper", STEPPERS)


# ---- linear part -------------------------------------------------------------------------------


@pytest.mark.parametrize("depth", [np.inf, 30.0])
def test_linear_components_keep_their_own_wavenumber(depth):
    # exact: a component of frequency omega has phase k(omega) x - omega t (Airy 1845)
    n, periods, distance = 256, 32, 4321.0
    offsets = np.array([-18, -5, 0, 7, 26]) / periods
    t = 10.0 / 8 * np.arange(n)
    amplitudes = np.array([0.3, 0.1, 1.0, 0.2j, -0.4])
    a = np.exp(-1j * OMEGA0 * np.outer(t, offsets)) @ amplitudes
    k0 = float(wavenumber(OMEGA0, depth))
    (far,) = ForwardRun(
        Envelope(a, 10.0 / 8, 0.0, OMEGA0, k0, depth), equation="linear"
    ).march(distance)  # fmt: skip
    assert far.start == pytest.approx(distance / group_velocity(OMEGA0, depth), rel=1e-12)
    omega = OMEGA0 * (1 + offsets)
    expected = np.exp(
        1j * (wavenumber(omega, depth) * distance - np.multiply.outer(far.times, omega))
    ) @ amplitudes  # fmt: skip
    np.testing.assert_allclose(
        far.values * np.exp(-1j * OMEGA0 * far.times), expected, atol=1e-9
    )  # fmt: skip


@every_equation
@every_stepper
@pytest.mark.parametrize("depth", [np.inf, 40.0])
def test_a_vanishing_sea_is_linear(equation, stepper, depth):
    # exact: nonlinear terms are cubic in the amplitude
    a, span = sea(0.1, 3)
    faint = carried(1e-6 * a, span, 60.0, depth, equation=equation, stepper=stepper)
    linear = carried(1e-6 * a, span, 60.0, depth, equation="linear")
    np.testing.assert_allclose(faint, linear, atol=1e-12 * np.abs(a).max())


@every_equation
def test_distance_zero_gives_back_the_envelope(equation):
    # exact
    a, span = sea(0.08, 5)
    np.testing.assert_allclose(carried(a, span, 0.0, equation=equation), a, atol=1e-14)


# ---- uniform trains and pairs ------------------------------------------------------------------


def phase_rate(a, span, offset, reach, **options):
    """Mean rate of phase, less the linear one, of the component at `offset`, per X."""
    n = len(a)
    index = round(-offset * span / TURN) % n
    before = np.fft.fft(a)[index]
    after = np.fft.fft(carried(a, span, reach, **options))[index]
    return np.angle(after / before * np.exp(-1j * offset**2 * reach)) / reach


@every_nonlinear
@every_stepper
def test_stokes_shift_of_a_train_at_the_carrier(equation, stepper):
    # published: Stokes 1847, k = k0 (1 - eps^2) at fixed frequency, deep water, third order
    eps = 0.08
    a = np.full(64, eps + 0j)
    rate = phase_rate(a, 64.0, 0.0, 100.0, equation=equation, stepper=stepper, step=0.2)
    assert rate == pytest.approx(-(eps**2), rel=1e-5)
    exact = eps * np.exp(-1j * eps**2 * 100.0)
    final = carried(a, 64.0, 100.0, equation=equation, stepper="rk4", step=0.2)
    np.testing.assert_allclose(final, exact, rtol=1e-10)


@pytest.mark.parametrize("offset", [-0.2, -0.05, 0.1, 0.3])
@every_stepper
def test_stokes_shift_of_a_train_beside_the_carrier(offset, stepper):
    # by hand: k = (omega^2/g)(1 - k^2 a^2) (Stokes 1847) with omega = omega0 (1 + O) shifts k by
    # -(1+O)^6 eps^2 in units of k0; the cubic equation keeps 1 of it, Dysthe's 1 + 6 O
    # (Dysthe 1979; Lo & Mei 1985)
    eps, span = 0.05, 20 * TURN
    a = eps * np.exp(-1j * offset * grid(512, span))
    options = {"stepper": stepper, "step": 0.2}
    shift = -(eps**2)
    assert phase_rate(a, span, offset, 80.0, equation="nls", **options) == pytest.approx(
        shift, rel=1e-5
    )
    assert phase_rate(a, span, offset, 80.0, equation="dysthe", **options) == pytest.approx(
        shift * (1 + 6 * offset), rel=1e-5
    )
    # the residual counts a pair; a lone train acts on itself with half of a pair, so the pair
    # equation counts what is left out twice: a limit of the model, right for many waves only
    left_out = (1 + offset) ** 6 - (1 + 6 * offset)
    assert phase_rate(a, span, offset, 80.0, equation="dysthe-pair", **options) == pytest.approx(
        shift * (1 + 6 * offset + 2 * left_out), rel=1e-5
    )


PAIRS = [(0.0, 0.3), (0.0, -0.3), (-0.15, 0.2), (0.25, -0.2), (0.0, 0.8)]


def exact_pair_shift(one, two):
    """Shift of k2 per -a1^2, units of the carrier (Longuet-Higgins & Phillips 1962, collinear).

    At fixed wavenumbers d omega2 = a1^2 k1 omega1 k2 if omega2 > omega1, else a1^2 k2^2 omega1;
    at fixed frequency dk2 = -d omega2 / cg2, cg2 = g / (2 omega2).
    """
    w1, w2 = 1 + one, 1 + two
    k1, k2 = w1**2, w2**2
    return (k1 * w1 * k2 if two > one else k2**2 * w1) * 2 * w2


@pytest.mark.parametrize(("one", "two"), PAIRS)
@every_stepper
def test_a_weak_wave_beside_a_main_wave(one, two, stepper):
    # published: Longuet-Higgins & Phillips 1962, J. Fluid Mech. 12, 333 (formula from memory, its
    # linearisation agrees with every Dysthe term).  The pair is far apart against the steepness,
    # so that their four-wave interaction is of order eps^2 / (two - one)^2 = 1e-3
    main, weak, span = 0.008, 1e-6, 20 * TURN
    t = grid(256, span)
    a = main * np.exp(-1j * one * t) + weak * np.exp(-1j * two * t)
    options = {"stepper": stepper, "step": 0.8}

    def shift(equation):
        return phase_rate(a, span, two, 300.0, equation=equation, **options) / -(main**2)

    linearised = 2 + 6 * (one + two) if two > one else 2 + 2 * one + 10 * two
    assert shift("nls") == pytest.approx(2, rel=3e-3)
    assert shift("dysthe") == pytest.approx(linearised, rel=3e-3, abs=3e-3)
    assert shift("dysthe-pair") == pytest.approx(exact_pair_shift(one, two), rel=3e-3)


@settings(max_examples=50)
@given(
    st.lists(st.floats(-0.7, 1.6), min_size=2, max_size=6, unique=True),
    st.randoms(use_true_random=False),
)
def test_pair_residual_is_exact_less_linearised(offsets, random):
    # exact: summed pair by pair, written apart from the package
    share = np.array([0.01 + random.random() for _ in offsets])
    share /= share.sum()
    for i, two in enumerate(offsets):
        total = 0.0
        for one, part in zip(offsets, share, strict=True):
            if one != two:
                linearised = 2 + 6 * (one + two) if two > one else 2 + 2 * one + 10 * two
                total += part * (exact_pair_shift(one, two) - linearised)
            else:
                total += part * 2 * ((1 + two) ** 6 - (1 + 6 * two))
        found = pair_residual(np.array(offsets), share)[i]
        assert found == pytest.approx(total, abs=1e-9 * max(1, abs(total)))


def test_pair_dispersion_is_no_more_than_dysthe_for_close_waves():
    # exact: the residual is of second order in the offsets
    near = pair_residual(np.array([0.0, 1e-3]), np.array([1.0, 0.0]))
    nearer = pair_residual(np.array([0.0, 1e-4]), np.array([1.0, 0.0]))
    assert near[1] / nearer[1] == pytest.approx(100, rel=0.01)


# ---- solitons and breathers --------------------------------------------------------------------


@every_stepper
def test_envelope_soliton_keeps_its_shape(stepper):
    # exact: Zakharov & Shabat 1972; in time a0 sech((a0/sqrt2) T) exp(-i a0^2 X/2)
    a0, span, n, reach = 0.06, 120 * TURN, 1024, 200.0
    t = grid(n, span)
    soliton = a0 / np.cosh(a0 * t / np.sqrt(2))
    final = carried(soliton, span, reach, equation="nls", stepper=stepper, step=0.2)
    exact = soliton * np.exp(-0.5j * a0**2 * reach)
    np.testing.assert_allclose(final, exact, atol=2e-7 * a0)  # its tails meet at the period


def from_standard(u, eps):
    """a = eps conj(u): u(tau, x) solves i u_tau + u_xx + 2 |u|^2 u = 0, x = eps T / sqrt 2."""
    return eps * np.conj(u)


def peregrine(x, tau):
    # exact: Peregrine 1983, J. Austral. Math. Soc. B 25, 16
    return (1 - 4 * (1 + 4j * tau) / (1 + 4 * x**2 + 16 * tau**2)) * np.exp(2j * tau)


def breather(x, tau, a):
    """Akhmediev (a < 1/2) or Kuznetsov-Ma (a > 1/2) breather of peak 1 + 2 sqrt(2 a)."""
    # exact: Akhmediev, Eleonskii & Kulagin 1987; Ma 1979 (the same formula with b, w imaginary)
    t = 2 * tau
    b = np.sqrt(8 * a * (1 - 2 * a) + 0j)
    w = 2 * np.sqrt(1 - 2 * a + 0j)
    top = (1 - 4 * a) * np.cosh(b * t) + np.sqrt(2 * a) * np.cos(w * x) + 1j * b * np.sinh(b * t)
    return top / (np.sqrt(2 * a) * np.cos(w * x) - np.cosh(b * t)) * np.exp(1j * t)


@every_stepper
def test_peregrine_breather(stepper):
    eps = 0.06
    tau0, scale = -0.6, np.sqrt(2) / eps
    n, span = 2048, 200 * TURN
    x = grid(n, span) / scale
    # the breather is not periodic: its algebraic tail has to fit into the period
    reach = 2 * np.array([-tau0, -2 * tau0]) / eps**2
    start = from_standard(peregrine(x, tau0), eps)
    peak, after = carried(start, span, reach, equation="nls", stepper=stepper, step=0.4)
    core = np.abs(x) < 4
    np.testing.assert_allclose(
        peak[core], from_standard(peregrine(x[core], 0.0), eps), atol=2e-3 * eps
    )
    np.testing.assert_allclose(
        after[core], from_standard(peregrine(x[core], -tau0), eps), atol=5e-3 * eps
    )
    # published: amplification by a factor of three; zeros at x = +- sqrt(3)/2 (Peregrine 1983)
    assert np.abs(peak).max() / eps == pytest.approx(3, abs=3e-3)
    dip = np.abs(
        np.interp(np.sqrt(3) / 2, x, peak.real) + 1j * np.interp(np.sqrt(3) / 2, x, peak.imag)
    )
    assert dip / eps < 0.01


@pytest.mark.parametrize(
    ("frequency", "peak"), [(0.5, 2.8708), (1.0, 2.4142), (1.2, 2.0583), (1.4, 1.2828)]
)
@every_stepper
def test_akhmediev_breather(frequency, peak, stepper):
    # published: peak 1 + 2 sqrt(1 - (dw/(w0 eps))^2 / 2) (Akhmediev et al. 1987; Dysthe & Trulsen
    # 1999), frequency = dw/(w0 eps)
    # small steepness: the harmonics must end within the band that a run keeps
    eps, tau, n = 0.03, 0.7, 256
    span = TURN / (frequency * eps)
    x = grid(n, span) * eps / np.sqrt(2)
    a = 0.5 * (1 - frequency**2 / 2)
    start = from_standard(breather(x, -tau, a), eps)
    reach = 2 * tau / eps**2
    final = carried(start, span, reach, equation="nls", stepper=stepper, step=0.8)
    np.testing.assert_allclose(final, from_standard(breather(x, 0.0, a), eps), atol=2e-4 * eps)
    assert np.abs(final).max() / eps == pytest.approx(peak, abs=2e-4)


@every_stepper
def test_kuznetsov_ma_breather(stepper):
    # exact: Ma 1979, peak 1 + 2 sqrt(2 a), returning with period pi / sqrt(2 a (2 a - 1)) in 2 tau
    eps, a = 0.04, 0.75
    span, n = 150 * TURN, 1024
    x = grid(n, span) * eps / np.sqrt(2)
    period = np.pi / np.sqrt(2 * a * (2 * a - 1)) / 2
    start = from_standard(breather(x, -0.5 * period, a), eps)
    peak = carried(start, span, period / eps**2, equation="nls", stepper=stepper, step=0.4)
    np.testing.assert_allclose(peak, from_standard(breather(x, 0.0, a), eps), atol=1e-3 * eps)
    assert np.abs(peak).max() / eps == pytest.approx(1 + 2 * np.sqrt(2 * a), abs=1e-3)


@every_stepper
def test_two_soliton_bound_state_returns(stepper):
    # exact: Satsuma & Yajima 1974: u(x, 0) = 2 sech x in i u_t + u_xx/2 + |u|^2 u = 0 doubles at
    # t = pi/4 and returns at t = pi/2 (here t = 2 tau)
    eps, n, span = 0.04, 1024, 160 * TURN
    x = grid(n, span) * eps / np.sqrt(2)
    start = from_standard(2 / np.cosh(x), eps)
    reach = np.array([np.pi / 4, np.pi / 2]) / eps**2
    half, whole = carried(start, span, reach, equation="nls", stepper=stepper, step=0.4)
    assert np.abs(half).max() / eps == pytest.approx(4, rel=1e-4)
    np.testing.assert_allclose(np.abs(whole), np.abs(start), atol=2e-4 * eps)


# ---- growth of sidebands -----------------------------------------------------------------------


def growth(equation, eps, offset, first=800.0, last=1100.0):
    """Growth per X of sidebands at +-`offset` of a uniform train."""
    n, span = 32, TURN / offset
    a = eps * (1 + 1e-9 * np.cos(offset * grid(n, span)))
    low, high = carried(a, span, [first, last], equation=equation)
    return np.log(np.abs(np.fft.fft(high)[1]) / np.abs(np.fft.fft(low)[1])) / (last - first)


@pytest.mark.parametrize("share", [0.5, 1.0, 1.3])
def test_benjamin_feir_growth_of_the_cubic_equation(share):
    # published: Benjamin & Feir 1967; in space |O| sqrt(2 eps^2 - O^2): largest k0 eps^2 at
    # dw/w0 = eps, none above sqrt(2) eps
    eps = 0.1
    offset = share * eps
    assert growth("nls", eps, offset) == pytest.approx(
        offset * np.sqrt(2 * eps**2 - offset**2), rel=2e-4
    )


def test_largest_growth_and_cut_off():
    # published: Benjamin & Feir 1967
    eps = 0.1
    largest = growth("nls", eps, eps)
    assert largest == pytest.approx(eps**2, rel=1e-4)
    assert growth("nls", eps, 0.95 * eps) < largest > growth("nls", eps, 1.05 * eps)
    beyond = 1.5 * eps
    train = eps * (1 + 1e-9 * np.cos(beyond * grid(32, TURN / beyond)))
    reach = np.arange(100.0, 1200.0, 100.0)
    later = np.fft.fft(carried(train, TURN / beyond, reach, equation="nls"))[:, 1]
    assert np.abs(later).max() < 10 * np.abs(np.fft.fft(train)[1])  # e^11 if it grew


@pytest.mark.parametrize("offset", [0.06, 0.075, 0.1])
def test_benjamin_feir_growth_of_the_dysthe_equation(offset):
    eps = 0.1
    found = growth("dysthe", eps, offset)
    # by hand: two sidebands in the module's equation, linearised
    by_hand = offset * np.sqrt(2 * eps**2 * (1 - 2 * offset) - 4 * eps**4 - offset**2)
    assert found == pytest.approx(by_hand, rel=2e-3)
    # published: Dysthe 1979, growth in time of the equation that marches in time, kappa = 2 O,
    # turned to space by the group speed w0 / 2 k0; the two equations differ by O(eps^4)
    kappa = 2 * offset
    square = kappa**2 / 8 * (eps**2 * (1 - kappa) - kappa**2 / 8) - eps**4 * kappa**2 / 16
    assert found == pytest.approx(2 * np.sqrt(square), rel=0.04)
    assert found < growth("nls", eps, offset)


# ---- numerics ----------------------------------------------------------------------------------


@every_nonlinear
@every_stepper
def test_measured_order_of_convergence(equation, stepper):
    # exact: a scheme of order p loses its error by 2^p when the step is halved
    a, span = sea(0.08, 7, n=512)
    a = fft_band(a, 0.7, 1.5)

    def at(step):
        return carried(a, span, 8.0, equation=equation, stepper=stepper, step=step)

    coarse, middle, fine = at(0.4), at(0.2), at(0.1)
    order = np.log2(np.linalg.norm(coarse - middle) / np.linalg.norm(middle - fine))
    assert order == pytest.approx(STEPPERS[stepper].order, abs=0.25)


def fft_band(a, low, high):
    """`a` (8 samples a period) with the frequencies low .. high over the carrier only."""
    offset = -8 * np.fft.fftfreq(len(a))
    return np.fft.ifft(np.fft.fft(a) * ((1 + offset > low) & (1 + offset < high)))


def action(a):
    return float(np.vdot(a, a).real)


@every_equation
def test_action_is_conserved_over_30_wavelengths(equation):
    # exact: every equation conserves the integral of |a|^2 dT; the rest is the step's error
    a, span = sea(0.08, 11)
    a = fft_band(a, *KEPT)
    final = carried(a, span, 30 * TURN, equation=equation, step=0.2)
    assert action(final) / action(a) == pytest.approx(1, abs=1e-6)


@every_nonlinear
@pytest.mark.parametrize("steepness", [0.06, 0.1])
def test_default_step_loses_little_action(equation, steepness):
    # exact law, regression margin: the default step trades accuracy for time
    a, span = sea(steepness, 12)
    a = fft_band(a, *KEPT)
    final = carried(a, span, 20 * TURN, equation=equation)
    assert action(final) / action(a) == pytest.approx(1, abs=2e-3)


@every_equation
def test_marching_in_two_legs_is_marching_in_one(equation):
    # exact when the steps coincide
    a, span = sea(0.08, 13, n=256)
    half, whole = carried(a, span, [20.0, 40.0], equation=equation)
    np.testing.assert_allclose(whole, carried(a, span, 40.0, equation=equation), atol=1e-13)
    np.testing.assert_allclose(half, carried(a, span, 20.0, equation=equation), atol=1e-13)


def test_refuses_a_run_that_does_not_conserve_action():
    a, span = sea(0.25, 17, n=256)
    with pytest.raises(NumericsError, match="action") as caught:
        carried(a, span, 200.0, equation="dysthe", stepper="heun", step=4.0)
    assert not abs(caught.value.achieved) < 0.02


@pytest.mark.parametrize(
    ("options", "distances", "says"),
    [
        ({"equation": "other"}, [1.0], "equation"),
        ({"stepper": "other"}, [1.0], "stepper"),
        ({"step": 0.0}, [1.0], "step"),
        ({"step": np.nan}, [1.0], "step"),
        ({"kept": (1.2, 2.0)}, [1.0], "kept"),
        ({"kept": (0.0, 2.0)}, [1.0], "kept"),
        ({}, [-1.0], "not negative"),
        ({}, [np.nan], "finite"),
        ({}, [2.0, 1.0], "increase"),
        ({}, [1.0, 1.0], "increase"),
    ],
)
def test_refuses_what_it_cannot_use(options, distances, says):
    with pytest.raises(InputError, match=says):
        ForwardRun(envelope_of(np.full(16, 0.01), 16.0), **options).march(distances)


# ---- finite depth ------------------------------------------------------------------------------


def test_no_cubic_term_at_the_critical_depth():
    # published: the coefficient vanishes at kh = 1.363 (Hasimoto & Ono 1972)
    depth = 1.3627828 / (OMEGA0**2 / GRAVITY / np.tanh(1.3627828))
    a = np.full(32, 0.1 + 0j)
    rate = phase_rate(a, 32.0, 0.0, 50.0, depth=depth, equation="nls")
    assert rate == pytest.approx(0, abs=1e-8)
    shallower, deeper = (
        phase_rate(a, 32.0, 0.0, 50.0, depth=depth * r, equation="nls") for r in (0.9, 1.1)
    )
    assert shallower > 1e-4 and deeper < -1e-4


@pytest.mark.parametrize(("kh", "x"), [(2.0, 0.4239), (3.0, 0.6377), (5.0, 0.7895), (20.0, 0.9494)])
@every_nonlinear
def test_shift_of_a_train_in_finite_depth(kh, x, equation):
    # published: coefficient X of Janssen & Onorato 2007 (values recomputed from two published
    # forms); by hand: d omega = X (k a)^2 omega / (2 tanh kh), dk = -d omega / cg
    depth = kh / (OMEGA0**2 / GRAVITY / np.tanh(kh))
    eps = 0.05
    n = 0.5 * (1 + 2 * kh / np.sinh(2 * kh))
    rate = phase_rate(np.full(32, eps + 0j), 32.0, 0.0, 50.0, depth=depth, equation=equation)
    assert rate == pytest.approx(-(eps**2) * x / (2 * n * np.tanh(kh)), rel=2e-4)


# ---- invariances -------------------------------------------------------------------------------


@settings(max_examples=12)
@given(
    angle=st.floats(0, TURN),
    shift=st.integers(0, 127),
    equation=st.sampled_from(sorted(EQUATIONS)),
    seed=st.integers(0, 50),
)
def test_phase_rotation_and_time_translation(angle, shift, equation, seed):
    # exact: the equations know neither the phase nor the origin of time
    a, span = sea(0.1, seed, n=128)
    plain = carried(a, span, 10.0, equation=equation)
    moved = carried(np.roll(a, shift) * np.exp(1j * angle), span, 10.0, equation=equation)
    np.testing.assert_allclose(moved, np.roll(plain, shift) * np.exp(1j * angle), atol=1e-11)


@settings(max_examples=8)
@given(scale=st.floats(0.2, 5.0), equation=st.sampled_from(sorted(EQUATIONS)))
def test_deep_water_knows_no_scale(scale, equation):
    # exact: in deep water only k0 A, omega0 t and k0 x appear
    a, span = sea(0.08, 21, n=132)  # no frequency of the grid lies on an edge of the kept band
    plain = carried(a, span, 10.0, equation=equation, step=0.7)
    omega0 = OMEGA0 * scale
    k0 = omega0**2 / GRAVITY
    (far,) = ForwardRun(
        Envelope(a / k0, span / 132 / omega0, 5.0, omega0, k0), equation=equation, step=0.7
    ).march(10.0 / k0)  # fmt: skip
    np.testing.assert_allclose(far.values * k0 * np.exp(-10j), plain, atol=1e-11)


# ---- the expected wave -------------------------------------------------------------------------


def test_phase_coherence_is_a_share():
    offsets = np.linspace(-0.75, 1.6, 50)
    share = phase_coherence(offsets, 100.0, 0.1)
    assert ((share > 0) & (share <= 1)).all()
    assert (share[offsets <= 0] == 1).all()
    assert (np.diff(share[offsets > 0]) < 0).all()
    # by hand: exp(-s^2/2) with s^2 linear in distance, cubic in steepness
    log = np.log(phase_coherence(0.5, 50.0, 0.05))
    assert np.log(phase_coherence(0.5, 100.0, 0.05)) == pytest.approx(2 * log)
    assert np.log(phase_coherence(0.5, 50.0, 0.1)) == pytest.approx(8 * log)


def test_expected_wave_damps_each_component_by_its_coherence():
    # exact: component by component
    a, span = sea(0.09, 23, n=256)
    envelope = envelope_of(a, span)
    run = ForwardRun(envelope)
    near, far = run.march([0.0, 300.0])
    np.testing.assert_allclose(run.expected(near, 0.09).values, near.values, atol=1e-14)
    expected = run.expected(far, 0.09)
    offset = -8 * np.fft.fftfreq(256)
    share = phase_coherence(offset, envelope.k0 * 300.0, 0.09)
    before = np.fft.fft(far.values)
    np.testing.assert_allclose(np.fft.fft(expected.values), share * before, atol=1e-9)
    assert expected.start == far.start
