"""Wave spectra: standard shapes, estimates from a record, moments and what follows from them.

Frequencies are in hertz and densities are one-sided, in m^2/Hz.  The standard shapes take
``(frequency, *, hs, tp, ...)`` and are listed in `SHAPES`.
"""

from __future__ import annotations

from math import inf

import numpy as np

from forecaster.datatypes import SeaState, Spectrum
from forecaster.errors import InputError
from forecaster.waves.linear import group_ratio, nonlinear_coefficient, wavenumber

CUT_OFF = (0.3, 3.0)  # band of the bandwidths, in units of the peak frequency
DEFAULT_SEGMENT_PERIODS = 24.0  # spectral resolution fp/24, finer than a JONSWAP peak is wide
JONSWAP_SIGMA = (0.07, 0.09)  # width of the peak below and above fp: Hasselmann et al. (1973)
_ENHANCED_WIDTHS = 9.0  # beyond this many widths the peak enhancement is 1 to rounding
_GAUSS_NODES, _GAUSS_WEIGHTS = np.polynomial.legendre.leggauss(48)


def pierson_moskowitz(frequency, *, hs, tp):
    """Pierson-Moskowitz spectrum of a fully developed sea, in terms of hs and tp.

    Parameters
    ----------
    frequency : array_like [Hz]
        Not negative.
    hs : array_like [m]
        Significant wave height; 4 sqrt(m0) of the spectrum equals it exactly.
    tp : array_like [s]
        Peak period.  `hs` and `tp` broadcast against `frequency`.

    Returns
    -------
    array [m^2/Hz]
        Variance density; 0 at frequency 0.

    Raises
    ------
    InputError
        For a negative frequency or height, or a period that is not positive.

    Notes
    -----
    S(f) = (5/16) hs^2 tp x^-5 exp(-(5/4) x^-4), x = f tp.  Valid for a wind sea of unlimited
    fetch; the high-frequency tail f^-5 is not cut off.

    Source: Pierson & Moskowitz (1964), J. Geophys. Res. 69, 5181-5190; in hs and tp as in
    DNV-RP-C205, section 3.5.5.

    Examples
    --------
    >>> f = np.arange(0, 2, 1e-4)
    >>> round(4 * moment(Spectrum(f, pierson_moskowitz(f, hs=3.0, tp=9.0)), 0) ** 0.5, 3)
    3.0
    """
    scale, x = _scaled(frequency, hs, tp)
    return scale * _developed(x)


def jonswap(frequency, *, hs, tp, gamma=3.3):
    """JONSWAP spectrum of a growing sea, normalised exactly to `hs`.

    Parameters
    ----------
    frequency : array_like [Hz]
        Not negative.
    hs, tp : array_like [m], [s]
        Significant wave height and peak period; they broadcast against `frequency`.
    gamma : array_like
        Peak enhancement, >= 1 (1: Pierson-Moskowitz; 3.3: mean of the JONSWAP seas, 1 to 7).

    Returns
    -------
    array [m^2/Hz]
        Variance density; 0 at frequency 0.

    Raises
    ------
    InputError
        For a negative frequency or height, a period that is not positive, or gamma below 1.

    Notes
    -----
    S(f) = A(gamma) S_PM(f) gamma^exp(-(x - 1)^2 / (2 sigma^2)), x = f tp, sigma = 0.07 below and
    0.09 above the peak.  A is computed by Gauss-Legendre quadrature to rounding, so that
    4 sqrt(m0) is `hs`; `jonswap_normaliser` is the usual approximation to it.

    Source: Hasselmann et al. (1973), Dt. Hydrogr. Z. A8 (12).

    Examples
    --------
    >>> f = np.arange(0, 2, 1e-4)
    >>> round(4 * moment(Spectrum(f, jonswap(f, hs=3.0, tp=9.0)), 0) ** 0.5, 3)
    3.0
    """
    scale, x = _scaled(frequency, hs, tp)
    gamma = np.asarray(gamma, float)
    if not (np.isfinite(gamma) & (gamma >= 1)).all():
        raise InputError(f"gamma must be finite and at least 1, got {gamma!r}")
    return scale * _developed(x) * gamma ** _enhancement(x) / _enhanced_variance(gamma)


