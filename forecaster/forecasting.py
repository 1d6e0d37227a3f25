"""The chain from a record to a forecast: it joins steps and holds no mathematics of its own.

read -> cut at the issue time -> drift out -> quality -> spikes and gaps -> sea state, forward
run, scattering -> features -> model -> Forecast
"""

from __future__ import annotations

import time
from dataclasses import dataclass, replace
from functools import lru_cache
from math import inf, isfinite

import numpy as np

from forecaster.datatypes import (
    Domain,
    Exceedance,
    Forecast,
    GroupForecast,
    IntervalForecast,
    QualityReport,
    Reason,
    Record,
    SeaState,
    Target,
    WaveStatistics,
)
from forecaster.errors import InputError, OutsideDomain, QualityError
from forecaster.learning.domain import BOUNDING, assess
from forecaster.learning.events import HORIZON_COVERAGE, INTERVAL_PERIODS, interval_edges
from forecaster.learning.features import (
    FEATURES,
    FirstLook,
    Scene,
    feature_table,
    first_look,
    run_ahead,
)
from forecaster.learning.model import CRITERIA, Model, interval_90
from forecaster.learning.registry import load_model
from forecaster.records import read as reading
from forecaster.records.quality import check_quality, peak_period, remove_drift, without_spikes
from forecaster.serialize import program_version
from forecaster.waves.heights import (
    forristall_crest_exceedance,
    forristall_height_exceedance,
    largest_exceedance,
    predictive_base_rate,
    wave_statistics,
    zero_crossing_waves,
)
from forecaster.waves.linear import group_velocity
from forecaster.waves.scattering import group_content
from forecaster.waves.scattering_spectrum import ScatteringSpectrum, scattering_spectrum
from forecaster.waves.spectrum import sea_state

DEFAULT_WINDOW = 1800.0  # s
DEFAULT_HORIZON = 1800.0  # s, at the sensor itself
MAX_INTERVALS = 200
MAX_DISTANCE = 2e7  # m, half way round the Earth
MAX_OFF_AXIS = 30.0  # deg
SHOWN_RATIOS = {
    "height": np.arange(1.0, 2.81, 0.2).round(2),
    "crest": np.arange(0.6, 1.71, 0.1).round(2),
}
CAVEATS = (
    "This supports and does not replace marine-operations guidance, weather-routing advice and "
    "the judgement of the responsible person; local codes and limits come first.",
    "A low probability is not permission: an extreme wave can come in any sea.",
    "The probability is for one point and about the record's mean level: no tide, surge, set-down, "
    "hull or deck, and no moving vessel or moving sensor.",
    "The sea is taken as long-crested and as running straight from sensor to target.",
)


@dataclass(frozen=True, slots=True)
class Checked:
    """A record as it will be used, its quality and, unless that failed, its sea and its waves."""

    record: Record
    quality: QualityReport
    sea_state: SeaState | None
    waves: WaveStatistics | None


def along_wave_distance(range_m, bearing_deg, waves_from_deg) -> tuple[float, float]:
    """Along-wave part of the way from sensor to target, and the angle off it.

    Parameters
    ----------
    range_m : float [m]
        From sensor to target.
    bearing_deg : float [deg]
        Of the target from the sensor, from true north.
    waves_from_deg : float [deg]
        Where the waves come from, from true north.

    Returns
    -------
    distance : float [m]
    off_axis : float [deg]
        0 .. 30.

    Raises
    ------
    InputError
        More than 30 deg off: other waves than those recorded reach the target.

    Examples
    --------
    >>> distance, off = along_wave_distance(1500.0, 100.0, 270.0)
    >>> round(distance), round(off)
    (1477, 10)
    """
    if not all(isfinite(v) for v in (range_m, bearing_deg, waves_from_deg)) or range_m < 0:
        raise InputError(
            f"range must be a positive number of metres and directions finite degrees, got "
            f"{range_m!r}, {bearing_deg!r}, {waves_from_deg!r}"
        )
    off = abs((bearing_deg - waves_from_deg - 180 + 180) % 360 - 180)
    if off > MAX_OFF_AXIS:
        raise InputError(
            f"the target lies {off:.0f} deg off the direction the waves run to "
            f"({(waves_from_deg + 180) % 360:.0f} deg); up to {MAX_OFF_AXIS:.0f} deg can be "
            "answered, because beyond it other waves than those recorded arrive"
        )
    return range_m * float(np.cos(np.radians(off))), off


