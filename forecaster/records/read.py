"""Records from files and arrays: one table of formats, conversion to SI, a uniform step.

Everything uses only what lies up to and including the issue time.

>>> import io
>>> rows = "".join(f"{i * 0.5},{100 + i % 2}\\n" for i in range(8))
>>> record = read_record(io.BytesIO(("time_s,eta_cm\\n" + rows).encode()), at=2.0)
>>> record.n, record.end, record.dt
(5, 2.0, 0.5)
"""

from __future__ import annotations

import gzip
import io
import os
import sys
import zlib
from collections.abc import Iterator
from dataclasses import replace
from math import inf, isfinite
from pathlib import Path

import numpy as np

from forecaster.datatypes import SENSORS, Record
from forecaster.errors import InputError, RecordFormatError
from forecaster.records import clock, delimited, units
from forecaster.records.grid import gap_history, uniform

# Each format: does the head look like it, and how its rows are read.
FORMATS = {"delimited": (delimited.sniff, delimited.read)}

MAX_DECOMPRESSED = 8 << 30  # bytes of a compressed file that are read at most
MAX_DEPTH = 12_000.0  # m; no sea is deeper (Challenger Deep: 10.9 km)
_BLOCK = 1 << 20
_UNDECLARED_FILL = 1e6  # m; no sensor reads this, and its square would drown all else


def read_record(
    path,
    *,
    at: float | str | None = None,
    window: float = 1800.0,
    depth: float = inf,
    sensor: str = "unknown",
    unit: str | None = None,
    time_column: str | None = None,
    elevation_column: str | None = None,
    sampling_hz: float | None = None,
    fill_value: float | None = None,
) -> Record:
    """The last `window` seconds of a file up to and including the issue time `at`.

    Parameters
    ----------
    path : path, ``"-"`` for standard input, or a file open in binary mode
        Plain or gzip-compressed.
    at : float or str, optional
        Issue time: seconds on the file's clock (POSIX seconds if it has calendar time) or
        ISO 8601.  The last row by default.
    window : float [s]
        Length kept; less if the file is shorter.
    depth : float [m]
        Water depth, ``inf`` for deep water.
    sensor : str
        ``fixed``, ``buoy``, ``radar`` or ``unknown``.
    unit : str, optional
        Unit of the elevation (m, dm, cm, mm, ft, inch), where the header has none or a wrong one.
    time_column, elevation_column : str, optional
        Heading or number (from 1) of the column, where several could be meant.
    sampling_hz : float, optional [Hz]
        Sampling rate, needed where there is no time column.
    fill_value : float, optional
        Value that stands for "missing", in the unit of the file.

    Returns
    -------
    Record
        In metres about its own mean, uniform step, NaN in gaps.  `history` says what was done,
        `warnings` what was assumed.

    Raises
    ------
    RecordFormatError
        For a file that cannot be read as a record; names line, field, value and remedy.
    InputError
        For an option that cannot be used.

    Notes
    -----
    Rows after `at` are not read: they change no byte of the record, of its history or of an
    error.  The file is read in blocks; memory is bounded by the rows of one window.
    """
    if at is not None and isinstance(at, str):
        _instant_or_number(at)
    _check_window(window)
    _check_site(depth, sensor)
    if sampling_hz is not None and not (isfinite(sampling_hz) and sampling_hz > 0):
        raise InputError(f"sampling_hz must be a positive number of hertz, got {sampling_hz!r}")
    if fill_value is not None and np.isnan(fill_value):
        fill_value = None  # NaN is read as missing anyway
    if unit is not None:
        units.length_scale(unit)
    name, stream, owned = _opened(path)
    try:
        blocks, head = _blocks(stream, name)
        read = _reader(head, name)
        samples = read(
            blocks, path=name, at=at, window=window, unit=unit, time_column=time_column,
            elevation_column=elevation_column, sampling_hz=sampling_hz, fill_value=fill_value,
        )  # fmt: skip
    except OSError as error:
        raise RecordFormatError(f"cannot be read: {error.strerror or error}", path=name) from error
    finally:
        if owned:
            stream.close()
    values = samples.values * units.length_scale(samples.unit)
    wild = np.flatnonzero(np.abs(values) > _UNDECLARED_FILL)
    if wild.size:
        row = wild[0]
        raise RecordFormatError(
            f"elevation {samples.values[row]:g} {samples.unit} is no elevation: if it stands for "
            "a missing value give it as fill_value",
            path=name,
            line=int(samples.lines[row]),
        )
    record = _gridded(
        samples.times, values, name, lines=samples.lines, stamp_unit=samples.stamp_unit,
        step=samples.step, stamped=samples.stamped,
    )  # fmt: skip
    warnings = samples.warnings
    if at is not None:
        asked = clock.resolve(at, calendar=samples.calendar)
        late = asked - float(samples.times[-1])
        if late > 2 * record.dt:
            warnings = (*warnings, f"the last row is {late:.6g} s before the issue time asked for")
    record = replace(
        record, calendar=samples.calendar, depth=float(depth), sensor=sensor,
        history=(*samples.history, *record.history), warnings=warnings,
    )  # fmt: skip
    return _about_its_mean(_last(record, window))


