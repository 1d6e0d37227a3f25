"""Zero-crossing waves of a record, wave groups, and how often large waves are to be expected.

A wave is a zero-down-crossing wave about the mean level: a trough and the crest that follows
it.  Ratios are to the significant wave height, and an exceedance function gives the probability
that one wave drawn at random is larger; it is 1 for a negative ratio.
"""

from __future__ import annotations

import numpy as np

from forecaster.datatypes import Waves, WaveStatistics
from forecaster.errors import InputError
from forecaster.waves.linear import GRAVITY, wavenumber

_HERMITE_NODES, _HERMITE_WEIGHTS = np.polynomial.hermite_e.hermegauss(48)
_HERMITE_WEIGHTS = _HERMITE_WEIGHTS / _HERMITE_WEIGHTS.sum()
_LARGEST_RATIO = 6.0  # upper end of integrals over the ratio: exp(-2 * 6^2) is 5e-32


def zero_crossing_waves(elevation, dt, *, start=0.0):
    """Zero-down-crossing waves of one record.

    Parameters
    ----------
    elevation : (n,) array_like [m]
        About the mean level; NaN in gaps.
    dt : float [s]
    start : float [s]
        Time of the first sample.

    Returns
    -------
    Waves
        The complete waves, in order of time.  Waves that touch a gap, and the incomplete ones at
        either end, are left out.

    Raises
    ------
    InputError
        For anything but one row of samples, or a step that is not positive.

    Notes
    -----
    Crossings by linear interpolation; crests and troughs are the vertex of the parabola through
    each extreme sample and its neighbours.  At 16 samples a period the height of a sine is
    within 0.05 %, at 8 within 0.8 %, at 4 within 12 %.  A sample of exactly zero belongs to the
    side that the surface came from, so that touching the mean level is not a crossing.

    Source: IAHR list of sea state parameters (1989) for the definitions.

    Examples
    --------
    >>> t = np.arange(0, 60, 0.5)
    >>> waves = zero_crossing_waves(3 * np.sin(2 * np.pi * t / 10), 0.5)
    >>> waves.height.size, round(float(waves.height[0]), 2), round(float(waves.start[0]), 2)
    (5, 6.0, 5.0)
    """
    elevation = np.asarray(elevation, float)
    if elevation.ndim != 1:
        raise InputError(f"waves are counted in one row of samples, got shape {elevation.shape}")
    first, last, crest_at, crest, trough = _waves(elevation[None], dt)
    return Waves(
        start=start + dt * first,
        end=start + dt * last,
        crest_time=start + dt * crest_at,
        height=crest + trough,
        crest=crest,
        trough=trough,
    )