def check(
    record, *, at=None, window=DEFAULT_WINDOW, depth=None, sensor=None, spread=None,
    **reading_options,
) -> Checked:  # fmt: skip
    """Quality, sea state and waves of a record; no model is needed.

    Parameters
    ----------
    record : path, "-" or Record
    at : float [s] or ISO 8601 text, optional
        Issue time: nothing after it is used.
    window : float [s]
        How much before it is used at most.
    depth : float [m], optional
    sensor : str, optional
    spread : float [deg], optional
    **reading_options
        Of `forecaster.records.read.read_record`: unit, time_column, elevation_column,
        sampling_hz, fill_value; for files only.

    Raises
    ------
    RecordFormatError, InputError
    """
    if spread is not None and not (isfinite(spread) and 0 <= spread <= 90):
        raise InputError(f"spread must be 0 to 90 degrees, got {spread!r}")
    if depth is not None and not (0 < depth <= reading.MAX_DEPTH or depth == inf):
        raise InputError(
            f"depth must lie between 0 and {reading.MAX_DEPTH:g} m (inf for deep water), got "
            f"{depth!r}"
        )
    site = {
        name: value for name, value in (("depth", depth), ("sensor", sensor)) if value is not None
    }
    if isinstance(record, Record):
        if reading_options:
            raise InputError(
                f"{', '.join(reading_options)}: say how a file is read, but a Record was given"
            )
        if site:
            record = replace(record, **site)
        record = reading.cut(record, at, window)
    else:
        record = reading.read_record(record, at=at, window=window, **site, **reading_options)
    as_read = record
    record = remove_drift(as_read)
    quality = check_quality(record, as_read=as_read)
    if quality.verdict == "fail":
        return Checked(record, quality, None, None)
    record = _measured_part(without_spikes(record))
    record = reading.bridge_gaps(record, longest=0.25 * peak_period(record))
    sea = sea_state(record.elevation, record.dt, depth=record.depth, spread=spread)
    waves = zero_crossing_waves(record.elevation, record.dt, start=record.start)
    return Checked(record, quality, sea, wave_statistics(waves, sea.hs))


def _measured_part(record: Record) -> Record:
    """The record from the first to the last sample measured: the issue time is one of those."""
    measured = np.flatnonzero(~np.isnan(record.elevation))
    first, last = int(measured[0]), int(measured[-1])
    if last - first + 1 == record.n:
        return record
    warnings = record.warnings
    if last < record.n - 1:
        late = (record.n - 1 - last) * record.dt
        warnings = (*warnings, f"Nothing was measured in the last {late:.4g} s: "
                    "the forecast begins before them.")  # fmt: skip
    return record.step(
        "gaps at the ends cut off",
        elevation=record.elevation[first : last + 1],
        start=record.start + first * record.dt,
        warnings=warnings,
    )


def scattering(checked: Checked) -> ScatteringSpectrum:
    """Scattering spectrum of a checked record: eigenvalues, groups, energy shares.

    Raises
    ------
    QualityError
        If the record failed its quality tests.
    InputError
        For gaps too long to be bridged.
    NumericsError
        If the eigenvalues found cannot be certified.
    """
    if checked.sea_state is None:
        raise QualityError(_failed_tests(checked.quality), report=checked.quality)
    return scattering_spectrum(checked.record, checked.sea_state)


@lru_cache(maxsize=4)
def _model(name):
    return load_model(name)