def record_from_arrays(
    elevation,
    *,
    dt: float | None = None,
    times=None,
    start: float = 0.0,
    calendar: bool = False,
    at: float | str | None = None,
    window: float | None = None,
    depth: float = inf,
    sensor: str = "unknown",
    source: str = "array",
) -> Record:
    """A record from numbers in memory.

    Parameters
    ----------
    elevation : (n,) array_like [m]
        NaN or masked where missing.
    dt : float, optional [s]
        Step; needed unless `times` are given.
    times : (n,) array_like, optional
        Seconds, or ``datetime64`` (UTC).
    start : float [s]
        Time of the first sample, with `dt`.
    calendar : bool
        Whether `start` or `times` are POSIX seconds; implied by ``datetime64``.
    at : float or str, optional
        Issue time; later samples are cut off before anything else is done, the mean included.
    window : float, optional [s]
        Length kept; everything by default.
    depth, sensor, source
        As in `forecaster.datatypes.Record`.

    Raises
    ------
    InputError
        For arrays that are no record; RecordFormatError for times that tell no step.

    Examples
    --------
    >>> record = record_from_arrays([0.0, 1.0, 0.0, -1.0, 5.0], dt=0.5, at=1.6)
    >>> record.elevation.tolist(), record.history[-1]
    ([0.0, 1.0, 0.0, -1.0], 'mean level 0 m removed')
    """
    _check_site(depth, sensor)
    if window is not None:
        _check_window(window)
    try:
        values = np.ma.filled(np.ma.asarray(elevation, dtype=float), np.nan)
    except (TypeError, ValueError) as error:
        raise InputError(f"elevation must be numbers in metres: {error}") from error
    if values.ndim != 1 or values.size < 2:
        raise InputError(f"elevation must be one row of at least 2 values, got {values.shape}")
    if (dt is None) == (times is None):
        raise InputError("give either dt or times")
    if times is None:
        if not (isfinite(dt) and dt > 0):
            raise InputError(f"dt must be a positive number of seconds, got {dt!r}")
        if at is not None:
            limit = clock.resolve(at, calendar=calendar)
            last = int(np.floor(min((limit - start) / dt, values.size) + 1e-3))
            values = values[: max(last + 1, 0)]
            if values.size < 2:
                raise InputError(f"fewer than 2 samples up to the issue time {at!r}")
        _check_finite(values)
        record = Record(values, dt=float(dt), start=float(start), source=source)
        record = replace(record, history=tuple(gap_history(values, dt)))
    else:
        times = np.asarray(times)
        if times.dtype.kind == "M":
            missing = np.isnat(times)
            times = times.astype("M8[ns]").astype("int64") / 1e9
            times[missing] = np.nan
            calendar = True
        times = times.astype(float)
        if times.shape != values.shape:
            raise InputError(f"times {times.shape} and elevation {values.shape} differ in shape")
        if at is not None:
            past = np.flatnonzero(times > clock.resolve(at, calendar=calendar))
            if past.size:
                times, values = times[: past[0]], values[: past[0]]
            if times.size < 2:
                raise InputError(f"fewer than 2 samples up to the issue time {at!r}")
        bad = np.flatnonzero(~np.isfinite(times))
        if bad.size:
            raise InputError(f"times[{bad[0]}] is {times[bad[0]]}: every sample needs a time")
        back = np.flatnonzero(np.diff(times) < 0)
        if back.size:
            i = back[0]
            raise InputError(
                f"time runs backwards, from times[{i}] = {times[i]:.10g} to times[{i + 1}] = "
                f"{times[i + 1]:.10g}: sort the samples"
            )
        _check_finite(values)
        record = _gridded(times, values, source)
    if np.isnan(record.elevation).all():
        raise InputError("elevation holds no number")
    record = replace(record, calendar=calendar, depth=float(depth), sensor=sensor)
    if window is not None:
        record = _last(record, window)
    return _about_its_mean(record)


