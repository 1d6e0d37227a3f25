"""From rows with time stamps to a uniform step: what was printed, rounded, repeated or missing.

>>> import numpy as np
>>> grid = uniform(np.array([0.0, 0.4, 0.8, 1.6]), np.arange(4.0), path="example")
>>> grid.dt, grid.values.tolist()
(0.4, [0.0, 1.0, 2.0, nan, 3.0])
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from forecaster.errors import RecordFormatError

_RESOLUTIONS = (60.0, 1.0, 1e-1, 1e-2, 1e-3, 1e-4, 1e-5, 1e-6)
_JITTER = 0.02  # of a step: below it stamps count as uniform
_SHARED = 0.1  # share of rows that repeat the stamp above them, from which stamps are too coarse


@dataclass(frozen=True, slots=True, eq=False)
class Samples:
    """Rows of a file as a reader found them.

    Parameters
    ----------
    times : (n,) array [s]
        Not decreasing; POSIX seconds if `calendar`.
    values : (n,) array [`unit`]
        NaN where missing.
    lines : (n,) int array
        Line of the file of each row, from 1.
    unit : str
        Unit of the values.
    calendar : bool
    stamp_unit : float [s]
        Unit in which the stamps were printed.
    step : float or None [s]
        Step given by the caller.
    stamped : bool
        Whether the times were read; otherwise they are the row number times `step`.
    history, warnings : tuple of str
    """

    times: np.ndarray
    values: np.ndarray
    lines: np.ndarray
    unit: str
    calendar: bool
    stamp_unit: float
    step: float | None
    stamped: bool
    history: tuple[str, ...]
    warnings: tuple[str, ...]


@dataclass(frozen=True, slots=True, eq=False)
class Grid:
    """Values on a uniform step `dt` [s] from `start` [s], NaN in gaps, and what was done."""

    values: np.ndarray
    dt: float
    start: float
    history: tuple[str, ...]


def uniform(times, values, *, path, lines=None, stamp_unit=1.0, step=None) -> Grid:
    """Values on the uniform step that their time stamps tell.

    Parameters
    ----------
    times : (n,) array [s]
        Finite, not decreasing.
    values : (n,) array
        NaN where missing.
    path : str
        For messages.
    lines : (n,) int array, optional
        Line of the file of each row, for messages.
    stamp_unit : float [s]
        Unit in which the stamps were printed, to recognise rounding.
    step : float, optional [s]
        Step known to the caller; it must agree with the stamps within 2 %.

    Returns
    -------
    Grid
        It ends at the last time stamp.

    Raises
    ------
    RecordFormatError
        For fewer than two times, one time with two values, a step that contradicts the stamps,
        or a record that is nearly all gap.

    Notes
    -----
    The step is the median difference, refined by least squares over all runs without a gap (a
    difference above 1.5 steps).  Three cases: stamps that lie on the step within their printed
    resolution (or 2 % of the step) are taken as uniform sampling whose stamps were rounded, and
    no value is changed; stamps so coarse that rows share them likewise, by count and span;
    otherwise the stamps are believed and the values interpolated (cubic spline; linear in runs
    of fewer than four samples) within each run and nowhere else.

    Examples
    --------
    Four samples a second, stamped in whole seconds:

    >>> grid = uniform(np.floor(np.arange(40) / 4), np.zeros(40), path="example")
    >>> grid.dt
    0.25
    """
    times, values = np.asarray(times, float), np.asarray(values, float)
    lines = np.arange(1, times.size + 1) if lines is None else np.asarray(lines)
    history: list[str] = []
    differences = np.diff(times)
    if not (differences > 0).any():
        raise RecordFormatError(
            f"holds {np.unique(times).size} different time(s) up to the issue time, "
            "at least 2 are needed",
            path=path,
        )
    resolution = stamp_unit * _printed_resolution(times / stamp_unit)
    rising = np.median(differences[differences > 0])
    repeated = np.count_nonzero(differences == 0) / differences.size
    if not (repeated >= _SHARED and rising < 1.5 * resolution):
        times, values, lines, note = _without_repeats(times, values, lines, path)
        history += note
    index, dt = _index(times, resolution)
    if step is not None:
        if abs(dt - step) > 0.02 * step:
            raise RecordFormatError(
                f"time stamps tell a step of {dt:.6g} s but {step:.6g} s was given: "
                "correct the sampling rate, or leave it out",
                path=path,
            )
        dt = step
        index, _ = _index(times, resolution, dt)
    if index[-1] > 100 * times.size + 1000:
        raise RecordFormatError(
            f"has {times.size} samples on a span of {index[-1] + 1} steps of {dt:.6g} s, nearly "
            "all gap: use a shorter window",
            path=path,
        )
    residual = times - times[0] - index * dt
    rough = np.ptp(residual)
    if (np.diff(index) < 1).any() or rough > 1.02 * resolution + _JITTER * dt:
        if (np.diff(times) <= 0).any():
            raise RecordFormatError(
                f"time stamps of {resolution:g} s resolution are shared by several rows and do "
                "not fit one step: print the stamps with more digits",
                path=path,
            )
        grid, start, note = _resampled(times, values, dt)
        history += note
    else:
        grid = np.full(index[-1] + 1, np.nan)
        grid[index] = values
        start = float(times[0])
        if abs(start + (grid.size - 1) * dt - times[-1]) > 1e-6 * dt:
            start = float(times[-1] - (grid.size - 1) * dt)
        if resolution > _JITTER * dt and rough > _JITTER * dt:
            history.append(
                f"time stamps are rounded to {resolution:g} s: "
                f"uniform step {dt:.9g} s from count and span"
            )
    return Grid(grid, dt, start, (*history, *gap_history(grid, dt)))


def gap_history(values: np.ndarray, dt: float) -> list[str]:
    """The line of history that tells the gaps, none if there are none."""
    missing = np.isnan(values)
    if not missing.any():
        return []
    edges = np.diff(np.concatenate(([0], missing.astype(np.int8), [0])))
    lengths = np.flatnonzero(edges < 0) - np.flatnonzero(edges > 0)
    return [
        f"{lengths.size} gap(s), {missing.sum()} of {missing.size} samples missing "
        f"({100 * missing.mean():.2g} %), the longest {lengths.max() * dt:.4g} s: left as gaps"
    ]


def _printed_resolution(times: np.ndarray) -> float:
    """Coarsest decimal step on which all `times` lie, 0 if there is none."""
    for resolution in _RESOLUTIONS:
        scaled = times / resolution
        blur = 1e-3 + 4 * np.finfo(float).eps * np.abs(scaled).max()
        if blur > 0.1:
            break
        if np.abs(scaled - np.round(scaled)).max() < blur:
            return resolution
    return 0.0


def _without_repeats(times, values, lines, path):
    """Drop rows that repeat the row above; refuse one time with two values."""
    same = np.flatnonzero(np.diff(times) == 0) + 1
    if not same.size:
        return times, values, lines, []
    before, after = values[same - 1], values[same]
    conflict = ~((before == after) | (np.isnan(before) & np.isnan(after)))
    if conflict.any():
        row = same[conflict][0]
        raise RecordFormatError(
            f"time {times[row]:.10g} s is given twice with the values {values[row - 1]:g} and "
            f"{values[row]:g}: remove one of the rows, or print the "
            "stamps with more digits",
            path=path,
            line=int(lines[row]),
        )
    keep = np.ones(times.size, dtype=bool)
    keep[same] = False
    note = f"{same.size} repeated row(s) with the same time and value dropped"
    return times[keep], values[keep], lines[keep], [note]


def _index(times, resolution, dt=None):
    """Number of the step on which each time falls, and the step [s]."""
    times = times - times[0]
    differences = np.diff(times)
    known = dt is not None
    if not known:
        dt = float(np.median(differences[differences > 0]))
    steps = np.round(differences / dt)
    exact = np.concatenate(([0], np.cumsum(steps))).astype(np.int64)
    lattice = steps.min() >= 1 and np.ptp(times - exact * dt) < _JITTER * dt
    # Sampling at 1.2 s stamped in whole seconds also lies on a lattice, that of 1 s, with every
    # fifth sample "missing": a handful of breaks are gaps, many that even out are rounding.
    if lattice and np.count_nonzero(steps > 1) < 5:
        return exact, (dt if known else _round_step(dt, times, resolution))
    slope = dt
    if resolution > 0.75 * dt and not known:
        slope = _slope(times, differences > 2.5 * resolution)
    for _ in range(2):
        limit = 1.5 * slope if resolution < slope / 2 else slope + 1.05 * resolution
        broken = differences > limit
        if not known and not broken.all():
            slope = _slope(times, broken)
    if not known:
        slope = _round_step(slope, times, resolution)
    run = np.concatenate(([0], np.cumsum(broken)))
    starts = np.concatenate(([0], np.flatnonzero(broken) + 1))
    within = np.arange(times.size) - starts[run]
    offsets = np.bincount(run, weights=times - within * slope) / np.bincount(run)
    shift = np.round((offsets - offsets[0]) / slope).astype(np.int64)
    index = within + shift[run]
    if lattice and np.ptp(times - index * slope) > 1.02 * resolution + _JITTER * slope:
        return exact, dt
    return index, float(slope)


def _slope(times, broken) -> float:
    """Least-squares step over all runs between breaks."""
    run = np.concatenate(([0], np.cumsum(broken)))
    number = np.arange(times.size, dtype=float)
    counts = np.bincount(run)
    number -= (np.bincount(run, weights=number) / counts)[run]
    centred = times - (np.bincount(run, weights=times) / counts)[run]
    return float(number @ centred / (number @ number))


def _round_step(dt: float, times, resolution: float) -> float:
    """`dt` as the round number or round rate that the stamps cannot tell from it."""
    slack = (0.5 * resolution + 1e-5 * dt) / max(times[-1] / dt, 1)
    for digits in range(1, 7):
        for candidate in (round(dt, digits), 1 / max(round(1 / dt, digits), 1e-9)):
            if abs(candidate - dt) <= slack:
                return candidate
    return dt


def _resampled(times, values, dt):
    """Interpolate jittered samples on the step that ends at the last time."""
    from scipy.interpolate import CubicSpline  # heavy, and most files do not need it

    n = int(np.floor((times[-1] - times[0]) / dt + 1e-3)) + 1
    start = float(times[-1] - (n - 1) * dt)
    wanted = start + dt * np.arange(n)
    wanted[-1] = times[-1]
    grid = np.full(n, np.nan)
    measured = ~np.isnan(values)
    t, v = times[measured], values[measured]
    runs = np.split(np.arange(t.size), np.flatnonzero(np.diff(t) > 1.5 * dt) + 1)
    linear = 0
    for run in runs:
        if run.size == 0:
            continue
        first, last = np.searchsorted(wanted, t[run[[0, -1]]] + 1e-6 * dt * np.array([-1, 1]))
        inside = slice(first, last)
        if run.size >= 4:
            grid[inside] = CubicSpline(t[run], v[run])(wanted[inside])
        else:
            grid[inside] = np.interp(wanted[inside], t[run], v[run])
            linear += 1
    jitter = np.std(np.diff(times)[np.diff(times) <= 1.5 * dt]) / dt
    note = (
        f"time stamps scatter by {100 * jitter:.2g} % of the step: resampled to a uniform step "
        f"of {dt:.9g} s by cubic spline within measured spans"
    )
    if linear:
        note += f", linearly in {linear} span(s) of fewer than 4 samples"
    return grid, start, [note]