def score(
    record, *, distance=0.0, horizon=None, at=None, window=DEFAULT_WINDOW, ratio=None, height=None,
    crest_ratio=None, spread=None, depth=None, current=None, sensor=None, model=None,
    strict=False, **reading_options,
) -> Forecast:  # fmt: skip
    """Probability of an extreme wave at the sensor or downwave of it.

    Parameters
    ----------
    record : path, "-" or Record
    distance : float [m]
        Along the waves, from sensor to target; 0 at the sensor.
    horizon : float [s], optional
        From the issue time (from the arrival of the first waves not yet passed, if a current
        delays them).  Default: the intervals whose waves are at least half measured; 30 minutes
        at the sensor.
    at : float [s] or ISO 8601 text, optional
        Issue time; the record's end by default.  Later rows change nothing.
    window : float [s]
        Length of record used.
    ratio, height, crest_ratio : float, optional
        One threshold: wave height over Hs (default 2.0), wave height in metres, or crest height
        over Hs.
    spread : float [deg], optional
        Circular standard deviation of direction; unknown if not given.
    depth : float [m], optional
        Deep water if not given.
    current : float [m/s], optional
        Along the waves, positive with them: shifts arrivals.
    sensor : str, optional
        fixed, buoy, radar or unknown.
    model : str, path or Model, optional
        Name, ``name/version`` or folder; the shipped default if not given.
    strict : bool
        Raise instead of answering without a probability.

    Returns
    -------
    Forecast
        ``answered`` is false, and probabilities are None, if the record failed its quality tests
        or the sea lies outside the model.

    Raises
    ------
    InputError, RecordFormatError, ModelError, NumericsError
    QualityError, OutsideDomain
        With ``strict=True`` only.
    """
    if not 0 <= distance <= MAX_DISTANCE:
        raise InputError(
            f"distance must be 0 or a positive number of metres downwave, up to {MAX_DISTANCE:g}, "
            f"got {distance!r}"
        )
    if horizon is not None and not (isfinite(horizon) and horizon > 0):
        raise InputError(f"horizon must be a positive number of seconds, got {horizon!r}")
    if current is not None and not abs(current) <= 5:
        raise InputError(f"current must be within 5 m/s either way, got {current!r}")
    criterion, asked = _asked(ratio, height, crest_ratio)
    fitted = model if isinstance(model, Model) else _model(None if model is None else str(model))
    checked = check(
        record, at=at, window=window, depth=depth, sensor=sensor, spread=spread, **reading_options
    )
    if checked.sea_state is None:
        if strict:
            raise QualityError(_failed_tests(checked.quality), report=checked.quality)
        return _without_quality(checked, fitted)
    record, sea = checked.record, checked.sea_state
    threshold = asked / sea.hs if height is not None else asked
    first = first_look(record, [distance], spread=spread)
    shift = _current_shift(first, current)
    scene = _scene(first, horizon, shift)
    domain = assess(
        sea, feature_table(scene, BOUNDING), BOUNDING, fitted.ranges,
        criterion=criterion, sensor=record.sensor, beyond=threshold > CRITERIA[criterion][1],
    )  # fmt: skip
    if strict and domain.status == "outside":
        raise OutsideDomain("; ".join(domain.reasons), reasons=domain.reasons)
    target = Target(
        distance=scene.distance,
        travel_time=scene.travel_time + shift,
        valid_from=float(scene.edges[0] + shift),
        valid_to=float(scene.edges[-1] + shift),
        criterion=criterion,
        threshold=threshold,
        threshold_m=threshold * sea.hs,
    )
    caveats = CAVEATS + _particular_caveats(checked, target, current, horizon)
    base = _unanswered(checked, fitted, scene, domain, target, caveats, shift)
    if domain.status == "outside":
        return base
    return _answered(base, fitted, Scene(run_ahead(first), 0, scene.edges), shift)


def _asked(ratio, height, crest_ratio) -> tuple[str, float]:
    """Criterion, and threshold as given: a height in metres is not yet a ratio."""
    given = [value for value in (ratio, height, crest_ratio) if value is not None]
    if len(given) > 1:
        raise InputError("give one of ratio, height and crest_ratio, not several")
    if given and not (isfinite(given[0]) and given[0] > 0):
        raise InputError(f"the threshold must be a positive number, got {given[0]!r}")
    return "height" if crest_ratio is None else "crest", float(given[0]) if given else 2.0


def _scene(first: FirstLook, horizon, shift) -> Scene:
    """The intervals of the horizon: those half measured, or those asked for.

    Intervals are counted in still water; a current that brings the waves `shift` < 0 seconds
    sooner leaves fewer of them after the issue time.
    """
    tp, issue = first.sea.tp, first.record.end + max(-shift, 0.0)
    length = INTERVAL_PERIODS * tp
    distance = float(first.distances[0])
    if horizon is not None or distance == 0:
        wanted = DEFAULT_HORIZON if horizon is None else horizon
        count = int(np.clip(np.ceil(wanted / length - 1e-9), 1, MAX_INTERVALS))
        return Scene(first, 0, interval_edges(issue, tp, count))
    slowest = distance / float(group_velocity(2 * np.pi * 1.6 / tp, first.sea.depth))
    count = int(np.clip(np.ceil(slowest / length) + 1, 1, MAX_INTERVALS))
    scene = Scene(first, 0, interval_edges(issue, tp, count))
    covered = np.flatnonzero(scene.coverage() >= HORIZON_COVERAGE)
    last = int(covered.max(initial=0))
    return Scene(first, 0, scene.edges[: last + 2])


