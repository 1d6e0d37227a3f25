"""A record's eigenvalues in metres and seconds, its energy shares, bands and validity."""

from dataclasses import replace

import numpy as np
import pytest

from forecaster.datatypes import Envelope, Record
from forecaster.errors import InputError
from forecaster.waves.envelope import elevation_of
from forecaster.waves.linear import GRAVITY, group_velocity
from forecaster.waves.propagate import ForwardRun
from forecaster.waves.scattering import discrete_spectrum, periodic_spectrum, scaled_envelope
from forecaster.waves.scattering_spectrum import (
    OPEN_BAND,
    expected_drift,
    paired_ends,
    scattering_spectrum,
)
from forecaster.waves.spectrum import jonswap, sea_state

PERIOD = 10.0
OMEGA = 2 * np.pi / PERIOD
K0 = OMEGA**2 / GRAVITY


def packet(amplitude, area, *, n=2000, dt=2.0, centre=0.5):
    """Deep-water envelope of a sech whose |q| tau is `area`."""
    tau = area * np.sqrt(2) / (K0 * amplitude) / OMEGA
    t = dt * np.arange(n)
    return Envelope(amplitude / np.cosh((t - centre * n * dt) / tau), dt, 0.0, OMEGA, K0)


def recorded(envelope, period=PERIOD):
    """Record of the waves of an envelope, and its sea state with a given peak period."""
    elevation, dt = elevation_of(envelope, refine=4)
    record = Record(elevation, dt=dt)
    return record, replace(sea_state(elevation, dt), tp=period)


def random_record(seed, periods, steepness=0.09, depth=np.inf):
    generator = np.random.default_rng(seed)
    n, dt = 16 * periods, PERIOD / 16
    frequency = np.fft.rfftfreq(n, dt)
    inside = (frequency > 0.04) & (frequency < 0.25)
    density = np.where(inside, jonswap(frequency, hs=2 * steepness / K0, tp=PERIOD), 0.0)
    drawn = generator.normal(size=(2, frequency.size))
    modes = np.sqrt(density / (2 * n * dt)) * n * (drawn[0] + 1j * drawn[1]) / np.sqrt(2)
    elevation = np.fft.irfft(modes, n)
    return Record(elevation, dt=dt, start=500.0, depth=depth)


@pytest.fixture(scope="module")
def sea():
    record = random_record(3, 128)
    return record, scattering_spectrum(record, sea_state(record.elevation, record.dt))


def test_a_soliton_is_found_with_its_height_place_and_speed():
    # exact: A sech(A k0 omega0 t / sqrt 2) is one envelope soliton at rest in the moving frame,
    # eigenvalue i k0 A / (2 sqrt 2), without waves that disperse (Zakharov & Shabat 1972)
    amplitude = 1.6
    record, state = recorded(packet(amplitude, 1.0, centre=0.6))
    found = scattering_spectrum(record, state)
    largest = found.eigenvalues[0]
    assert largest.height == pytest.approx(2 * amplitude, rel=0.01)
    assert largest.height_ratio == pytest.approx(2 * amplitude / state.hs, rel=0.01)
    assert largest.value == pytest.approx(1j * K0 * amplitude / (2 * np.sqrt(2)), rel=0.03)
    assert largest.time == pytest.approx(2400, abs=4000 / 128)
    assert largest.speed == pytest.approx(GRAVITY / (2 * OMEGA), rel=0.01)
    assert abs(largest.speed_offset) < 0.01
    assert found.discrete_share == pytest.approx(1, abs=0.01)
    assert found.continuous_share < 0.01
    (group,) = found.groups
    assert group.start < largest.time < group.end


def test_group_speed_is_that_of_the_frequency_that_the_real_part_means(sea):
    # exact: in deep water cg = g/(2 omega), and a soliton of Re xi has frequency omega0 (1 - 2 xi)
    _, found = sea
    omega0 = found.envelope.omega0
    assert len(found.eigenvalues) > 10
    for item in found.eigenvalues:
        omega = omega0 * (1 - 2 * item.value.real)
        assert item.speed == pytest.approx(GRAVITY / (2 * omega), rel=1e-9)
        assert item.speed / found.carrier_speed - 1 == pytest.approx(item.speed_offset, abs=1e-12)


def test_group_speed_in_finite_depth():
    # exact: linear dispersion, to first order in the offset
    record = random_record(4, 64, depth=60.0)
    found = scattering_spectrum(record, sea_state(record.elevation, record.dt, depth=60.0))
    near = [item for item in found.eigenvalues if abs(item.value.real) < 0.04]
    assert near
    for item in near:
        omega = found.envelope.omega0 * (1 - 2 * item.value.real)
        assert item.speed == pytest.approx(float(group_velocity(omega, 60.0)), rel=0.005)
    assert any("deep water" in text for text in found.remarks)


def test_energy_is_shared_out_and_eigenvalues_live_in_the_record(sea):
    record, found = sea
    # exact: trace formula (Faddeev & Takhtajan 1987); the rest is below the floor
    assert 0.9 < found.discrete_share + found.continuous_share <= 1 + 1e-6
    heights = [item.height for item in found.eigenvalues]
    assert heights == sorted(heights, reverse=True)
    margin = 4 * PERIOD
    assert all(record.start - margin < e.time < record.end + margin for e in found.eigenvalues)


def test_the_continuous_part_of_a_long_record_stays_while_its_energy_grows():
    # exact: the transfer matrix of a long random potential is evenly spread over SU(2), |a|^2
    # over 0 .. 1, so that <-ln |a|^2> = 1 whatever the length
    def continuous(periods):
        energies = []
        for seed in range(6):
            record = random_record(seed, periods)
            found = scattering_spectrum(record, sea_state(record.elevation, record.dt))
            energies.append(found.continuous_share * periods)
        return np.mean(energies)

    assert continuous(256) < 1.4 * continuous(64)