def _scaled(frequency, hs, tp):
    """Variance times period [m^2/Hz] and frequency in units of the peak, both checked."""
    frequency, hs, tp = (np.asarray(value, float) for value in (frequency, hs, tp))
    if not (np.isfinite(frequency) & (frequency >= 0)).all():
        raise InputError("frequency must be finite and not negative [Hz]")
    if not (np.isfinite(hs) & (hs >= 0)).all():
        raise InputError(f"hs must be finite and not negative [m], got {hs!r}")
    if not (np.isfinite(tp) & (tp > 0)).all():
        raise InputError(f"tp must be a positive number of seconds, got {tp!r}")
    return hs**2 / 16 * tp, frequency * tp


def _developed(x):
    """5 x^-5 exp(-(5/4) x^-4): Pierson-Moskowitz of unit variance and unit peak frequency."""
    present = x > 0.2  # exp(-781) is already zero in double precision
    y = np.where(present, x, 1.0)
    return np.where(present, 5 * y**-5 * np.exp(-1.25 * y**-4), 0.0)


def _enhancement(x):
    """Exponent of gamma at x = f tp."""
    return np.exp(-0.5 * ((x - 1) / np.where(x <= 1, *JONSWAP_SIGMA)) ** 2)


def _enhanced_variance(gamma):
    """Integral over x of _developed(x) gamma^_enhancement(x): 1 plus what the peak adds."""
    total = np.ones_like(gamma)
    for sigma, side in zip(JONSWAP_SIGMA, (-1, 1), strict=True):
        half = 0.5 * _ENHANCED_WIDTHS * sigma
        x = 1 + side * half * (1 + _GAUSS_NODES)
        weight = half * _GAUSS_WEIGHTS * _developed(x)
        total = total + (gamma[..., None] ** _enhancement(x) - 1) @ weight
    return total


def jonswap_normaliser(gamma):
    """Usual approximation 1 - 0.287 ln(gamma) to the normalising factor A of `jonswap`.

    Within 0.3 % of the exact factor for 1 <= gamma <= 5, 1.8 % at 7 (`jonswap` itself uses the
    exact one).  Source: DNV-RP-C205, section 3.5.5; JCSS Probabilistic Model Code, part 2.15.

    >>> round(float(jonswap_normaliser(3.3)), 4)
    0.6573
    """
    gamma = np.asarray(gamma, float)
    if not (gamma >= 1).all():
        raise InputError(f"gamma must be at least 1, got {gamma!r}")
    return 1 - 0.287 * np.log(gamma)


def ittc(frequency, *, hs, tp):
    """ITTC two-parameter spectrum, with its printed constants.

    S(omega) = A omega^-5 exp(-B omega^-4), A = 173 hs^2 / T1^4, B = 691 / T1^4, in m^2/Hz here.
    The mean period T1 follows from the peak period, omega_p = (4 B / 5)^(1/4).  The printed
    constants are rounded: 4 sqrt(m0) is 1.0007 hs.  Parameters, returns and raises as in
    `pierson_moskowitz`.

    Source: ITTC Recommended Procedure 7.5-02-07-01.1.

    >>> f = np.arange(0, 2, 1e-4)
    >>> round(4 * moment(Spectrum(f, ittc(f, hs=1.0, tp=9.0)), 0) ** 0.5, 4)
    1.0007
    """
    scale, x = _scaled(frequency, hs, tp)
    return scale * _developed(x) * (16 * 173 / (4 * 691))