def _base_rates(sea, criterion, ratios, duration):
    """(with Hs uncertain, with Hs known): P(largest >= k Hs) in `duration` seconds."""
    if criterion == "height":
        exceedance = forristall_height_exceedance
    else:

        def exceedance(k):
            return forristall_crest_exceedance(
                k, hs=sea.hs, tm01=sea.tm01, depth=sea.depth, directional=False
            )

    waves = duration / sea.tm02
    ratios = np.asarray(ratios, float)
    predictive = predictive_base_rate(ratios, waves, sea.hs_error, exceedance=exceedance)
    return predictive, largest_exceedance(exceedance(ratios), waves)


def _odds_ratio(probability, base_rate) -> float | None:
    """Odds of one over odds of the other; None where either is 0 or 1 to rounding."""
    if not (0 < probability < 1 and 0 < base_rate < 1):
        return None
    return probability / (1 - probability) / (base_rate / (1 - base_rate))


def _unanswered(checked, fitted, scene, domain, target, caveats, shift) -> Forecast:
    """All that needs no model: sea state, target, base rates."""
    record, sea = checked.record, checked.sea_state
    criterion, threshold = target.criterion, target.threshold
    grid = np.unique([*SHOWN_RATIOS[criterion], np.clip(threshold, *CRITERIA[criterion])])
    length, duration = scene.edges[1] - scene.edges[0], scene.edges[-1] - scene.edges[0]
    each, _ = _base_rates(sea, criterion, threshold, length)
    base, known = _base_rates(sea, criterion, threshold, duration)
    bases, _ = _base_rates(sea, criterion, grid, duration)
    times = scene.edges + shift
    return Forecast(
        issued_at=time.time(),
        record=record,
        quality=checked.quality,
        sea_state=sea,
        target=target,
        probability=None,
        probability_90=None,
        base_rate=float(base),
        base_rate_known_hs=float(known),
        odds_ratio=None,
        intervals=tuple(
            IntervalForecast(
                start=float(start),
                end=float(end),
                lead=float(start - record.end),
                probability=None,
                base_rate=float(each),
                coverage=float(coverage),
                median_height=None,
            )
            for start, end, coverage in zip(times, times[1:], scene.coverage(), strict=False)
        ),
        exceedance=tuple(
            Exceedance(float(k), float(k * sea.hs), None, float(rate))
            for k, rate in zip(grid, bases, strict=True)
        ),
        groups=(),
        reasons=(),
        domain=domain,
        caveats=caveats,
        model=fitted.identity,
        program_version=program_version(),
    )


def _answered(base: Forecast, fitted, scene, shift) -> Forecast:
    """The same with what the model says."""
    criterion, hs = base.target.criterion, base.sea_state.hs
    table, names = feature_table(scene), tuple(FEATURES)
    grid = [row.ratio for row in base.exceedance]
    asked = float(np.clip(base.target.threshold, *CRITERIA[criterion]))
    at = grid.index(asked)
    inner = fitted.intervals(table, names, grid, criterion=criterion)
    whole = fitted.horizon(inner, criterion=criterion)
    probability = float(whole.probability[0, at])
    low, high = interval_90(probability, whole.error[0, at])
    median = hs * _median_heights(fitted, table, names)
    odds_ratio = None
    if asked == base.target.threshold:  # else the two are not about one height
        odds_ratio = _odds_ratio(probability, base.base_rate)
    return replace(
        base,
        probability=probability,
        probability_90=(float(low), float(high)),
        odds_ratio=odds_ratio,
        intervals=tuple(
            replace(interval, probability=float(p), median_height=float(m))
            for interval, p, m in zip(base.intervals, inner.probability[:, at], median, strict=True)
        ),
        exceedance=tuple(
            replace(row, probability=float(p))
            for row, p in zip(base.exceedance, whole.probability[0], strict=True)
        ),
        groups=_groups(scene, shift),
        reasons=_reasons(fitted, table, names, inner.probability[:, at], asked, criterion),
        answered=True,
    )


def _median_heights(fitted, table, names) -> np.ndarray:
    """(m,) height ratio that the largest wave of each interval exceeds as often as not."""
    grid = np.linspace(*CRITERIA["height"], 12)
    p = fitted.intervals(table, names, grid).probability
    return np.array([np.interp(-0.5, -row, grid) for row in p])


def _current_shift(first: FirstLook, current) -> float:
    """Change of the travel time [s] by a current along the waves [m/s]; None: not known."""
    distance = float(first.distances[0])
    if not current or distance == 0:
        return 0.0
    speed = float(group_velocity(2 * np.pi / first.sea.tp, first.sea.depth))
    if speed + current <= 0.2 * speed:
        raise InputError(
            f"a current of {current:g} m/s against waves of group speed {speed:.3g} m/s all but "
            "stops them; no arrival can be given"
        )
    return distance / (speed + current) - distance / speed