def cut(record: Record, at: float | str | None = None, window: float | None = None) -> Record:
    """The record up to and including the issue time, and of that the last `window` seconds.

    Parameters
    ----------
    record : Record
    at : float or str, optional
        Seconds on the record's clock or ISO 8601; the last sample by default.
    window : float, optional [s]
        Everything by default.

    Returns
    -------
    Record
        About its own mean; the record itself if nothing is cut.

    Raises
    ------
    InputError
        If fewer than two samples are left, or for an issue time that cannot be read.

    Examples
    --------
    >>> record = Record(np.array([0.0, 1.0, 2.0, 3.0]), dt=1.0)
    >>> cut(record, at=1.5).elevation.tolist()
    [-0.5, 0.5]
    """
    result = record
    if at is not None:
        limit = clock.resolve(at, calendar=record.calendar)
        # 1e-3 of a step: a time written in decimal may fall just short of its own sample
        count = int(np.floor(min((limit - record.start) / record.dt, record.n) + 1e-3)) + 1
        if count < 2:
            raise InputError(
                f"fewer than 2 samples up to the issue time "
                f"{clock.written(limit, calendar=record.calendar)}: the record starts at "
                f"{clock.written(record.start, calendar=record.calendar)}"
            )
        if count < record.n:
            issue = record.start + (count - 1) * record.dt
            result = result.step(
                f"cut at the issue time {clock.written(issue, calendar=record.calendar)}",
                elevation=record.elevation[:count].copy(),
            )
    if window is not None:
        _check_window(window)
        result = _last(result, window)
    if result is record:
        return record
    if np.isnan(result.elevation).all():
        raise InputError("nothing was measured in the window up to the issue time")
    return _about_its_mean(result)


def bridge_gaps(record: Record, *, longest: float) -> Record:
    """A record without NaN: short gaps by a cubic, others at the mean level.

    Parameters
    ----------
    record : Record
    longest : float [s]
        Longest gap that is interpolated; about a quarter of the peak period, beyond which the
        waves inside are no longer fixed by those around.

    Returns
    -------
    Record
        The same samples where they were measured.

    Notes
    -----
    The cubic runs through the two samples on each side of the gap (linear where one of them is
    missing).  Gaps at either end of the record are never extrapolated: they are put at the mean
    level.

    Examples
    --------
    >>> record = Record(np.array([0.0, 1.0, np.nan, 9.0, 16.0, np.nan]), dt=1.0)
    >>> np.round(bridge_gaps(record, longest=1.5).elevation, 6).tolist()
    [0.0, 1.0, 4.0, 9.0, 16.0, 0.0]
    """
    if not longest >= 0:
        raise InputError(f"longest must be seconds, not negative, got {longest!r}")
    missing = np.isnan(record.elevation)
    if not missing.any():
        return record
    values = record.elevation.copy()
    edges = np.diff(np.concatenate(([0], missing.astype(np.int8), [0])))
    starts, ends = np.flatnonzero(edges > 0), np.flatnonzero(edges < 0)
    short, zeroed = 0, 0
    for first, end in zip(starts, ends, strict=True):
        inner = first > 0 and end < record.n
        if inner and (end - first) * record.dt <= longest * (1 + 1e-9):
            points = [first - 1, end]
            if first > 1 and end + 1 < record.n and not (missing[first - 2] or missing[end + 1]):
                points = [first - 2, first - 1, end, end + 1]
            values[first:end] = _lagrange(
                np.array(points), record.elevation[points], np.arange(first, end)
            )
            short += 1
        else:
            values[first:end] = 0.0
            zeroed += 1
    said = []
    if short:
        said.append(f"{short} gap(s) of up to {longest:.4g} s bridged by a cubic")
    if zeroed:
        held = np.sum(ends - starts) * record.dt
        said.append(
            f"{zeroed} longer or outer gap(s) put at the mean level ({held:.4g} s of gap in all)"
        )
    return record.step("; ".join(said), elevation=values)


def _lagrange(x, y, at):
    """Polynomial through the points (x, y) at the places `at`."""
    result = np.zeros(at.size)
    for i in range(x.size):
        others = np.delete(x, i)
        result += y[i] * np.prod((at[:, None] - others) / (x[i] - others), axis=1)
    return result


def _instant_or_number(at: str) -> None:
    """Refuse an unreadable issue time before a long file is read."""
    try:
        float(at)
    except ValueError:
        clock.instant(at)


def _check_window(window: float) -> None:
    if not window > 0:
        raise InputError(f"window must be a positive number of seconds, got {window!r}")


def _check_site(depth: float, sensor: str) -> None:
    if not depth > 0 or (isfinite(depth) and depth > MAX_DEPTH):
        raise InputError(
            f"depth must lie between 0 and {MAX_DEPTH:g} m (inf for deep water), got {depth!r}"
        )
    if sensor not in SENSORS:
        raise InputError(f"sensor must be one of {', '.join(SENSORS)}, got {sensor!r}")


def _check_finite(values) -> None:
    bad = np.flatnonzero(np.isinf(values) | (np.abs(values) > _UNDECLARED_FILL))
    if bad.size:
        raise InputError(
            f"elevation[{bad[0]}] is {values[bad[0]]:g} m: use NaN where nothing was measured"
        )


