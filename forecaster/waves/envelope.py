"""Surface elevation <-> complex envelope of the free waves.

The elevation at one place is free waves plus the second-order waves bound to them:

    eta = Re{zeta} + eta_2(zeta),   zeta(t) = A(t) exp(-i omega0 t),

zeta the analytic signal of the free waves.  In deep water the bound waves of a long-crested sea
are, for every bandwidth, products of zeta and of kappa = k(D) zeta (each component times its
wavenumber):

    sum frequencies         Re{kappa zeta} / 2,
    difference frequencies  (1/2) H Im{kappa conj(zeta)}, H = -i sgn(Omega)

(that is (k_i + k_j)/2 and -|k_i - k_j|/2 times a_i a_j for each pair of components:
Longuet-Higgins 1963, J. Fluid Mech. 17, 459, eqs 3.7-3.8, collinear waves).  In finite depth the
narrow-band forms are used: Stokes's (3 - T^2)/(2 T^3) for the sum part and the forced long wave of
Longuet-Higgins & Stewart (1962), J. Fluid Mech. 13, 481, for the difference part.
"""

from __future__ import annotations

import numpy as np
from scipy import fft
from scipy.linalg import solve_toeplitz

from forecaster.datatypes import Envelope, Record, SeaState
from forecaster.errors import InputError
from forecaster.waves.linear import GRAVITY, group_ratio, group_velocity, wavenumber

FREE_BAND = (0.4, 2.2)  # of the carrier frequency
EDGE_WIDTH = 0.1  # relative width of the raised-cosine edges of that band
SAMPLES_PER_PERIOD = 5  # of an envelope, at least: cubic products of the band stay unaliased
FINE_PER_PERIOD = 16  # of an elevation with bound waves
MARGIN_PERIODS = 32.0  # empty time kept on each side of the record
MEMORY_PERIODS = 12.0  # of the conditional mean that continues a record
CONTINUATION_PERIODS = 3.0
BOUND_WAVE_ROUNDS = 4