def _groups(scene, shift) -> tuple[GroupForecast, ...]:
    """The five highest groups of the record, in order of time."""
    sea = scene.ahead.sea
    groups = sorted(group_content(scene.ahead.envelope), key=lambda g: -g.height)[:5]
    return tuple(
        GroupForecast(
            time=g.peak_time,
            arrival=g.peak_time + scene.travel_time + shift,
            duration=g.end - g.start,
            height=g.height,
            eigenvalues=tuple(complex(v) for v in g.eigenvalues),
            focus_distance=g.focus_distance if isfinite(g.focus_distance) else None,
            amplification=g.amplification if isfinite(g.amplification) else None,
        )
        for g in sorted(groups, key=lambda g: g.peak_time)
        if g.height > 0.5 * sea.hs
    )


def _reasons(fitted, table, names, probability, ratio, criterion, most=5) -> tuple[Reason, ...]:
    """What moves the most likely interval: log odds with a group of features, less without.

    Without means: at the middle of the range the model was taught.
    """
    row = table[int(np.argmax(probability))]
    used = fitted.heads[criterion].names
    words = dict.fromkeys(FEATURES[name].words for name in used)
    rows = [row]
    for word in words:
        changed = row.copy()
        for name in used:
            if FEATURES[name].words == word:
                changed[names.index(name)] = np.mean(fitted.ranges[name])
        rows.append(changed)
    p = fitted.intervals(np.array(rows), names, [ratio], criterion=criterion).probability[:, 0]
    p = np.clip(p, 1e-12, 1 - 1e-12)
    odds = np.log(p) - np.log1p(-p)
    effects = sorted(
        (Reason(word, float(odds[0] - other)) for word, other in zip(words, odds[1:], strict=True)),
        key=lambda reason: -abs(reason.effect),
    )
    return tuple(reason for reason in effects[:most] if abs(reason.effect) > 0.05)


def _particular_caveats(checked, target, current, horizon) -> tuple[str, ...]:
    record, sea = checked.record, checked.sea_state
    caveats = []
    if not isfinite(record.depth):
        caveats.append("No depth was given: deep water is assumed.")
    if target.distance > 0 and current is None:
        speed = target.distance / target.travel_time
        moved = target.travel_time - target.distance / (speed + 1.0)
        caveats.append(
            f"Current unknown: 1 m/s along the waves would move arrivals by {moved:.0f} s."
        )
    if target.threshold < CRITERIA[target.criterion][0]:
        caveats.append(
            f"The threshold asked for is {target.threshold:.2g} Hs; the probability is that of "
            f"{CRITERIA[target.criterion][0]:g} Hs, a lower bound."
        )
    late = target.valid_from - record.end
    if late > 1:
        caveats.append(
            f"The current holds the waves back: the first {late:.0f} s after the record ends are "
            "not answered for, the waves of that time had passed the sensor before."
        )
    length = target.valid_to - target.valid_from
    if horizon is not None and length < horizon - 1e-6:
        caveats.append(f"The horizon is cut to {length:.0f} s, {MAX_INTERVALS} intervals.")
    caveats.extend(record.warnings)
    if checked.quality.verdict == "suspect":
        failed = [t.name for t in checked.quality.tests if t.flag == "suspect"]
        caveats.append(f"Record quality is suspect ({', '.join(failed)}): see the quality tests.")
    if sea.hs_error > 0.1:
        caveats.append(
            f"The record is short: its Hs is known to {sea.hs_error:.0%} only (standard error)."
        )
    return tuple(caveats)


def _failed_tests(quality) -> str:
    return "the record failed its quality tests: " + "; ".join(
        test.detail for test in quality.tests if test.flag == "fail"
    )


def _without_quality(checked, fitted) -> Forecast:
    return Forecast(
        issued_at=time.time(),
        record=checked.record,
        quality=checked.quality,
        sea_state=None,
        target=None,
        probability=None,
        probability_90=None,
        base_rate=None,
        base_rate_known_hs=None,
        odds_ratio=None,
        intervals=(),
        exceedance=(),
        groups=(),
        reasons=(),
        domain=Domain("outside", (_failed_tests(checked.quality),)),
        caveats=CAVEATS + checked.record.warnings,
        model=fitted.identity,
        program_version=program_version(),
    )
