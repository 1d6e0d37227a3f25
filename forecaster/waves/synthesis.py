"""Random seas: from a variance spectrum and a `numpy.random.Generator` to a surface or envelope.

Phases and amplitudes are both random: each mode is a complex Gaussian number, as in a real sea
(Tucker, Challenor & Carter 1984, Appl. Ocean Res. 6, 118: fixed amplitudes make the sea too
regular).  The expected variance is the spectrum's; that of one sea differs, as it should.
"""

from __future__ import annotations

import numpy as np
from scipy import fft

from forecaster.errors import InputError
from forecaster.waves.hos import FullyNonlinearSea, Surface
from forecaster.waves.linear import GRAVITY, group_velocity


def _complex_normal(generator, variance):
    """Complex Gaussian amplitudes with E|a|^2 = 2 `variance`."""
    parts = generator.standard_normal((2, *np.shape(variance)))
    return np.sqrt(variance) * (parts[0] + 1j * parts[1])


def _normalised(variance, hs):
    total = variance.sum()
    if not total > 0:
        raise InputError("the spectrum holds no energy at the frequencies of the grid")
    return variance * (hs**2 / 16 / total)


def random_surface(
    sea: FullyNonlinearSea, density, generator, *, hs: float, band: tuple[float, float]
) -> Surface:
    """A random linear sea that runs in the direction of increasing x on the line of `sea`.

    Parameters
    ----------
    sea : FullyNonlinearSea
        Gives the line, its grid and its dispersion.
    density : callable
        Frequency [Hz] -> variance density [m^2/Hz]; its shape only is used.
    generator : numpy.random.Generator
    hs : float [m]
        Expected significant wave height of what is drawn.
    band : (low, high) [Hz]
        Frequencies outside carry nothing.

    Returns
    -------
    Surface
        eta = Re sum a_j exp(i k_j x), psi = Re sum -i (g / omega_j) a_j exp(i k_j x).

    Examples
    --------
    >>> import numpy as np
    >>> sea = FullyNonlinearSea(8e3, peak_wavenumber=0.04, modes=400)
    >>> flat = random_surface(sea, lambda f: np.ones_like(f), np.random.default_rng(1),
    ...                       hs=2.0, band=(0.05, 0.2))
    >>> bool(abs(4 * flat.elevation.std() - 2.0) < 0.3)
    True
    """
    omega = sea.omega[1:]
    frequency = omega / (2 * np.pi)
    per_mode = group_velocity(omega, sea.depth) / sea.length  # df of one mode [Hz]
    inside = (frequency >= band[0]) & (frequency <= band[1])
    variance = _normalised(np.where(inside, density(frequency) * per_mode, 0.0), hs)
    amplitude = _complex_normal(generator, variance)
    spectra = np.zeros((2, sea.points // 2 + 1), complex)
    spectra[0, 1 : amplitude.size + 1] = amplitude
    spectra[1, 1 : amplitude.size + 1] = -1j * GRAVITY / omega * amplitude
    elevation, potential = fft.irfft(spectra * (sea.points / 2), sea.points, axis=-1)
    return Surface(elevation, potential)


def random_envelope(
    density, generator, *, n: int, dt: float, omega0: float, hs: float, band: tuple[float, float]
) -> np.ndarray:
    """A random periodic envelope at one place.

    Parameters
    ----------
    density : callable
        Frequency [Hz] -> variance density [m^2/Hz]; its shape only is used.
    generator : numpy.random.Generator
    n, dt : int, float [s]
        Samples and step; the envelope has period n dt.
    omega0 : float [rad/s]
        Carrier; eta = Re{A exp(-i omega0 t)} at x = 0.
    hs : float [m]
        Expected significant wave height.
    band : (low, high) [Hz]

    Returns
    -------
    (n,) complex array [m]
        Mode exp(-i (omega - omega0) t) carries the wave of angular frequency omega.
    """
    offset = -2 * np.pi * fft.fftfreq(n, dt)  # the transform's exp(+i w t) is our exp(-i O t)
    frequency = (omega0 + offset) / (2 * np.pi)
    inside = (frequency >= band[0]) & (frequency <= band[1])
    spectrum = np.where(inside, density(np.where(inside, frequency, band[0])), 0.0)
    amplitude = _complex_normal(generator, _normalised(spectrum, hs))
    return fft.ifft(amplitude * n)