def _opened(path):
    """Name, binary stream, and whether it is ours to close."""
    if hasattr(path, "read"):
        if isinstance(path, io.TextIOBase):
            raise InputError("a file must be open in binary mode ('rb'), this one is text")
        return str(getattr(path, "name", "stream")), path, False
    if os.fspath(path) == "-":
        return "-", sys.stdin.buffer, False
    name = os.fspath(path)
    if Path(name).is_dir():
        raise RecordFormatError("is a directory: name a file", path=name)
    try:
        return name, open(name, "rb"), True
    except FileNotFoundError as error:
        raise RecordFormatError("no such file", path=name) from error
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or error
        raise RecordFormatError(f"cannot be opened: {reason}", path=name) from error


def _filled(stream, size: int) -> bytes:
    """`size` bytes, fewer only at the end: pipes hand out less than asked for."""
    parts = []
    while size > 0 and (part := stream.read(size)):
        parts.append(part)
        size -= len(part)
    return b"".join(parts)


def _blocks(stream, name: str) -> tuple[Iterator[bytes], bytes]:
    """The decompressed blocks of a file, and its head (which the first block holds too)."""
    first = _filled(stream, _BLOCK)
    if not first:
        raise RecordFormatError("is empty", path=name)
    packed = first.startswith(b"\x1f\x8b")

    def raw():
        block = first
        while block:
            yield block
            block = _filled(stream, _BLOCK)

    blocks = _unpacked(raw(), name) if packed else raw()
    head = next(blocks, b"")
    if not head:
        raise RecordFormatError("is empty", path=name)

    def all_blocks():
        yield head
        yield from blocks

    return all_blocks(), head


def _unpacked(blocks: Iterator[bytes], name: str) -> Iterator[bytes]:
    """Decompress gzip members block by block, within `MAX_DECOMPRESSED`."""
    total = 0
    with gzip.GzipFile(fileobj=_Chained(blocks)) as unpacked:
        while True:
            try:
                block = unpacked.read(_BLOCK)
            except (EOFError, zlib.error, gzip.BadGzipFile) as error:
                raise RecordFormatError(
                    f"is a damaged gzip file ({error}): copy or compress it again", path=name
                ) from error
            if not block:
                return
            total += len(block)
            if total > MAX_DECOMPRESSED:
                raise RecordFormatError(
                    f"holds more than {MAX_DECOMPRESSED} bytes when decompressed: cut out the "
                    "part that is needed",
                    path=name,
                )
            yield block


class _Chained(io.RawIOBase):
    """Blocks of bytes as a file to read from."""

    def __init__(self, blocks: Iterator[bytes]):
        self._blocks, self._rest = blocks, b""

    def readable(self) -> bool:
        return True

    def read(self, size: int = -1) -> bytes:
        while size < 0 or len(self._rest) < size:
            block = next(self._blocks, None)
            if block is None:
                break
            self._rest += block
        end = len(self._rest) if size < 0 else size
        result, self._rest = self._rest[:end], self._rest[end:]
        return result


def _reader(head: bytes, name: str):
    """The reader of the format that the head shows."""
    if head.startswith((b"\xff\xfe", b"\xfe\xff")):
        raise RecordFormatError("is UTF-16 text: save it as UTF-8", path=name)
    for sniff, read in FORMATS.values():
        if sniff(head, name):
            return read
    raise RecordFormatError(
        f"is not in a known format ({', '.join(FORMATS)}); it starts with {head[:12]!r}: give a "
        "text table (UTF-8) with a time and an elevation column, plain or gzip-compressed",
        path=name,
    )


def _gridded(times, values, name, *, lines=None, stamp_unit=1.0, step=None, stamped=True) -> Record:
    """The rows on a uniform step, as a record on its own clock."""
    if not stamped:
        if values.size < 2:
            raise RecordFormatError("holds fewer than 2 rows up to the issue time", path=name)
        history = gap_history(values, step)
        return Record(values, dt=step, start=float(times[0]), source=name, history=tuple(history))
    grid = uniform(times, values, path=name, lines=lines, stamp_unit=stamp_unit, step=step)
    return Record(grid.values, dt=grid.dt, start=grid.start, source=name, history=grid.history)


def _last(record: Record, window: float) -> Record:
    """The last round(window / dt) samples."""
    if window >= record.duration * (1 - 1e-9):
        return record
    count = max(round(window / record.dt), 2)
    if count >= record.n:
        return record
    return record.step(
        f"last {count} of {record.n} samples kept ({window:g} s)",
        elevation=record.elevation[-count:].copy(),
        start=record.start + (record.n - count) * record.dt,
    )


def _about_its_mean(record: Record) -> Record:
    mean = float(np.nanmean(record.elevation))
    return record.step(f"mean level {mean:.6g} m removed", elevation=record.elevation - mean)