def two_peaked(
    frequency, *, hs, tp, gamma=3.3, second_share=0.3, second_tp_ratio=1.6, second_gamma=3.3
):
    """Sum of two JONSWAP systems, for instance a wind sea and a swell.

    Parameters
    ----------
    frequency : array_like [Hz]
    hs : array_like [m]
        Significant wave height of the whole sea.
    tp : array_like [s]
        Peak period of the first system.
    gamma, second_gamma : array_like
        Peak enhancement of either system.
    second_share : array_like
        Share of the variance in the second system, 0 .. 1.
    second_tp_ratio : array_like
        Peak period of the second system over that of the first, positive.

    Returns
    -------
    array [m^2/Hz]

    Raises
    ------
    InputError
        For a share outside 0 .. 1, or as in `jonswap`.

    Notes
    -----
    S = S_J(hs sqrt(1 - share), tp) + S_J(hs sqrt(share), ratio tp).  Superposing two independent
    systems follows Ochi & Hubble (1976), Proc. 15th Coastal Engng Conf., with the JONSWAP form
    for either.

    Examples
    --------
    >>> f = np.arange(0, 2, 1e-4)
    >>> round(4 * moment(Spectrum(f, two_peaked(f, hs=3.0, tp=9.0)), 0) ** 0.5, 3)
    3.0
    """
    share = np.asarray(second_share, float)
    if not ((share >= 0) & (share <= 1)).all():
        raise InputError(f"second_share must lie in 0 .. 1, got {share!r}")
    hs, tp = np.asarray(hs, float), np.asarray(tp, float)
    first = jonswap(frequency, hs=hs * np.sqrt(1 - share), tp=tp, gamma=gamma)
    return first + jonswap(
        frequency, hs=hs * np.sqrt(share), tp=tp * second_tp_ratio, gamma=second_gamma
    )


SHAPES = {
    "pierson_moskowitz": pierson_moskowitz,
    "jonswap": jonswap,
    "ittc": ittc,
    "two_peaked": two_peaked,
}


def gamma_from_hs_tp(hs, tp):
    """Peak enhancement that goes with `hs` [m] and `tp` [s] when nothing else is known.

    With x = tp / sqrt(hs): 5 for x <= 3.6, exp(5.75 - 1.15 x) between, 1 for x >= 5.  For wind
    seas; a swell is more peaked than this says.  Source: DNV-RP-C205, section 3.5.5.5.

    >>> gamma_from_hs_tp([9.0, 4.0], [9.0, 12.0]).tolist()
    [5.0, 1.0]
    """
    hs, tp = np.asarray(hs, float), np.asarray(tp, float)
    if not ((hs > 0) & (tp > 0)).all():
        raise InputError(f"hs and tp must be positive, got {hs!r} m and {tp!r} s")
    x = tp / np.sqrt(hs)
    middle = np.exp(5.75 - 1.15 * np.clip(x, 3.6, 5.0))
    return np.where(x <= 3.6, 5.0, middle)[()]


def mean_period_ratios(gamma):
    """Mean periods (Tm01 / Tp, Tm02 / Tp) of a JONSWAP sea of peak enhancement `gamma`.

    Cubic fits, within 0.25 % of quadrature over all frequencies for 1 <= gamma <= 7; refused
    outside.  Source: DNV-RP-C205, section 3.5.5.4 (coefficients from memory, checked against
    quadrature).

    >>> [round(float(ratio), 3) for ratio in mean_period_ratios(3.3)]
    [0.835, 0.778]
    """
    g = np.asarray(gamma, float)
    if not ((g >= 1) & (g <= 7)).all():
        raise InputError(f"gamma must lie in 1 .. 7 for these fits, got {g!r}")
    tm01 = 0.7303 + g * (0.04936 + g * (-0.006556 + g * 0.0003610))
    tm02 = 0.6673 + g * (0.05037 + g * (-0.006230 + g * 0.0003341))
    return tm01, tm02


