"""Quality of a record: the published real-time tests for in-situ surface waves.

Each test is a function Record -> QualityTest in `TESTS`; `check_quality` runs them all.  They
follow the tests that the IOOS manual for real-time quality control of in-situ surface wave data
(version 2.1, 2019) asks of a displacement series: gap, spike, range, segment shift, acceleration,
flat line, mean and standard deviation, percent good, operational frequency, low-frequency energy,
bulk range, rate of change.

**A big wave is not a spike.**  The manual's spike rule, |x| >= 4 standard deviations, would flag
every crest above Hs (4 standard deviations *are* Hs), so just the waves this package is about: an
extreme crest is 1.25 Hs and more.  It is replaced by a rule on shape, see `spike_samples`.

>>> import numpy as np
>>> t = np.arange(4000) * 0.5
>>> check_quality(Record(np.sin(2 * np.pi * t / 10), dt=0.5)).verdict
'pass'
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import lru_cache
from math import isfinite, sqrt

import numpy as np

from forecaster.datatypes import QualityReport, QualityTest, Record
from forecaster.records import clock

GRAVITY = 9.81  # m/s^2
RANGE = 40.0  # m about the mean; about twice the highest crests known; no source
PERCENT_GOOD = 90.0  # IOOS manual 2019, recommended
ACCELERATION = 0.5  # of g; IOOS manual 2019, recommended upper value
SHORTEST, SHORT = 20.0, 32.0  # peak periods
COARSEST = 4.0  # samples per peak period
COARSEST_STEP = 10.0  # s; a swell of 40 s, longer than any, at 4 samples; no source
SPIKES_SHARE = 0.02  # of samples, from which the sensor and not a sample is at fault
STEEPEST, STEEP = 0.25, 0.18  # kp Hs / 2
FLATTEST, FLAT = 2e-4, 1e-3
LARGEST_HS = 25.0  # m; common practice, no source
_SPIKE_PASSES = 10


@dataclass(frozen=True, slots=True)
class _Scales:
    """Rough peak period [s] and standard deviation [m] of a record; NaN period if it has none."""

    tp: float
    sigma: float
    frequency: np.ndarray
    density: np.ndarray

    @property
    def hs(self) -> float:
        return 4 * self.sigma


def _scales(record: Record) -> _Scales:
    """Peak period by fourth-power-weighted spectrum (Young 1995, Ocean Eng. 22, 669-686).

    Rough on purpose, and robust: gaps at zero, values beyond six robust standard deviations
    limited, the slowest 5 harmonics (drift) left out, averaged over 0.15 of the mean frequency so
    that a narrow line (an engine, a seiche) does not outdo the sea, and weighted within 40 % of
    the highest value.
    """
    frequency = np.fft.rfftfreq(record.n, record.dt)
    measured = ~np.isnan(record.elevation)
    if not measured.any():
        return _Scales(np.nan, 0.0, frequency, np.zeros(frequency.size))
    values = np.nan_to_num(record.elevation - np.nanmedian(record.elevation))
    spread = 1.4826 * np.median(np.abs(values[measured]))
    if spread > 0:
        values = np.clip(values, -6 * spread, 6 * spread)
    values = np.where(measured, values - values[measured].mean(), 0.0)
    sigma = float(np.sqrt(np.mean(values[measured] ** 2)))
    if sigma == 0 or record.n < 32:
        return _Scales(np.nan, sigma, frequency, np.zeros(frequency.size))
    taper = np.sin(np.pi * (np.arange(record.n) + 0.5) / record.n)
    power = np.abs(np.fft.rfft(values / sigma * taper)) ** 2
    fast = np.where(np.arange(power.size) < 5, 0.0, power)
    if not fast.any():
        return _Scales(np.nan, sigma, frequency, power)
    waves = record.duration * float(fast @ frequency / fast.sum())
    width = max(7, int(0.15 * waves))
    density = np.convolve(fast, np.ones(width) / width, mode="same")[: power.size]
    density[:5] = 0.0
    highest = frequency[np.argmax(density)]
    near = np.abs(frequency - highest) <= 0.4 * highest
    weights = (density[near] / density.max()) ** 4
    peak = float(weights @ frequency[near] / weights.sum())
    return _Scales(1 / peak, sigma, frequency, power)


def peak_period(record: Record) -> float:
    """Rough peak period [s] for the tests; NaN where nothing varies or n < 32.

    Not the sea state's: it only sets time scales here.

    >>> round(peak_period(Record(np.sin(2 * np.pi * np.arange(2000) / 20), dt=0.5)), 1)
    10.0
    """
    return _scales(record).tp


@lru_cache(maxsize=2)  # of one record, read and without drift; records are compared by identity
def spike_samples(record: Record) -> np.ndarray:
    """Which samples are spikes: they leave their neighbours and come back within Tp/10.

    Parameters
    ----------
    record : Record

    Returns
    -------
    (n,) bool array

    Notes
    -----
    A run of w samples, w dt <= Tp/10 (one sample if the sampling is coarser than that), is a
    spike if it departs from the cubic through the two samples on each side by r, where all of

    1. every sample departs to the same side by at least r/2, and so do the jumps at both ends;
    2. r > 8 robust standard deviations of such departures in the record (a noisy sensor has no
       spikes, only noise);
    3. r > half a standard deviation of the record (smaller ones do no harm);
    4. r > max(1/2, 3 rho) times the range of the other samples within Tp/4, where rho is the
       departure of a smooth wave of frequency 1.5 fp at this sampling: for s = (w+1)/2,
       rho = 1 - [(s+1)^2 cos(s q) - s^2 cos((s+1) q)]/(2 s + 1), q = 3 pi dt/Tp.

    Condition 4 is what keeps waves safe: it compares a sample with the slopes and accelerations
    of its own neighbours, not with the height of the sea.  A smooth wave of any height, however
    alone it stands, does not meet it, because at four and more samples per period the range of
    its neighbours grows with it.  The published 4-sigma rule (module docstring) is not used.  The
    two samples at either end are never spikes: one side alone cannot tell.
    A spike bends the cubic of its neighbours: the largest departure goes first, and the search is
    repeated without it.  Limit: at coarse sampling
    only spikes that are large beside the neighbouring waves can be told from them.

    Examples
    --------
    >>> x = np.sin(2 * np.pi * np.arange(2000) / 20)
    >>> x[700] += 30.0
    >>> np.flatnonzero(spike_samples(Record(x, dt=0.5))).tolist()
    [700]
    """
    scales = _scales(record)
    tp = scales.tp
    found = np.zeros(record.n, dtype=bool)
    if not isfinite(tp):
        found.setflags(write=False)
        return found
    measured = ~np.isnan(record.elevation)
    place = np.arange(record.n)
    for _ in range(_SPIKE_PASSES):
        use = measured & ~found
        values = np.interp(place, place[use], record.elevation[use])
        candidates = []
        for width in range(1, max(1, int(tp / 10 / record.dt)) + 1):
            candidates += _departures(values, width, record.dt, scales, use)
        if not candidates:
            break
        near = np.zeros(record.n, dtype=bool)
        for _, first, width in sorted(candidates, reverse=True):
            if not near[first : first + width].any():
                found[first : first + width] = True
                near[max(first - 2, 0) : first + width + 2] = True
    found.setflags(write=False)
    return found


def _departures(x, width, dt, scales, use) -> list[tuple[float, int, int]]:
    """Size, first sample and width of all runs of `width` samples that are spike-like."""
    n = x.size - width - 3  # runs start at 2 .. n + 1
    if n < 16:
        return []
    s = (width + 1) / 2
    inner = 0.5 * (x[1 : n + 1] + x[width + 2 : width + 2 + n])
    outer = 0.5 * (x[:n] + x[width + 3 : width + 3 + n])
    expected = ((s + 1) ** 2 * inner - s**2 * outer) / (2 * s + 1)
    run = np.lib.stride_tricks.sliding_window_view(x[2 : n + width + 1], width)
    departure = run - expected[:, None]
    mean = departure.mean(axis=1)
    size = np.abs(mean)
    scale = 1.4826 * np.median(np.abs(mean - np.median(mean)))
    side = np.sign(mean)[:, None]
    same_side = (departure * side >= 0.5 * size[:, None]).all(axis=1)
    jump = np.minimum(
        side[:, 0] * (run[:, 0] - x[1 : n + 1]), side[:, 0] * (run[:, -1] - x[width + 2 : -1])
    )
    same_side &= jump >= 0.5 * size
    q = 3 * np.pi * dt / scales.tp
    rho = abs(1 - ((s + 1) ** 2 * np.cos(s * q) - s**2 * np.cos((s + 1) * q)) / (2 * s + 1))
    factor = max(0.5, 3 * rho)
    reach = max(3, round(scales.tp / 4 / dt))
    found = []
    suspects = np.flatnonzero(same_side & (size > 8 * scale) & (size > 0.5 * scales.sigma))
    for k in suspects:
        first = k + 2
        around = np.concatenate(
            (x[max(first - reach, 0) : first], x[first + width : first + width + reach])
        )
        if size[k] > factor * np.ptp(around) and use[first : first + width].all():
            found.append((float(size[k]), int(first), width))
    return found


def without_spikes(record: Record) -> Record:
    """A record whose spikes are gaps; the same object if there are none.

    >>> x = np.sin(2 * np.pi * np.arange(2000) / 20)
    >>> x[700] += 30.0
    >>> without_spikes(Record(x, dt=0.5)).history
    ('1 spike sample(s) taken out as gaps, at 350 s',)
    """
    spikes = spike_samples(record)
    if not spikes.any():
        return record
    return record.step(
        f"{spikes.sum()} spike sample(s) taken out as gaps, at {_places(record, spikes)}",
        elevation=np.where(spikes, np.nan, record.elevation),
    )


def remove_drift(record: Record) -> Record:
    """The record about its own level: tide and drift, a low-order polynomial in time, removed.

    Parameters
    ----------
    record : Record
        Cut at the issue time.

    Returns
    -------
    Record
        About the slowly moving mean level.  The values are those of `record`, byte for byte,
        if the level keeps within 2 % of Hs.

    Notes
    -----
    Legendre polynomials of order up to 3 (one more for every 2 h beyond the first half hour, at
    most 10; 1 if the record is shorter than 20 Tp) are fitted by weighted least squares, spikes
    left out.  The
    weights fall as a squared cosine to zero over 16 Tp (half the record if shorter) at either
    end: a plain fit would lean on the last waves and attenuate them, since (p+1)^2/n of an end
    sample goes into its own fit; with the taper the fit sees oscillations of frequency f only as
    the sidelobes of the taper, about (16 f Tp)^-3.  The lowest order is taken that is within
    1 % of Hs of the highest everywhere.
    A polynomial of order p over T holds frequencies up to about p/(2T): far below 0.3 fp.

    Examples
    --------
    >>> t = np.arange(3600) * 0.5
    >>> waves = np.sin(2 * np.pi * t / 10)
    >>> level = remove_drift(Record(waves + 1e-3 * t, dt=0.5))
    >>> bool(np.abs(level.elevation - waves).max() < 0.02)
    True
    """
    tp = _scales(record).tp
    measured = ~np.isnan(record.elevation) & ~spike_samples(record)
    if not isfinite(tp) or measured.sum() < 32:
        return record
    place = np.linspace(-1, 1, record.n)
    ramp = min(16 * tp, record.duration / 2)
    from_end = (np.minimum(np.arange(record.n), np.arange(record.n)[::-1]) + 0.5) * record.dt
    weights = np.where(
        from_end < ramp, np.sin(0.5 * np.pi * np.minimum(from_end / ramp, 1.0)) ** 2, 1.0
    )
    if record.duration < SHORTEST * tp:
        highest = 1
    else:
        highest = min(10, 3 + int(max(0.0, record.duration - 1800.0) // 7200.0))
    root = np.sqrt(weights[measured])
    basis = np.polynomial.legendre.legvander(place, highest)

    def fitted(order: int) -> np.ndarray:
        columns = basis[:, : order + 1]
        solution, *_ = np.linalg.lstsq(
            columns[measured] * root[:, None], record.elevation[measured] * root, rcond=None
        )
        return columns @ solution

    best = fitted(highest)
    hs = 4 * float(np.std((record.elevation - best)[measured]))
    farthest = float(np.abs(best).max())
    if farthest < 0.02 * hs or hs == 0:
        return record.step(
            f"level keeps within {farthest:.3g} m, less than 2 % of Hs: no drift removed"
        )
    order = highest
    for lower in range(1, highest):
        trial = fitted(lower)
        if np.abs(trial - best).max() < 0.01 * hs:
            best, order = trial, lower
            break
    return record.step(
        f"level, tide and drift removed: polynomial of order {order}, {best.min():.4g} m to "
        f"{best.max():.4g} m, {best[-1] - best[0]:+.4g} m from start to end",
        elevation=record.elevation - best,
    )


def gap(record: Record) -> QualityTest:
    """Consecutive missing samples (IOOS test 9): suspect above Tp/4, where waves are lost."""
    missing = np.isnan(record.elevation)
    if not missing.any():
        return QualityTest("gap", "pass", record.n, 0, "no sample is missing")
    longest, at = _longest_run(missing)
    tp = _scales(record).tp
    flag = "pass" if longest * record.dt <= tp / 4 else "suspect"
    return QualityTest(
        "gap", flag, record.n, int(missing.sum()),
        f"{missing.sum()} of {record.n} samples missing, the longest gap {longest * record.dt:.4g}"
        f" s at {_place(record, at)}; a gap above a quarter of the peak period loses waves",
    )  # fmt: skip


def spike(record: Record) -> QualityTest:
    """Samples that leave their neighbours and come back within Tp/10 (IOOS test 10).

    See `spike_samples`.  Up to 2 % of the samples: suspect, and `without_spikes` takes them out;
    more: fail.
    """
    if not isfinite(_scales(record).tp):
        return _not_evaluated("spike")
    spikes = spike_samples(record)
    count = int(spikes.sum())
    measured = int(np.count_nonzero(~np.isnan(record.elevation)))
    if count == 0:
        return QualityTest("spike", "pass", measured, 0, "no sample jumps against its neighbours")
    flag = "fail" if count > SPIKES_SHARE * measured else "suspect"
    remedy = "check sensor and telemetry" if flag == "fail" else "taken out as gaps"
    return QualityTest(
        "spike", flag, measured, count,
        f"{count} sample(s) jump against their neighbours, at {_places(record, spikes)}: {remedy}",
    )  # fmt: skip


def value_range(record: Record) -> QualityTest:
    """Values that no sea reaches (IOOS test 11): beyond 40 m from the median level.

    Single spikes are left to the spike test; anything longer fails.  The mean level would follow
    the very values that are looked for.
    """
    level = record.elevation - np.nanmedian(record.elevation)
    beyond = np.abs(np.nan_to_num(level)) > RANGE
    measured = int(np.count_nonzero(~np.isnan(level)))
    if not beyond.any():
        largest = np.nanmax(np.abs(level))
        return QualityTest(
            "range", "pass", measured, 0, f"largest value {largest:.4g} m, limit {RANGE:g} m"
        )
    where = np.flatnonzero(beyond)[0]
    flag = "suspect" if not (beyond & ~spike_samples(record)).any() else "fail"
    return QualityTest(
        "range", flag, measured, int(beyond.sum()),
        f"{beyond.sum()} value(s) beyond {RANGE:g} m, the first {level[where]:.5g} m at "
        f"{_place(record, where)}: check the unit, or declare the fill value",
    )  # fmt: skip


def segment_shift(record: Record) -> QualityTest:
    """Shift of the mean between segments of 8 Tp (IOOS test 12).

    In units of the median standard deviation within segments: suspect above 0.5, fail above 1.
    The means of waves alone scatter by a few hundredths.
    """
    scales = _scales(record)
    size = int(8 * scales.tp / record.dt) if isfinite(scales.tp) else 0
    count = record.n // size if size else 0
    if count < 2:
        return _not_evaluated("segment_shift", "fewer than two segments of 8 peak periods")
    segments = without_spikes(record).elevation[-count * size :].reshape(count, size)
    full = (~np.isnan(segments)).mean(axis=1) >= 0.5
    if full.sum() < 2:
        return _not_evaluated("segment_shift", "fewer than two segments half measured")
    means = np.nanmean(segments[full], axis=1)
    sigma = float(np.median(np.nanstd(segments[full], axis=1)))
    if sigma == 0:
        return _not_evaluated("segment_shift", "most segments do not vary")
    steps = np.abs(np.diff(means)) / sigma
    worst = float(np.ptp(means) / sigma)
    flag = "fail" if worst > 1.0 else "suspect" if worst > 0.5 else "pass"
    return QualityTest(
        "segment_shift", flag, int(full.sum()), int((steps > 0.5).sum()),
        f"segment means differ by up to {worst:.2f} standard deviations (suspect above 0.5, fail "
        "above 1)" + ("" if flag == "pass" else ": check mooring, datum and sensor"),
    )  # fmt: skip


def acceleration(record: Record) -> QualityTest:
    """Share of samples with |vertical acceleration| above g/2 (IOOS test 13).

    Second differences over Tp/16 or one step.  The manual's limit holds for each sample; here
    2 % of them may exceed it before the record is suspect, 10 % before it fails, because a sharp
    crest that passes a fixed point may: the surface moves faster there than the water.
    """
    scales = _scales(record)
    if not isfinite(scales.tp):
        return _not_evaluated("acceleration")
    m = max(1, round(scales.tp / 16 / record.dt))
    x = record.elevation
    second = (x[2 * m :] - 2 * x[m:-m] + x[: -2 * m]) / (m * record.dt) ** 2
    second = second[~np.isnan(second)]
    if not second.size:
        return _not_evaluated("acceleration", "no three samples in a row")
    beyond = int(np.count_nonzero(np.abs(second) > ACCELERATION * GRAVITY))
    share = beyond / second.size
    flag = "fail" if share > 0.10 else "suspect" if share > 0.02 else "pass"
    return QualityTest(
        "acceleration", flag, second.size, beyond,
        f"{100 * share:.3g} % of the accelerations exceed g/2"
        + ("" if flag == "pass" else ": check the units of elevation and time, and the noise"),
    )  # fmt: skip


def flat_line(record: Record) -> QualityTest:
    """Longest run of one value (IOOS test 16): suspect above Tp/2, fail above 2 Tp."""
    same = np.diff(record.elevation) == 0
    longest, at = _longest_run(same)
    seconds = (longest + 1) * record.dt if longest else 0.0
    tp = _scales(record).tp
    measured = record.elevation[~np.isnan(record.elevation)]
    if np.ptp(measured) == 0 or seconds > 2 * tp:
        flag = "fail"
    else:
        flag = "suspect" if seconds > tp / 2 else "pass"
    detail = f"longest run of one value {seconds:.4g} s"
    if flag != "pass":
        detail += f" from {_place(record, at)}: check sensor, logger and resolution"
    return QualityTest("flat_line", flag, measured.size, longest + (longest > 0), detail)


def percent_good(record: Record) -> QualityTest:
    """Share of samples that are measured and no spike: below 90 % the record fails (IOOS)."""
    good = ~np.isnan(record.elevation) & ~spike_samples(record)
    percent = 100 * good.mean()
    flag = "pass" if percent >= PERCENT_GOOD else "fail"
    return QualityTest(
        "percent_good", flag, record.n, int((~good).sum()),
        f"{percent:.4g} % of the samples are good, at least {PERCENT_GOOD:g} % are needed"
        + ("" if flag == "pass" else ": choose a window without the gaps"),
    )  # fmt: skip


def bulk_range(record: Record) -> QualityTest:
    """Significant height between nothing and the largest sea (IOOS tests 15 and 19)."""
    hs = _scales(record).hs
    flag = "pass" if 0 < hs <= LARGEST_HS else "fail"
    return QualityTest(
        "bulk_range", flag, 1, int(flag == "fail"),
        f"Hs about {hs:.4g} m, plausible up to {LARGEST_HS:g} m"
        + ("" if flag == "pass" else ": check the unit of the elevation"),
    )  # fmt: skip


def steepness(record: Record) -> QualityTest:
    """Whether height and period fit each other: kp Hs / 2 with the deep-water kp.

    Above 0.25 no sea stands without breaking, below 0.0002 none is measured: most often the unit
    is wrong by 1000 (or the time unit by 60).  Suspect above 0.18 (0.15, the steepest sea that
    models are trained on, and the error of the rough period) and below 0.001.
    """
    scales = _scales(record)
    if not isfinite(scales.tp):
        return _not_evaluated("steepness")
    value = (2 * np.pi / scales.tp) ** 2 / GRAVITY * scales.hs / 2
    if value > STEEP:
        flag = "fail" if value > STEEPEST else "suspect"
        remedy = ": too steep; was another unit (mm, cm, ft) read as metres? give the true unit"
    elif value < FLAT:
        flag = "fail" if value < FLATTEST else "suspect"
        remedy = ": too flat; were metres read as mm or cm? give the true unit"
    else:
        flag, remedy = "pass", ""
    return QualityTest(
        "steepness", flag, 1, int(flag != "pass"),
        f"steepness kp Hs/2 about {value:.2g} (Hs {scales.hs:.3g} m, Tp {scales.tp:.3g} s){remedy}",
    )  # fmt: skip


def record_length(record: Record) -> QualityTest:
    """Length in peak periods: fail below 20, suspect below 32.

    The shortest records that models are trained on have 32 Tp; at 20 Tp the sampling error of Hs
    alone is about 14 %, which moves the probability of a 2 Hs wave by a factor of several.
    """
    tp = _scales(record).tp
    if not isfinite(tp):
        coarse = record.dt > COARSEST_STEP
        return QualityTest(
            "record_length", "fail", record.n, 1,
            f"{record.n} samples show no peak period: "
            + (f"no waves are sampled every {record.dt:g} s, check the unit of time" if coarse
               else "the record does not vary or is too short"),
        )  # fmt: skip
    length = record.duration / tp
    flag = "fail" if length < SHORTEST else "suspect" if length < SHORT else "pass"
    return QualityTest(
        "record_length", flag, record.n, int(flag != "pass"),
        f"{record.duration:.4g} s are {length:.3g} peak periods"
        + ("" if flag == "pass" else f": record at least {SHORT * tp:.0f} s, better 30 min"),
    )  # fmt: skip


def sampling(record: Record) -> QualityTest:
    """Samples per peak period: at least 4, or crests fall between the samples.

    The rough peak period is granted 5 %.
    """
    tp = _scales(record).tp
    if not isfinite(tp):
        return _not_evaluated("sampling")
    rate = tp / record.dt
    flag = "pass" if rate >= 0.95 * COARSEST else "fail"
    return QualityTest(
        "sampling", flag, record.n, int(flag == "fail"),
        f"{rate:.3g} samples per peak period, at least {COARSEST:g} are needed"
        + ("" if flag == "pass" else f": sample at {COARSEST / tp:.2g} Hz or faster"),
    )  # fmt: skip


def operational_frequency(record: Record) -> QualityTest:
    """Share of the variance in the highest fifth of the frequencies (IOOS test 17).

    More than 15 % there is noise, or waves too short for the sampling folded back.
    """
    return _band_share(
        record, "operational_frequency", 0.15,
        lambda f, tp: f > 0.8 * f[-1],
        "in the highest fifth of the frequencies", "noise, or waves too short for the sampling",
    )  # fmt: skip


def low_frequency_energy(record: Record) -> QualityTest:
    """Share of the variance below 0.3 fp (IOOS test 18): suspect above 10 %."""
    return _band_share(
        record, "low_frequency_energy", 0.10,
        lambda f, tp: (f > 0) & (f < 0.3 / tp),
        "below 0.3 of the peak frequency", "tide, drift, surf beat or an accelerometer's tilt",
    )  # fmt: skip


def hs_trend(record: Record) -> QualityTest:
    """Change of Hs between first and last third (IOOS test 20, rate of change): suspect.

    Against three times the sampling error of such a ratio, 0.62 sqrt(2/N) for N peak periods
    each (a JONSWAP sea of gamma 3.3), and at least 20 %: a sea that rises or falls within the
    record has no one Hs.
    """
    tp = _scales(record).tp
    third = record.n // 3
    elevation = without_spikes(record).elevation
    parts = [elevation[:third], elevation[-third:]]
    if not isfinite(tp) or any((~np.isnan(part)).mean() < 0.5 for part in parts):
        return _not_evaluated("hs_trend")
    first, last = (float(np.nanstd(part)) for part in parts)
    if first == 0 or last == 0:
        return _not_evaluated("hs_trend", "a third of the record does not vary")
    limit = max(0.2, 3 * 0.62 * sqrt(2 * tp / (third * record.dt)))
    change = float(np.log(last / first))
    flag = "suspect" if abs(change) > limit else "pass"
    return QualityTest(
        "hs_trend", flag, 2, int(flag == "suspect"),
        f"Hs changes from {4 * first:.3g} m to {4 * last:.3g} m between first and last third; "
        f"sampling explains up to {100 * np.expm1(limit):.0f} %"
        + ("" if flag == "pass" else ": use a shorter window"),
    )  # fmt: skip


TESTS = {
    "gap": gap,
    "spike": spike,
    "range": value_range,
    "segment_shift": segment_shift,
    "acceleration": acceleration,
    "flat_line": flat_line,
    "percent_good": percent_good,
    "bulk_range": bulk_range,
    "steepness": steepness,
    "record_length": record_length,
    "sampling": sampling,
    "operational_frequency": operational_frequency,
    "low_frequency_energy": low_frequency_energy,
    "hs_trend": hs_trend,
}


# Tests of the values as they were read: taking out the drift would spread a fill value over its
# neighbours, and tilt a line that was flat.
AS_READ = ("range", "flat_line")


def check_quality(
    record: Record, *, as_read: Record | None = None, unit_hint: str | None = None
) -> QualityReport:
    """All quality tests of a record and the verdict.

    Parameters
    ----------
    record : Record
        Cut at the issue time, drift removed.
    as_read : Record, optional
        The same before the drift was removed, for the tests in `AS_READ`.
    unit_hint : str, optional
        Unit as which the elevation was read, for the remedies.

    Returns
    -------
    QualityReport
        ``fail`` if any test fails, else ``suspect`` if any is suspect, else ``pass``.

    Examples
    --------
    >>> check_quality(Record(np.zeros(500), dt=0.5)).verdict
    'fail'
    """
    if np.isnan(record.elevation).all():
        missing = QualityTest(
            "gap", "fail", record.n, record.n, "every sample is missing: choose another window"
        )
        rest = [_not_evaluated(name, "nothing measured") for name in TESTS if name != "gap"]
        return QualityReport("fail", (missing, *rest))
    first = record if as_read is None else as_read
    tests = tuple(test(first if name in AS_READ else record) for name, test in TESTS.items())
    if unit_hint is not None:
        tests = tuple(
            replace(test, detail=f"{test.detail} (it was read as {unit_hint})")
            if test.name in ("range", "bulk_range", "steepness") and test.flag != "pass"
            else test
            for test in tests
        )
    flags = {test.flag for test in tests}
    verdict = "fail" if "fail" in flags else "suspect" if "suspect" in flags else "pass"
    return QualityReport(verdict, tests)


def _not_evaluated(name: str, why: str = "no peak period: the record does not vary or is too "
                   "short") -> QualityTest:  # fmt: skip
    return QualityTest(name, "not evaluated", 0, 0, why)


def _band_share(record, name, limit, band, where, cause) -> QualityTest:
    scales = _scales(record)
    if not isfinite(scales.tp):
        return _not_evaluated(name)
    inside = band(scales.frequency, scales.tp)
    share = float(scales.density[inside].sum() / scales.density[1:].sum())
    flag = "suspect" if share > limit else "pass"
    return QualityTest(
        name, flag, int(inside.sum()), int(inside.sum()) if flag == "suspect" else 0,
        f"{100 * share:.2g} % of the variance lies {where} (suspect above {100 * limit:g} %)"
        + ("" if flag == "pass" else f": {cause}"),
    )  # fmt: skip


def _longest_run(mask: np.ndarray) -> tuple[int, int]:
    """Length and first index of the longest run of true."""
    edges = np.diff(np.concatenate(([0], mask.astype(np.int8), [0])))
    starts, ends = np.flatnonzero(edges > 0), np.flatnonzero(edges < 0)
    if not starts.size:
        return 0, 0
    longest = int(np.argmax(ends - starts))
    return int(ends[longest] - starts[longest]), int(starts[longest])


def _place(record: Record, index: int) -> str:
    return clock.written(record.start + index * record.dt, calendar=record.calendar)


def _places(record: Record, mask: np.ndarray) -> str:
    where = np.flatnonzero(mask)
    listed = ", ".join(_place(record, index) for index in where[:5])
    return listed if where.size <= 5 else f"{listed} and {where.size - 5} more"