def continued(elevation, dt, *, period, samples) -> np.ndarray:
    """Continue a record by its Gaussian conditional mean.

    Parameters
    ----------
    elevation : (n,) array [m]
        About its mean.
    dt : float [s]
    period : float [s]
        Peak period; the last `MEMORY_PERIODS` of it are what the mean is conditioned on.
    samples : int
        How many samples to add after the last one.

    Returns
    -------
    (samples,) array [m]
        E[eta(t) | record] for a Gaussian sea with the record's own autocovariance: it starts at
        the record's last value and fades to zero within a few periods.

    Notes
    -----
    Yule-Walker equations with the sample autocovariance and 0.1 % of white noise, which keeps a
    band-limited record solvable; iterated one-step prediction is the conditional mean of the
    autoregressive sea that has this autocovariance (Brockwell & Davis 1991, section 5.1).

    Examples
    --------
    >>> import numpy as np
    >>> wave = np.sin(2 * np.pi * np.arange(1600) / 16)
    >>> continued(wave, 1.0, period=16.0, samples=8).round(1) + 0.0
    array([0. , 0.4, 0.7, 0.9, 1. , 0.9, 0.7, 0.4])
    """
    n = elevation.size
    order = min(int(MEMORY_PERIODS * period / dt), n // 3)
    size = fft.next_fast_len(2 * n, real=True)
    covariance = fft.irfft(np.abs(fft.rfft(elevation, size)) ** 2, size)[: order + 1] / n
    if covariance[0] == 0:
        return np.zeros(samples)
    covariance[0] *= 1.001
    weights = solve_toeplitz(covariance[:-1], covariance[1:])[::-1]
    series = np.concatenate([elevation[-order:], np.zeros(samples)])
    for i in range(samples):
        series[order + i] = weights @ series[i : order + i]
    return series[order:]


def _band_weight(frequency, low, high):
    """1 inside low..high, raised-cosine edges of relative width `EDGE_WIDTH` outside it."""
    rise = np.clip((frequency / low - 1) / EDGE_WIDTH + 1, 0, 1)
    fall = np.clip((1 - frequency / high) / EDGE_WIDTH + 1, 0, 1)
    return np.sin(0.5 * np.pi * rise) ** 2 * np.sin(0.5 * np.pi * fall) ** 2


class BoundWaves:
    """Second-order bound waves of an analytic signal on a periodic time grid.

    Parameters
    ----------
    n, dt : int, float [s]
        The grid.
    omega0 : float [rad/s]
        Carrier, at which finite-depth factors are taken.
    depth : float [m]
    """

    def __init__(self, n, dt, *, omega0, depth=np.inf):
        omega = -2 * np.pi * fft.fftfreq(n, dt)
        self._k = wavenumber(np.abs(omega), depth)
        self._sign = np.sign(omega)
        self._depth = depth
        if np.isfinite(depth):
            k0 = float(wavenumber(omega0, depth))
            t = np.tanh(k0 * depth)
            ratio = float(group_ratio(k0 * depth))
            cg = omega0 / k0 * ratio
            self._sum_factor = (3 - t**2) / (2 * t**3)
            # the forced long wave, for differences well below the resonance near 2 omega0
            slow = (omega != 0) & (np.abs(omega) < omega0)
            kappa = np.abs(omega[slow]) / cg
            long_wave = np.tanh(kappa * depth) / kappa
            self._difference = np.zeros(n)
            self._difference[slow] = (
                -0.5 * GRAVITY * (2 * ratio - 0.5) / (GRAVITY * long_wave - cg**2)
            )
        else:
            self._sum_factor = 1.0

    def __call__(self, zeta):
        """(..., n) elevation [m] bound to the free waves `zeta` (..., n) complex [m]."""
        kappa = fft.ifft(self._k * fft.fft(zeta, axis=-1), axis=-1)
        total = 0.5 * self._sum_factor * (kappa * zeta).real
        if np.isfinite(self._depth):
            intensity = fft.fft(np.abs(zeta) ** 2, axis=-1)
            return total + fft.ifft(self._difference * intensity, axis=-1).real
        cross = fft.fft((kappa * zeta.conj()).imag, axis=-1)
        return total + fft.ifft(-0.5j * self._sign * cross, axis=-1).real


def record_envelope(record: Record, sea: SeaState, *, margin: float) -> Envelope:
    """`free_envelope` of a record about the peak of its sea, with `margin` seconds at either end.

    >>> wave = np.cos(0.6 * np.arange(0, 600, 0.5))
    >>> from forecaster.waves.spectrum import sea_state
    >>> found = record_envelope(Record(wave, dt=0.5), sea_state(wave, 0.5), margin=0.0)
    >>> bool(abs(found.omega0 - 0.6) < 0.01)
    True
    """
    return free_envelope(
        record.elevation,
        record.dt,
        omega0=2 * np.pi / sea.tp,
        depth=record.depth,
        start=record.start,
        margin=margin,
    )


def free_envelope(elevation, dt, *, omega0, depth=np.inf, start=0.0, margin=None) -> Envelope:
    """Envelope of the free waves of a record, on a longer and periodic time grid.

    Parameters
    ----------
    elevation : (n,) array [m]
        Without gaps, about its mean, at least 4 samples per carrier period.
    dt : float [s]
    omega0 : float [rad/s]
        Carrier, rounded to a frequency of the grid; the free waves kept are `FREE_BAND` times it.
    depth : float [m]
    start : float [s]
        Time of the first sample.
    margin : float or None [s]
        Empty time kept before and after the record; `MARGIN_PERIODS` carrier periods if None.

    Returns
    -------
    Envelope
        With at least `SAMPLES_PER_PERIOD` samples per carrier period.  Both ends of the record
        are continued by their conditional mean over `CONTINUATION_PERIODS` (faded out over the
        second half), so nothing of the record itself is tapered.

    Raises
    ------
    InputError
        For gaps or a sampling of fewer than 4 samples per carrier period.

    Notes
    -----
    Bound waves are removed by iteration: zeta <- band(eta - eta_2(zeta)).
    """
    elevation = np.asarray(elevation, float)
    period = 2 * np.pi / omega0
    if np.isnan(elevation).any():
        raise InputError("the record has gaps; bridge them before taking its envelope")
    if dt * 3.99 > period:
        raise InputError(
            f"a step of {dt:g} s is too coarse for waves of {period:.3g} s: "
            "at least 4 samples per peak period are needed"
        )
    margin = MARGIN_PERIODS * period if margin is None else margin
    added = int(CONTINUATION_PERIODS * period / dt)
    fade = np.cos(0.5 * np.pi * np.clip(2 * np.arange(1, added + 1) / added - 1, 0, 1)) ** 2
    after = continued(elevation, dt, period=period, samples=added) * fade
    before = continued(elevation[::-1], dt, period=period, samples=added)[::-1] * fade[::-1]
    lead = max(int(margin / dt), added)
    n = elevation.size
    size = fft.next_fast_len(n + 2 * lead)
    padded = np.zeros(size)
    padded[lead - added : lead] = before
    padded[lead : lead + n] = elevation
    padded[lead + n : lead + n + added] = after

    # work at a step fine enough for the sum-frequency waves and a whole fraction of the window
    duration = size * dt
    omega0 = 2 * np.pi / duration * round(omega0 * duration / (2 * np.pi))
    fine = fft.next_fast_len(max(size, int(np.ceil(FINE_PER_PERIOD * duration / period))))
    omega = -2 * np.pi * fft.fftfreq(fine, duration / fine)
    weight = _band_weight(omega / omega0, *FREE_BAND)
    spectrum = _resized(fft.fft(padded), fine)
    target = weight * spectrum
    bound_waves = BoundWaves(fine, duration / fine, omega0=omega0, depth=depth)
    zeta_spectrum = 2 * target
    for _ in range(BOUND_WAVE_ROUNDS):
        bound = bound_waves(fft.ifft(zeta_spectrum))
        zeta_spectrum = 2 * (target - weight * fft.fft(bound))
    coarse = fft.next_fast_len(int(np.ceil(SAMPLES_PER_PERIOD * duration / period)))
    step = duration / coarse
    zeta = fft.ifft(_resized(zeta_spectrum, coarse))
    first = start - lead * dt
    times = first + step * np.arange(coarse)
    k0 = float(wavenumber(omega0, depth))
    return Envelope(zeta * np.exp(1j * omega0 * times), step, first, float(omega0), k0, depth)


def _resized(spectrum, m):
    """Spectrum of the same signal on `m` points (band-limited interpolation or decimation)."""
    n = spectrum.shape[-1]
    keep = (min(n, m) - 1) // 2
    result = np.zeros((*spectrum.shape[:-1], m), complex)
    result[..., : keep + 1] = spectrum[..., : keep + 1]
    result[..., m - keep :] = spectrum[..., n - keep :]
    return result * (m / n)


def elevation_of(envelope: Envelope, *, refine: int = 4) -> tuple[np.ndarray, float]:
    """Elevation with bound waves put back, on a grid `refine` times finer.

    Parameters
    ----------
    envelope : Envelope
        Values (..., n).
    refine : int

    Returns
    -------
    elevation : (..., n * refine) array [m]
    dt : float [s]
        Its step; the first sample is at ``envelope.start``.
    """
    n = envelope.values.shape[-1]
    m = n * refine
    dt = envelope.dt / refine
    times = envelope.start + dt * np.arange(m)
    fine = fft.ifft(_resized(fft.fft(envelope.values, axis=-1), m), axis=-1)
    zeta = fine * np.exp(-1j * envelope.omega0 * times)
    bound = BoundWaves(m, dt, omega0=envelope.omega0, depth=envelope.depth)
    return zeta.real + bound(zeta), dt


def covered(times, distance, *, frequency, start, end, depth=np.inf) -> np.ndarray:
    """Which components of the waves at a place and time left the sensor inside the record.

    Parameters
    ----------
    times : (...) array [s]
        At the target.
    distance : float [m]
        Downwave of the sensor.
    frequency : (f,) array [Hz]
        Above 0.
    start, end : float [s]
        First and last time of the record at the sensor.
    depth : float [m]

    Returns
    -------
    (..., f) boolean array
        Energy travels at the group velocity of its frequency (Naaijen, Trulsen &
        Blondel-Couprie 2014, Int. Shipbuild. Progr. 61, 203).

    Examples
    --------
    >>> covered([0.0, 200.0, 2000.0], 780.66, frequency=[0.1], start=0.0, end=600.0).ravel()
    array([False,  True, False])
    """
    travel = distance / group_velocity(2 * np.pi * np.asarray(frequency), depth)
    left = np.asarray(times)[..., None] - travel
    return (left >= start) & (left <= end)