def estimate_spectrum(elevation, dt, *, segment=None):
    """Variance spectrum of a record by averaged, tapered periodograms.

    Parameters
    ----------
    elevation : (n,) array_like [m]
        Without gaps; tide and drift removed.
    dt : float [s]
    segment : float [s], optional
        Length of a segment, at least 8 samples and at most the record.  Default: 24 periods of
        a first estimate of the peak, but at most half the record.

    Returns
    -------
    Spectrum
        Frequencies 0 .. 1/(2 dt) in steps of 1/segment; the degrees of freedom allow for the
        overlap.

    Raises
    ------
    InputError
        For gaps, fewer than 16 samples, a step that is not positive or an unusable segment.

    Notes
    -----
    Hann taper, half-overlapping segments (spread evenly, so that the last sample counts), mean
    of each segment removed, density scaled to the variance of white noise.  Degrees of freedom
    2 K / (1 + 2 (1 - 1/K) c^2), K segments, c the correlation of the taper with itself one step
    later.  A peak narrower than about 2/segment is widened.

    Source: Welch (1967), IEEE Trans. Audio Electroacoust. 15, 70-73.

    Examples
    --------
    >>> t = np.arange(0, 600, 0.5)
    >>> spectrum = estimate_spectrum(np.sin(2 * np.pi * t / 8), 0.5, segment=200)
    >>> round(float(moment(spectrum, 0)), 3)
    0.5
    """
    elevation = np.asarray(elevation, float)
    if elevation.ndim != 1 or elevation.size < 16:
        raise InputError(
            f"a spectrum needs one row of at least 16 samples, got shape {elevation.shape}"
        )
    if not np.isfinite(elevation).all():
        raise InputError("elevation holds gaps; a spectrum needs a record without any")
    if not (np.isfinite(dt) and dt > 0):
        raise InputError(f"dt must be a positive number of seconds, got {dt!r}")
    duration = elevation.size * dt
    if segment is None:
        quarter = _welch(elevation, dt, max(elevation.size // 4, 8))
        peak = quarter.density.max() > 0 and peak_frequency(quarter)
        segment = min(DEFAULT_SEGMENT_PERIODS / peak, duration / 2) if peak else duration / 2
        segment = max(segment, 8 * dt)
    length = round(segment / dt)
    if not 8 <= length <= elevation.size:
        raise InputError(
            f"segment must be {8 * dt:g} s (8 samples) to {duration:g} s (the record), "
            f"got {segment!r}"
        )
    return _welch(elevation, dt, length)


def _welch(elevation, dt, length):
    """Averaged periodogram over half-overlapping Hann segments of `length` samples."""
    taper = 0.5 - 0.5 * np.cos(2 * np.pi * np.arange(length) / length)
    count = max(int(np.ceil(2 * elevation.size / length)) - 1, 1)
    starts = np.round(np.linspace(0, elevation.size - length, count)).astype(int)
    segments = np.lib.stride_tricks.sliding_window_view(elevation, length)[starts]
    segments = (segments - segments.mean(axis=1, keepdims=True)) * taper
    density = (np.abs(np.fft.rfft(segments, axis=1)) ** 2).mean(axis=0)
    density *= 2 * dt / np.sum(taper**2)
    density[0] /= 2
    if length % 2 == 0:
        density[-1] /= 2
    step = int(starts[1] - starts[0]) if count > 1 else length
    overlap = np.sum(taper[: length - step] * taper[step:]) / np.sum(taper**2)
    freedom = 2 * count / (1 + 2 * (1 - 1 / count) * overlap**2)
    return Spectrum(np.fft.rfftfreq(length, dt), density, freedom)


def moment(spectrum, order, *, low=0.0, high=inf):
    """Spectral moment: integral of f^order S(f) df from `low` to `high` [Hz].

    Parameters
    ----------
    spectrum : Spectrum
    order : float
        For a negative order the density at frequency 0 is left out.
    low, high : float [Hz]

    Returns
    -------
    float [m^2 Hz^order]

    Notes
    -----
    Trapezoidal rule, the integrand interpolated at the ends of the band; nothing is added above
    the last frequency.  m0 is the variance; Tm01 = m0/m1, Tm02 = sqrt(m0/m2), Hs = 4 sqrt(m0).

    Examples
    --------
    >>> flat = Spectrum([0.0, 1.0, 2.0], [1.0, 1.0, 1.0])
    >>> moment(flat, 1), moment(flat, 0, low=0.5, high=1.25)
    (2.0, 0.75)
    """
    f = spectrum.frequency
    positive = f > 0
    weight = np.where(positive, f, 1.0) ** order if order < 0 else f**order
    integrand = spectrum.density * np.where(positive | (order >= 0), weight, 0.0)
    return _integral(f, integrand, low, high)


def _integral(f, integrand, low, high):
    """Trapezoidal integral of a sampled integrand over low .. high, ends interpolated."""
    low, high = max(low, f[0]), min(high, f[-1])
    if not low < high:
        return 0.0
    inside = (f > low) & (f < high)
    ends = np.interp([low, high], f, integrand)
    x = np.concatenate(([low], f[inside], [high]))
    y = np.concatenate((ends[:1], integrand[inside], ends[1:]))
    return float(np.diff(x) @ (y[1:] + y[:-1])) / 2


def peak_frequency(spectrum):
    """Robust peak frequency [Hz]: mean frequency weighted by the fourth power of the density.

    fp = integral of f S^4 df / integral of S^4 df.  Steadier than the highest ordinate, which in
    an estimated spectrum jumps about; between the peaks if there are two of like height, and
    above the highest ordinate for a broad one (by 5 % for Pierson-Moskowitz,
    1 % for JONSWAP).

    Raises `InputError` for a spectrum without energy.

    Source: Young (1995), Ocean Engng 22, 669-686; IAHR list of sea state parameters (1989).

    >>> f = np.arange(0, 2, 1e-3)
    >>> round(peak_frequency(Spectrum(f, jonswap(f, hs=2, tp=5.0))), 4)
    0.2017
    """
    largest = spectrum.density.max()
    if not largest > 0:
        raise InputError("the spectrum holds no energy, so it has no peak")
    weight = (spectrum.density / largest) ** 4
    f = spectrum.frequency
    return _integral(f, f * weight, 0.0, inf) / _integral(f, weight, 0.0, inf)


def _band(spectrum, low, high):
    """Limits [Hz]: those given, else the conventional cut-offs about the peak."""
    if low is None or high is None:
        peak = peak_frequency(spectrum)
        low = CUT_OFF[0] * peak if low is None else low
        high = CUT_OFF[1] * peak if high is None else high
    return low, high


def _squared(spectrum, order, low, high):
    """Integral of f^order S^2, cleared of what the scatter of an estimate adds to S^2."""
    integrand = spectrum.frequency**order * spectrum.density**2
    return _integral(spectrum.frequency, integrand, low, high) / (
        1 + 2 / spectrum.degrees_of_freedom
    )


def goda_peakedness(spectrum, *, low=None, high=None):
    """Goda's peakedness Qp = 2 / m0^2 * integral of f S^2 df.

    Parameters
    ----------
    spectrum : Spectrum
    low, high : float [Hz], optional
        Band; by default 0.3 and 3 times the peak frequency.  The cut-off matters: it raises Qp
        by 3 % (Pierson-Moskowitz) or 2 % (JONSWAP) against ``low=0, high=inf``.

    Returns
    -------
    float
        2 for Pierson-Moskowitz without cut-off, 3.14 for JONSWAP with gamma = 3.3.

    Notes
    -----
    The scatter of an estimate with nu degrees of freedom raises the mean of S^2 by 1 + 2/nu;
    this is divided out.  The widening of a peak by the segment length is not.

    Source: Goda (1970), Rep. Port and Harbour Res. Inst. 9 (3); Goda (2010), Random Seas and
    Design of Maritime Structures, 3rd ed.

    Examples
    --------
    >>> f = np.arange(0, 4, 1e-3)
    >>> sea = Spectrum(f, pierson_moskowitz(f, hs=2, tp=5.0))
    >>> round(goda_peakedness(sea, low=0, high=np.inf), 3)
    2.0
    """
    low, high = _band(spectrum, low, high)
    return 2 * _squared(spectrum, 1, low, high) / moment(spectrum, 0, low=low, high=high) ** 2


def bandwidth(spectrum, *, low=None, high=None):
    """Longuet-Higgins bandwidth nu = sqrt(m0 m2 / m1^2 - 1), by default over 0.3 .. 3 fp.

    Strongly dependent on the cut-off [Hz]: 0.425 for Pierson-Moskowitz over all frequencies.
    Source: Longuet-Higgins (1975), J. Geophys. Res. 80, 2688-2694.

    >>> f = np.arange(0, 4, 1e-3)
    >>> sea = Spectrum(f, pierson_moskowitz(f, hs=2, tp=5.0))
    >>> round(bandwidth(sea), 3), round(bandwidth(sea, low=0, high=np.inf), 2)
    (0.326, 0.42)
    """
    low, high = _band(spectrum, low, high)
    m0, m1, m2 = (moment(spectrum, order, low=low, high=high) for order in (0, 1, 2))
    return float(np.sqrt(max(m0 * m2 / m1**2 - 1, 0.0)))


def benjamin_feir_index(steepness, qp, *, kph=inf):
    """Benjamin-Feir index of a sea: its steepness over its relative bandwidth.

    Parameters
    ----------
    steepness : array_like
        kp hs / 2, kp at the actual depth.
    qp : array_like
        Goda's peakedness.
    kph : array_like
        kp times depth; ``inf`` leaves out the effect of depth on the nonlinearity.

    Returns
    -------
    array
        BFI; 0 where the sea is too shallow to focus (kph <= 1.363).

    Notes
    -----
    BFI = (steepness / sqrt 2) / delta, delta = 1 / (qp sqrt(pi)), the same as
    sqrt(2) kp sqrt(m0) / delta.  In finite depth BFI^2 is multiplied by
    -(cg/c)^2 g X / (k omega omega'') = 4 n^2 X / (T b), with n = cg/c, T = tanh kh, X of
    `nonlinear_coefficient` and b = -4 k^2 omega''/omega = 4 n^2 - 4 (kh/T)(1 - T^2)(1 - kh T);
    1 in deep water.  For a narrow, long-crested sea.

    Source: Janssen (2003), J. Phys. Oceanogr. 33, 863-884; Janssen & Bidlot (2009), ECMWF Tech.
    Memo. 588 (delta from qp); Janssen & Onorato (2007), J. Phys. Oceanogr. 37, 2389-2400.

    Examples
    --------
    >>> round(float(benjamin_feir_index(0.1, 3.3)), 4)
    0.4136
    >>> float(benjamin_feir_index(0.1, 3.3, kph=1.3))
    0.0
    """
    steepness, qp = np.asarray(steepness, float), np.asarray(qp, float)
    factor = np.maximum(_focusing_factor(kph), 0.0)
    return steepness / np.sqrt(2) * qp * np.sqrt(np.pi) * np.sqrt(factor)


def _focusing_factor(kph):
    """4 n^2 X / (T b): cubic term over dispersion at relative depth `kph`, 1 in deep water."""
    kph = np.asarray(kph, float)
    x = nonlinear_coefficient(kph)
    kh = np.where(np.isfinite(kph), kph, 1.0)
    n, t = group_ratio(kh), np.tanh(kh)
    curvature = 4 * n**2 - 4 * (kh / t) * (1 - t**2) * (1 - kh * t)
    return np.where(np.isfinite(kph), 4 * n**2 * x / (t * curvature), 1.0)


def hs_sampling_error(spectrum, duration):
    """Relative standard error of Hs from a Gaussian record of `duration` [s].

    var(m0) = (1/duration) * integral of S^2 df, and Hs has half the relative error of m0: about
    6 % for 120 peak periods of a JONSWAP sea, 11 % for 32.  Valid when the duration is many
    times the correlation time of the groups; groups from nonlinear focusing add to it.  The
    scatter of an estimated spectrum is divided out as in `goda_peakedness`.

    Source: Bendat & Piersol (2010), Random Data, 4th ed., section 8.2.

    >>> f = np.arange(0, 2, 1e-3)
    >>> round(hs_sampling_error(Spectrum(f, jonswap(f, hs=2, tp=10.0)), 1200.0), 3)
    0.056
    """
    if not duration > 0:
        raise InputError(f"duration must be a positive number of seconds, got {duration!r}")
    variance = _squared(spectrum, 0, 0.0, inf) / duration
    return 0.5 * float(np.sqrt(variance)) / moment(spectrum, 0)


def crest_trough_correlation(spectrum, *, low=None, high=None):
    """Correlation r of the wave envelope half a mean period apart, 0 .. 1.

    r = sqrt(rho^2 + lambda^2) at Tm01/2, rho and lambda the cosine and sine transforms of S/m0:
    what `forecaster.waves.heights.correlated_height_exceedance` takes.  Band [Hz] by default
    0.3 .. 3 fp.  Source: Tayfun (1990), J. Waterw. Port Coast. Ocean Engng 116, 686-707.

    >>> f = np.arange(0, 4, 1e-3)
    >>> round(crest_trough_correlation(Spectrum(f, jonswap(f, hs=2, tp=5.0))), 2)
    0.75
    """
    low, high = _band(spectrum, low, high)
    f = spectrum.frequency
    m0, m1 = (moment(spectrum, order, low=low, high=high) for order in (0, 1))
    phase = np.pi * f * m0 / m1
    parts = (
        _integral(f, spectrum.density * part, low, high) for part in (np.cos(phase), np.sin(phase))
    )
    return float(np.hypot(*parts)) / m0


def noise_floor(spectrum, fp):
    """Density [m^2/Hz] of white sensor noise, from the upper end of an estimated spectrum.

    Median density in the upper quarter of the frequencies and above 4 `fp` [Hz], divided by the
    median of a chi-square estimate of unit mean.  An upper bound: the tail of the sea is in it,
    a thousandth of m0/fp at 5.5 fp.  0 where the record does not reach high enough to tell.

    >>> f = np.arange(0, 2, 1e-2)
    >>> round(float(noise_floor(Spectrum(f, np.full(f.size, 0.02)), 0.1)), 3)
    0.02
    """
    f = spectrum.frequency
    above = f >= max(4 * fp, 0.75 * f[-1])
    if above.sum() < 4:
        return 0.0
    median_ratio = (1 - 2 / (9 * spectrum.degrees_of_freedom)) ** 3  # Wilson & Hilferty (1931)
    return float(np.median(spectrum.density[above]) / median_ratio)


def sea_state(elevation, dt, *, depth=inf, spread=None):
    """Parameters of the sea in a record, sensor noise included.

    Parameters
    ----------
    elevation : (n,) array_like [m]
        Without gaps; tide and drift removed beforehand.
    dt : float [s]
    depth : float [m]
    spread : float or None [deg]
        Circular standard deviation of direction, handed through; None if unknown.

    Returns
    -------
    SeaState
        Hs from the variance of the record; Tm01 and Tm02 over all resolved frequencies;
        bandwidth and Qp over 0.3 .. 3 fp.

    Raises
    ------
    InputError
        As in `estimate_spectrum`, and for a record without waves.

    Examples
    --------
    >>> t = np.arange(0, 1200, 0.5)
    >>> state = sea_state(np.sin(2 * np.pi * t / 10), 0.5, depth=20.0)
    >>> round(state.hs, 3), round(state.tp, 2), round(state.kph, 3)
    (2.828, 10.0, 1.037)
    """
    spectrum = estimate_spectrum(elevation, dt)
    hs = 4 * float(np.std(elevation))
    fp = peak_frequency(spectrum)
    m0, m1, m2 = (moment(spectrum, order) for order in (0, 1, 2))
    kp = float(wavenumber(2 * np.pi * fp, depth))
    steepness = kp * hs / 2
    qp = goda_peakedness(spectrum)
    return SeaState(
        hs=hs,
        tp=1 / fp,
        tm01=m0 / m1,
        tm02=float(np.sqrt(m0 / m2)),
        kp=kp,
        steepness=steepness,
        bandwidth=bandwidth(spectrum),
        qp=qp,
        bfi=float(benjamin_feir_index(steepness, qp)),
        bfi_depth=float(benjamin_feir_index(steepness, qp, kph=kp * depth)),
        kph=kp * depth,
        depth=float(depth),
        spread=spread,
        hs_error=hs_sampling_error(spectrum, len(elevation) * dt),
    )