def interval_maxima(elevation, dt, edges):
    """Largest zero-down-crossing wave height and crest in each of several intervals.

    Parameters
    ----------
    elevation : (..., n) array_like [m]
        Rows of samples about the mean level; NaN in gaps.
    dt : float [s]
    edges : (m + 1,) array_like [s]
        Increasing; interval j is ``edges[j] <= time < edges[j + 1]``, the first sample of every
        row at time 0.

    Returns
    -------
    heights, crests : (..., m) arrays [m]
        A wave belongs to the interval that holds its crest; 0 where there is no wave.  Rows must
        reach a wave beyond the edges at both ends, for incomplete waves are not counted.

    Raises
    ------
    InputError
        For edges that do not increase, or a step that is not positive.

    Notes
    -----
    Waves as in `zero_crossing_waves`.

    Examples
    --------
    >>> t = np.arange(0, 60, 0.5)
    >>> heights, crests = interval_maxima(t * np.sin(2 * np.pi * t / 10), 0.5, [0, 20, 40, 90])
    >>> heights.round(1).tolist()
    [20.3, 60.1, 100.0]
    """
    elevation, edges = np.asarray(elevation, float), np.asarray(edges, float)
    if edges.ndim != 1 or edges.size < 2 or not (np.diff(edges) > 0).all():
        raise InputError(f"edges must be one increasing row of at least 2 times, got {edges!r}")
    shape = (*elevation.shape[:-1], edges.size - 1)
    rows = elevation.reshape(-1, elevation.shape[-1])
    n = rows.shape[1]
    first, _, crest_at, crest, trough = _waves(rows, dt)
    row = (first // n).astype(int)
    interval = np.searchsorted(edges, dt * (crest_at - n * row), side="right") - 1
    held = (interval >= 0) & (interval < edges.size - 1)
    cell = (row[held], interval[held])
    heights, crests = np.zeros((2, len(rows), edges.size - 1))
    np.maximum.at(heights, cell, (crest + trough)[held])
    np.maximum.at(crests, cell, crest[held])
    return heights.reshape(shape), crests.reshape(shape)


def _waves(rows, dt):
    """Waves of all rows at once.

    Returns the positions of both crossings and of the crest, in samples counted through the
    flattened rows, and the crest and (positive) trough.
    """
    if not (np.isfinite(dt) and dt > 0):
        raise InputError(f"dt must be a positive number of seconds, got {dt!r}")
    n = rows.shape[1]
    above = _above(rows)
    crossing = np.zeros(rows.shape, bool)
    crossing[:, :-1] = above[:, :-1] & ~above[:, 1:]
    flat = rows.reshape(-1)
    before = np.flatnonzero(crossing)
    if before.size < 2:
        return (np.empty(0),) * 5
    position = before + flat[before] / (flat[before] - flat[before + 1])
    # segment i runs from sample before[i] + 1 to before[i + 1]; the tail after the last crossing
    # and the segments that join two rows are dropped
    samples = slice(before[0], before[-1] + 2)
    begin = before[:-1] + 1 - samples.start
    crest_at, crest = _vertices(flat[samples], begin)
    _, trough = _vertices(-flat[samples], begin)
    keep = before[:-1] // n == before[1:] // n
    keep &= np.isfinite(position[:-1] + position[1:] + crest + trough)
    return (
        position[:-1][keep],
        position[1:][keep],
        (crest_at + samples.start)[keep],
        crest[keep],
        trough[keep],
    )


def _above(rows):
    """Whether the surface is above the mean level; a zero or a gap keeps the side before it."""
    above = rows > 0
    unsure = ~above & ~(rows < 0)
    if unsure.any():
        index = np.where(unsure, 0, np.arange(rows.shape[1]))
        np.maximum.accumulate(index, axis=1, out=index)
        above = np.take_along_axis(above, index, axis=1)
    return above


def _vertices(values, begin):
    """Position and height of the largest parabola vertex of each segment of `values`.

    Segment i covers the samples begin[i] .. begin[i + 1] - 1; the last one ends a sample before
    the end of `values`, and `values` begins a sample before the first.
    """
    left, middle, right = values[:-2], values[1:-1], values[2:]
    peak = np.flatnonzero((middle >= left) & (middle >= right))
    drop = 2 * middle[peak] - left[peak] - right[peak]
    flat_top = drop == 0
    shift = 0.5 * (right[peak] - left[peak]) / np.where(flat_top, 1.0, drop)
    height = np.array(middle)
    height[peak] += 0.25 * (right[peak] - left[peak]) * shift
    offset = np.zeros(middle.size)
    offset[peak] = shift
    segment_begin = begin - 1  # `middle` is one sample behind `values`
    largest = np.maximum.reduceat(height, segment_begin)
    lengths = np.diff(np.append(segment_begin, middle.size))
    where = np.flatnonzero(~(height < np.repeat(largest, lengths)))
    where = where[np.searchsorted(where, segment_begin)]
    return where + 1 + offset[where], largest


def wave_groups(waves, threshold):
    """Runs of successive waves whose height reaches a threshold.

    Parameters
    ----------
    waves : Waves
    threshold : float [m]

    Returns
    -------
    first, length : (m,) integer arrays
        Index of the first wave of each run and the number of waves in it.  A gap in the record
        ends a run.

    Notes
    -----
    For waves independent of one another the mean length is 1/(1 - p), p the probability that a
    wave reaches the threshold; in real seas runs are longer.

    Source: Goda (1970), Rep. Port and Harbour Res. Inst. 9 (3); Kimura (1980), Proc. 17th
    Coastal Engng Conf.

    Examples
    --------
    >>> t = np.arange(6.0)
    >>> waves = Waves(t, t + 1, t + 0.7, *np.array([[1, 5, 6, 1, 7, 2]] * 3))
    >>> [run.tolist() for run in wave_groups(waves, 4.0)]
    [[1, 4], [2, 1]]
    """
    high = waves.height >= threshold
    linked = np.zeros(high.size, bool)
    linked[1:] = high[:-1] & (waves.start[1:] == waves.end[:-1])
    first = np.flatnonzero(high & ~linked)
    run = np.cumsum(high & ~linked) - 1
    return first, np.bincount(run[high], minlength=first.size).astype(int)


def group_statistics(waves, threshold):
    """Mean run length and mean total run (waves from one run's begin to the next), in waves.

    Runs as in `wave_groups` at `threshold` [m].  The mean length is 0 without a run; the mean
    total run is ``inf`` with fewer than two.  Source: Goda (1970), Rep. Port and Harbour Res.
    Inst. 9 (3).

    >>> t = np.arange(6.0)
    >>> waves = Waves(t, t + 1, t + 0.7, *np.array([[1, 5, 6, 1, 7, 2]] * 3))
    >>> group_statistics(waves, 4.0)
    (1.5, 3.0)
    """
    first, length = wave_groups(waves, threshold)
    total = float(np.diff(first).mean()) if first.size > 1 else np.inf
    return float(length.mean()) if length.size else 0.0, total


def _not_negative(ratio):
    return np.maximum(np.asarray(ratio, float), 0.0)


def rayleigh_height_exceedance(ratio):
    """P(H / Hs > ratio) = exp(-2 ratio^2): linear waves of a very narrow spectrum.

    Too high for real seas (1.5 to 6 times at twice Hs).  Source: Longuet-Higgins (1952), J. Mar.
    Res. 11, 245-266.

    >>> round(1 / float(rayleigh_height_exceedance(2.0)))
    2981
    """
    return np.exp(-2 * _not_negative(ratio) ** 2)


def rayleigh_crest_exceedance(ratio):
    """P(crest / Hs > ratio) = exp(-8 ratio^2): linear waves; too low for steep seas.

    Source: Longuet-Higgins (1952), J. Mar. Res. 11, 245-266.

    >>> round(1 / float(rayleigh_crest_exceedance(1.25)))
    268337
    """
    return np.exp(-8 * _not_negative(ratio) ** 2)


def forristall_height_exceedance(ratio):
    """P(H / Hs > ratio) = exp(-(ratio / 0.681)^2.126), fitted to storm waves.

    Source: Forristall (1978), J. Geophys. Res. 83 (C5), 2353-2358.

    >>> round(1 / float(forristall_height_exceedance(2.0)))
    19519
    """
    return np.exp(-((_not_negative(ratio) / 0.681) ** 2.126))


def forristall_crest_exceedance(ratio, *, hs, tm01, depth=np.inf, directional=True):
    """P(crest / Hs > ratio) with second-order bound waves.

    Parameters
    ----------
    ratio : array_like
        Crest height over Hs.
    hs : array_like [m]
    tm01 : array_like [s]
        Mean period m0/m1.
    depth : array_like [m]
    directional : bool
        Short-crested sea (the default), or long-crested.

    Returns
    -------
    array

    Raises
    ------
    InputError
        Unless `hs` and `tm01` are positive.

    Notes
    -----
    P = exp(-(ratio / a)^b), S1 = 2 pi hs / (g tm01^2), Ur = hs / (k1^2 depth^3), k1 the
    wavenumber of tm01.  Long-crested: a = 0.3536 + 0.2892 S1 + 0.1060 Ur,
    b = 2 - 2.1597 S1 + 0.0968 Ur^2; short-crested: a = 0.3536 + 0.2568 S1 + 0.0800 Ur,
    b = 2 - 1.7912 S1 - 0.5302 Ur + 0.284 Ur^2.  Fitted to second-order simulations; free-wave
    nonlinearity and breaking are not in it.

    Source: Forristall (2000), J. Phys. Oceanogr. 30, 1931-1943; DNV-RP-C205, section 3.5.10
    (coefficients from memory).

    Examples
    --------
    >>> p = forristall_crest_exceedance(1.25, hs=10.0, tm01=11.3, directional=False)
    >>> round(1 / float(p))
    24364
    """
    hs, tm01, depth = (np.asarray(value, float) for value in (hs, tm01, depth))
    if not ((hs > 0) & (tm01 > 0)).all():
        raise InputError(f"hs and tm01 must be positive, got {hs!r} m and {tm01!r} s")
    s1 = 2 * np.pi * hs / (GRAVITY * tm01**2)
    ursell = hs / (wavenumber(2 * np.pi / tm01, depth) ** 2 * depth**3)
    if directional:
        a = 0.3536 + 0.2568 * s1 + 0.0800 * ursell
        b = 2 - 1.7912 * s1 - 0.5302 * ursell + 0.284 * ursell**2
    else:
        a = 0.3536 + 0.2892 * s1 + 0.1060 * ursell
        b = 2 - 2.1597 * s1 + 0.0968 * ursell**2
    return np.exp(-((_not_negative(ratio) / a) ** b))


def tayfun_crest_exceedance(z, mu):
    """P(crest > z sigma) with second-order bound waves of a narrow spectrum.

    Parameters
    ----------
    z : array_like
        Crest height over the standard deviation of the elevation (4 times the ratio to Hs).
    mu : array_like
        Wave steepness k sigma, not negative; 0 gives Rayleigh.

    Returns
    -------
    array

    Notes
    -----
    P = exp(-(sqrt(1 + 2 mu z) - 1)^2 / (2 mu^2)), written so that mu -> 0 loses no digits.
    Deep water.  Source: Tayfun (1980), J. Geophys. Res. 85 (C3), 1548-1552.

    Examples
    --------
    >>> round(float(tayfun_crest_exceedance(5.0, 0.1)), 8)
    0.00018808
    """
    z, mu = _not_negative(z), np.asarray(mu, float)
    if not (mu >= 0).all():
        raise InputError(f"mu must not be negative, got {mu!r}")
    linear_crest = 2 * z / (np.sqrt(1 + 2 * mu * z) + 1)
    return np.exp(-(linear_crest**2) / 2)


def correlated_height_exceedance(ratio, r):
    """P(H / Hs > ratio) = exp(-4 ratio^2 / (1 + r)) for a spectrum of finite width.

    `r` is the correlation of crest and trough, 0 .. 1 (`spectrum.crest_trough_correlation`); 1
    is Rayleigh.  Leading term, for large waves.  Source: Naess (1985), Ocean Engng 12, 221-234;
    Tayfun (1990), J. Waterw. Port Coast. Ocean Engng 116, 686-707.

    >>> round(1 / float(correlated_height_exceedance(2.0, 0.7)))
    12231
    """
    r = np.asarray(r, float)
    if not ((r >= 0) & (r <= 1)).all():
        raise InputError(f"r must lie in 0 .. 1, got {r!r}")
    return np.exp(-4 * _not_negative(ratio) ** 2 / (1 + r))


def excess_kurtosis_from_bfi(bfi):
    """Excess kurtosis kappa40 = (pi / sqrt 3) BFI^2 of a long-crested sea of a narrow spectrum.

    The kurtosis itself is 3 more.  Directional spread reduces it; bound waves are not in it.
    Source: Mori & Janssen (2006), J. Phys. Oceanogr. 36, 1471-1483.

    >>> round(float(excess_kurtosis_from_bfi(1.0)), 4)
    1.8138
    """
    return np.pi / np.sqrt(3) * np.asarray(bfi, float) ** 2


def mori_janssen_height_exceedance(ratio, kappa40):
    """P(H / Hs > ratio) in a weakly non-Gaussian sea.

    Parameters
    ----------
    ratio : array_like
        Wave height over Hs.
    kappa40 : array_like
        Excess kurtosis of the elevation, 0 in a Gaussian sea.

    Returns
    -------
    array
        Limited to 0 .. 1: the series turns negative in the far tail of a negative kappa40 (beyond
        twice Hs at -0.125), and is no longer a distribution above 3.

    Notes
    -----
    P = exp(-H^2/8) [1 + kappa40 (H^4 - 16 H^2)/384], H = 4 ratio the height in standard
    deviations: the Edgeworth series of a narrow-band envelope, of which the fourth moment of the
    elevation is 3 + kappa40.  At twice Hs, P = exp(-8) (1 + 8 kappa40).

    Source: Mori & Janssen (2006), J. Phys. Oceanogr. 36, 1471-1483 (form from memory, checked
    by its normalisation and fourth moment).

    Examples
    --------
    >>> round(float(mori_janssen_height_exceedance(2.0, 0.5) / rayleigh_height_exceedance(2.0)), 9)
    5.0
    """
    squared = (4 * _not_negative(ratio)) ** 2
    series = 1 + np.asarray(kappa40, float) * squared * (squared - 16) / 384
    return np.clip(np.exp(-squared / 8) * series, 0.0, 1.0)


def largest_exceedance(probability, n_waves):
    """P(the largest of n waves exceeds) = 1 - (1 - probability)^n, waves independent.

    Parameters
    ----------
    probability : array_like
        Exceedance of one wave, 0 .. 1; accurate down to the smallest numbers.
    n_waves : array_like
        Number of waves, not negative, not necessarily whole (duration / Tm02).

    Raises
    ------
    InputError
        For a probability outside 0 .. 1 or a negative number of waves.

    Examples
    --------
    >>> round(float(largest_exceedance(forristall_height_exceedance(2.0), 400)), 8)
    0.02028495
    """
    probability, n_waves = np.asarray(probability, float), np.asarray(n_waves, float)
    if not ((probability >= 0) & (probability <= 1)).all():
        raise InputError("probability must lie in 0 .. 1")
    if not (np.isfinite(n_waves) & (n_waves >= 0)).all():
        raise InputError(f"n_waves must be finite and not negative, got {n_waves!r}")
    certain = probability == 1
    log_none = n_waves * np.log1p(-np.where(certain, 0.0, probability))
    return np.where(certain & (n_waves > 0), 1.0, -np.expm1(log_none))[()]


def expected_largest(n_waves, *, exceedance=rayleigh_height_exceedance):
    """Mean of the largest ratio among `n_waves` independent waves.

    The integral of 1 - (1 - P(z))^n over z from 0, P = `exceedance`, by Gauss-Legendre panels to
    better than 1e-9 for the distributions of this module.  The asymptote
    (sqrt(ln n) + 0.5772/(2 sqrt(ln n)))/sqrt 2 for Rayleigh heights is 0.8 % above it at
    n = 100.

    Source: Longuet-Higgins (1952), J. Mar. Res. 11, 245-266.

    >>> round(float(expected_largest(1000)), 5)
    1.92795
    """
    nodes, weights = np.polynomial.legendre.leggauss(16)
    panels = np.linspace(0, _LARGEST_RATIO, 61)
    half = np.diff(panels)[:, None] / 2
    ratio = (panels[:-1, None] + half * (1 + nodes)).ravel()
    n_waves = np.asarray(n_waves, float)[..., None]
    return largest_exceedance(exceedance(ratio), n_waves) @ (half * weights).ravel()


def wave_statistics(waves, hs) -> WaveStatistics:
    """Number, largest and runs of the waves of a record, beside what is to be expected.

    Parameters
    ----------
    waves : Waves
    hs : float [m]
        Of the record; runs are of waves that reach it.

    Returns
    -------
    WaveStatistics

    Raises
    ------
    InputError
        Unless `hs` is positive.

    Notes
    -----
    The expected largest is that of independent waves of Forristall (1978), by
    `expected_largest`.  A single record scatters about it, with a standard deviation of 13 % of it
    for 50 waves and of 9 % for 500.

    Examples
    --------
    >>> t = np.arange(6.0)
    >>> found = wave_statistics(Waves(t, t + 1, t + 0.7, *np.array([[1, 5, 6, 1, 7, 2]] * 3)), 4.0)
    >>> found.count, found.highest_ratio, found.highest_time, found.run_length, found.total_run
    (6, 1.75, 4.7, 1.5, 3.0)
    """
    if not (np.isfinite(hs) and hs > 0):
        raise InputError(f"hs must be a positive number of metres, got {hs!r}")
    count = waves.height.size
    highest, crest = (float(of.max(initial=0.0)) for of in (waves.height, waves.crest))
    run_length, total_run = group_statistics(waves, hs)
    return WaveStatistics(
        count=count,
        highest=highest,
        highest_ratio=highest / hs,
        highest_time=float(waves.crest_time[waves.height.argmax()]) if count else np.nan,
        highest_crest=crest,
        crest_ratio=crest / hs,
        expected_ratio=float(expected_largest(count, exceedance=forristall_height_exceedance)),
        run_length=run_length,
        total_run=total_run,
    )


def rayleigh_largest_quantile(probability, n_waves):
    """Ratio to Hs that the largest of n Rayleigh heights stays below with `probability`.

    z = sqrt(-ln(1 - probability^(1/n)) / 2); 0.5 gives the median.  Source: Longuet-Higgins
    (1952), J. Mar. Res. 11, 245-266.

    >>> round(float(rayleigh_largest_quantile(0.5, 1000)), 5)
    1.90717
    """
    probability, n_waves = np.asarray(probability, float), np.asarray(n_waves, float)
    if not ((probability > 0) & (probability < 1)).all():
        raise InputError(f"probability must lie between 0 and 1, got {probability!r}")
    if not (n_waves > 0).all():
        raise InputError(f"n_waves must be positive, got {n_waves!r}")
    return np.sqrt(-np.log(-np.expm1(np.log(probability) / n_waves)) / 2)


def predictive_base_rate(ratio, n_waves, hs_error, *, exceedance=forristall_height_exceedance):
    """P(the largest of n waves exceeds ratio times the *measured* Hs) in an ordinary sea.

    Parameters
    ----------
    ratio : array_like
        Threshold over the measured Hs.
    n_waves : array_like
        duration / Tm02.
    hs_error : array_like
        Relative standard sampling error of the measured Hs
        (`forecaster.waves.spectrum.hs_sampling_error`); 0 gives the plain value.
    exceedance : callable
        P(one wave > ratio) given the true Hs.

    Returns
    -------
    array
        Broadcast over the three.

    Raises
    ------
    InputError
        For a negative or infinite `hs_error`, or as in `largest_exceedance`.

    Notes
    -----
    The average of 1 - (1 - P(ratio / s))^n over s = true Hs / measured Hs, taken lognormal:
    ln s normal with mean e^2 and standard deviation e = `hs_error`, by Gauss-Hermite quadrature
    (48 nodes); the mean makes the measured m0 unbiased.  Within 5 % of simulated Gaussian records
    of 32 or more peak periods of a JONSWAP sea up to 2.4 times Hs (a chi-square law of the same
    variance is up to 45 % high there, because it is less skewed than the variance of a peaked
    sea).  The waves are taken to be independent of the measured record, the error to be below
    about 0.15, and `exceedance` to depend on the true Hs only through the ratio.

    Source: predictive distribution of a future observation, Aitchison & Dunsmore (1975),
    Statistical Prediction Analysis, applied to Hs.

    Examples
    --------
    >>> plain = largest_exceedance(forristall_height_exceedance(2.0), 100)
    >>> rates = predictive_base_rate(2.0, 100, [0.0, 0.06, 0.11])
    >>> (rates / plain).round(1).tolist()
    [1.0, 2.0, 5.6]
    """
    ratio, n_waves, error = (
        np.asarray(value, float)[..., None] for value in (ratio, n_waves, hs_error)
    )
    if not (np.isfinite(error) & (error >= 0)).all():
        raise InputError(f"hs_error must be finite and not negative, got {hs_error!r}")
    true_over_measured = np.exp(error * (error + _HERMITE_NODES))
    probability = exceedance(ratio / true_over_measured)
    # not a matrix product: its last bit would depend on the shape
    return (largest_exceedance(probability, n_waves) * _HERMITE_WEIGHTS).sum(axis=-1)