# --- the periodic view --------------------------------------------------------------------------


def test_bands_of_a_plane_wave_and_of_a_packet():
    # published: Ma & Ablowitz 1981: one band across the axis and a closed one for each n < A L/pi
    length = 10.0
    pairs, alone = paired_ends(periodic_spectrum(np.ones(128), length / 128))
    assert len(pairs) == int(length / np.pi)
    np.testing.assert_allclose(pairs[:, 0], pairs[:, 1], atol=1e-4)
    np.testing.assert_allclose(alone, [1j], atol=1e-6)
    # exact: around each eigenvalue of 2.3 sech, 1.8 i and 0.8 i (Satsuma & Yajima 1974)
    t = np.arange(-20, 20, 0.1) + 0.05
    pairs, alone = paired_ends(periodic_spectrum(2.3 / np.cosh(t), 0.1, order=8))
    np.testing.assert_allclose(np.sort(pairs.mean(axis=1).imag), [0.8, 1.8], atol=1e-6)
    assert alone.size == 0


def trace(q, dt, lam):
    """Of the monodromy matrix, q taken as constant over each eighth of a step."""
    n = q.size
    spectrum = np.fft.fft(q)
    fine = np.zeros(8 * n, complex)
    fine[: n // 2], fine[-(n // 2) :] = spectrum[: n // 2], spectrum[-(n // 2) :]
    v = np.eye(2, dtype=complex)
    for value in 8 * np.fft.ifft(fine):
        matrix = np.array([[-1j * lam, value], [-np.conj(value), 1j * lam]])
        root = np.sqrt(lam**2 + abs(value) ** 2 + 0j) * dt / 8  # matrix @ matrix = -root^2
        v = (np.cos(root) * np.eye(2) + np.sinc(root / np.pi) * dt / 8 * matrix) @ v
    return np.trace(v)


def test_ends_of_open_bands_have_opposite_traces(sea):
    # exact: along a band the trace runs from 2 to -2; independent code: matrix exponentials
    _, found = sea
    q, dt = scaled_envelope(found.envelope)
    pairs, alone = paired_ends(periodic_spectrum(q, dt))
    widths = np.abs(pairs[:, 0] - pairs[:, 1])
    for pair in pairs[np.argsort(-widths)][:4]:
        ends = [trace(q, dt, value) for value in pair]
        np.testing.assert_allclose(sorted(np.real(ends)), [-2, 2], atol=0.2)
    periodic = found.periodic
    assert periodic.points == 2 * periodic.unstable_modes + periodic.single_points
    assert len(pairs) == periodic.unstable_modes and alone.size == periodic.single_points
    assert 0 < periodic.open_bands <= periodic.unstable_modes
    assert periodic.widest_band > OPEN_BAND


# --- how far it holds ---------------------------------------------------------------------------


@pytest.mark.parametrize("steepness", [0.06, 0.12])
def test_the_cubic_run_keeps_the_eigenvalues_of_a_packet(steepness):
    # exact: isospectral evolution (Zakharov & Shabat 1972) over 30 wavelengths
    start = packet(steepness / K0, 1.4, n=800)
    run = ForwardRun(start, equation="nls", step=0.25)
    before, after = (
        discrete_spectrum(*scaled_envelope(envelope), order=8)[0]
        for envelope in run.march([0.0, 30 * 2 * np.pi / K0])
    )
    assert abs(after / before - 1) < 1e-6


def test_terms_beyond_the_cubic_ones_break_it_a_little():
    # origin: benchmarks/scattering_invariance.py, 0.3 to 3 % of the height at steepness 0.12
    start = packet(0.12 / K0, 1.4, n=800)
    later = ForwardRun(start).march([0.0, 30 * 2 * np.pi / K0])
    before, after = (discrete_spectrum(*scaled_envelope(e), order=8)[0] for e in later)
    assert 1e-3 < abs(after.imag / before.imag - 1) < 0.03


def test_expected_drift_grows_with_steepness_and_is_worse_for_groups():
    drifts = [expected_drift(s) for s in (0.02, 0.06, 0.09, 0.12, 0.2)]
    assert drifts[0] == drifts[1] and drifts[3] == drifts[4]
    assert drifts[1][0] < drifts[2][0] < drifts[3][0]
    assert all(train < group for train, group in drifts)


def test_remarks_say_where_they_were_measured(sea):
    record, found = sea
    assert len(found.remarks) == 3
    assert f"{100 * found.drift:.0f} % of Hs" in found.remarks[0]
    state = sea_state(record.elevation, record.dt, spread=25.0)
    wide = scattering_spectrum(record, replace(state, steepness=0.03))
    assert any("0.06 to 0.12" in text for text in wide.remarks)
    assert any("long-crested" in text for text in wide.remarks)


def test_shallow_water_has_no_solitons_and_says_so():
    record = random_record(1, 40, steepness=0.02, depth=10.0)
    found = scattering_spectrum(record, sea_state(record.elevation, record.dt, depth=10.0))
    assert found.eigenvalues == () and found.periodic.points == 0
    assert found.discrete_share == found.continuous_share == 0
    assert any("too shallow" in text for text in found.remarks)


def test_a_gap_is_refused():
    record = random_record(2, 40)
    state = sea_state(record.elevation, record.dt)
    torn = record.elevation.copy()
    torn[100:140] = np.nan
    with pytest.raises(InputError, match="gaps"):
        scattering_spectrum(replace(record, elevation=torn), state)
