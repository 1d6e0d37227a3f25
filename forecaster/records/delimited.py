"""Delimited text: header, delimiter, decimal mark, units and time stamps found by themselves.

Everything about the layout is decided on the lines up to and including the first row of numbers,
and rows are read in order up to the issue time: no later row can change the result.  Rows are
read in blocks and only those of the last window are kept, so memory does not grow with the file.

>>> sniff(b"time_s,elevation_m\\n0.0,0.1\\n", "demo.csv")
True
"""

from __future__ import annotations

import re
from collections import deque
from collections.abc import Iterator
from dataclasses import dataclass, field

import numpy as np

from forecaster.errors import InputError, RecordFormatError
from forecaster.records import clock, units
from forecaster.records.grid import Samples

MAX_LINE = 1 << 20  # bytes; a longer line is no table
_MISSING = frozenset((b"", b"nan", b"na", b"n/a", b"-", b"--", b"null", b"none"))
_COMMENTS = (b"#", b"%", b"!", b"//")
_DELIMITERS = (b";", b"\t", b",", None)  # None: blanks
_DELIMITER_NAMES = {b";": "semicolon", b"\t": "tab", b",": "comma", None: "blank"}
_NUMBER = re.compile(r"^[+-]?(\d+([.,]\d*)?|[.,]\d+)([eE][+-]?\d+)?$")
_FILL = re.compile(
    r"(?:\b|_)(?:fill|missing)[ _]?(?:values?)?\s*(?:[:=]|is)\s*"
    r"([+-]?\d+(?:[.,]\d*)?(?:[eE][+-]?\d+)?)",
    re.IGNORECASE,
)
_SINCE = re.compile(r"\bsince\s+(\d{4}-\d{2}-\d{2}.*)$")
_TIME_WORDS = frozenset(
    "time t timestamp datetime date seconds sec elapsed clock utc epoch posix unix".split()
)
_EPOCH_WORDS = frozenset(("epoch", "posix", "unix"))
_ELEVATION_WORDS = frozenset(
    "elevation elev eta zeta heave surface level displacement waterlevel z wave".split()
)


@dataclass(frozen=True, slots=True)
class _Layout:
    """What the head of the file says about its columns."""

    delimiter: bytes | None
    columns: int
    first_line: int
    value: int
    time: int | None
    clock: int | None  # time of day, when the date stands in a column of its own
    stamps: bool  # times are text, not numbers
    zoned: bool
    time_unit: float
    epoch: float
    calendar: bool
    unit: str
    fills: tuple[float, ...]
    history: tuple[str, ...]
    warnings: tuple[str, ...]


@dataclass(slots=True)
class _LastWindow:
    """The rows of the last `window` seconds of all that were added."""

    window: float
    seen: int = 0
    parts: deque = field(default_factory=deque)

    def add(self, times, values, lines):
        if not times.size:
            return
        self.seen += times.size
        self.parts.append((times, values, lines))
        while self.parts[0][0][-1] < times[-1] - self.window:
            self.parts.popleft()

    def rows(self):
        times, values, lines = (np.concatenate(column) for column in zip(*self.parts, strict=True))
        keep = times >= times[-1] - self.window * (1 + 1e-9)
        return times[keep], values[keep], lines[keep]


def sniff(head: bytes, name: str) -> bool:
    """Whether the head of a file looks like text that could hold a table.

    Parameters
    ----------
    head : bytes
        First bytes of the file, decompressed; its first two lines decide, since later ones may lie
        past the issue time.
    name : str
        File name; not used here, since text tables go by every name.

    Examples
    --------
    >>> sniff(b"\\x89HDF\\r\\n\\x1a\\n\\x00", "record.nc")
    False
    """
    start = b"\n".join(head[:8192].split(b"\n", 2)[:2])
    control = sum(byte < 32 and byte not in b"\t\n\r\f\v" for byte in start)
    return bool(start.strip()) and control == 0


def read(
    blocks: Iterator[bytes],
    *,
    path: str,
    at: float | str | None = None,
    window: float = 1800.0,
    unit: str | None = None,
    time_column: str | None = None,
    elevation_column: str | None = None,
    sampling_hz: float | None = None,
    fill_value: float | None = None,
) -> Samples:
    """Rows of the last `window` seconds up to and including `at`.

    Parameters
    ----------
    blocks : iterator of bytes
        The file, decompressed; the first block holds the head.
    path : str
        For messages.
    at : float or str, optional
        Issue time on the file's clock, seconds or ISO 8601; the last row by default.
    window : float [s]
    unit : str, optional
        Unit of the elevation; goes before what the header says.
    time_column, elevation_column : str, optional
        Heading, heading without unit, or number of the column from 1.
    sampling_hz : float, optional [Hz]
        Sampling rate, needed where there is no time column.
    fill_value : float, optional
        Value that stands for "missing", in the unit of the file.

    Returns
    -------
    Samples

    Raises
    ------
    RecordFormatError
        Naming file, line, column, value and remedy.
    InputError
        For an issue time that cannot be read.
    """
    lines_of = _line_blocks(blocks, path)
    first_line, lines, whole = next(lines_of, (1, [], True))
    layout = _layout(
        lines, path, unit=unit, time_column=time_column, elevation_column=elevation_column,
        sampling_hz=sampling_hz, fill_value=fill_value,
    )  # fmt: skip
    limit = np.inf if at is None else clock.resolve(at, calendar=layout.calendar)
    rows = _RowReader(layout, path, limit, sampling_hz)
    kept = _LastWindow(window)
    start = layout.first_line - first_line
    finished = rows.feed(first_line + start, lines[start:], kept, whole=whole)
    while not finished:
        first_line, lines, whole = next(lines_of, (0, None, True))
        if lines is None:
            break
        finished = rows.feed(first_line, lines, kept, whole=whole)
    if not kept.parts:
        raise RecordFormatError(
            f"has no row up to the issue time {clock.written(limit, calendar=layout.calendar)}: "
            f"its first row is at {clock.written(rows.first_time, calendar=layout.calendar)}",
            path=path,
        )
    times, values, numbers = kept.rows()
    if np.isnan(values).all():
        raise RecordFormatError("holds no elevation in the window: all values missing", path=path)
    if at is None:
        said = f"{kept.seen} rows read, {times.size} kept (the last {window:g} s)"
    else:
        said = (
            f"{kept.seen} rows up to the issue time read, {times.size} kept (the last {window:g} "
            "s); later rows, if any, not read"
        )
    return Samples(
        times=times,
        values=values,
        lines=numbers,
        unit=layout.unit,
        calendar=layout.calendar,
        stamp_unit=layout.time_unit,
        step=None if sampling_hz is None else 1.0 / sampling_hz,
        stamped=layout.time is not None,
        history=(*layout.history, said),
        warnings=layout.warnings + (rows.warnings if at is None else ()),
    )


def _line_blocks(blocks: Iterator[bytes], path: str) -> Iterator[tuple[int, list[bytes], bool]]:
    """Lists of lines without line ends: number of the first, lines, whether the last had its end.

    Only the very last line of a file may lack it.
    """
    rest, number = b"", 1
    for block in blocks:
        rest += block
        cut = rest.rfind(b"\n") + 1
        if cut == 0:
            if len(rest) > MAX_LINE:
                raise RecordFormatError(
                    f"a line of more than {MAX_LINE} bytes: not a table of rows",
                    path=path,
                    line=number,
                )
            continue
        lines = rest[: cut - 1].split(b"\n")
        rest = rest[cut:]
        yield number, lines, True
        number += len(lines)
    if rest.strip():
        yield number, [rest], False


def _is_comment(line: bytes) -> bool:
    return line.lstrip().startswith(_COMMENTS)


def _split(line: bytes, delimiter: bytes | None) -> list[bytes]:
    if delimiter is None:
        return line.split()
    return [part.strip(b" \r") for part in line.split(delimiter)]


def _text(raw: bytes) -> str:
    try:
        return raw.decode("utf-8")
    except UnicodeDecodeError:
        return raw.decode("latin-1")


def _kind(token: bytes, delimiter: bytes | None) -> str:
    """What one field holds: number, missing, stamp, date, clock or text."""
    text = _text(token)
    if token.lower() in _MISSING:
        return "missing"
    if _NUMBER.match(text) and not (delimiter == b"," and "," in text):
        return "number"
    if text.lower().lstrip("+-") in ("inf", "infinity"):
        return "number"
    if clock.is_date(text):
        return "date"
    if clock.is_clock(text):
        return "clock"
    return "stamp" if clock.is_stamp(text) else "text"


def _headings(
    line: bytes, delimiter: bytes | None, columns: int, *, trailing: bool
) -> list[str] | None:
    """Names in a heading line, or None if it does not fit `columns` fields.

    `trailing`: the rows end with a delimiter, which the heading need not.
    """
    text = _text(line.strip(b" \r") if delimiter else line.strip())
    if delimiter is not None:
        names = [name.strip() for name in text.split(delimiter.decode())]
        if trailing and len(names) == columns - 1:
            names.append("")
    else:
        # "eta [cm]" and "eta / cm" are one heading although they hold blanks
        glued = re.sub(r"\s+(?=[\[({])", "\v", re.sub(r"\s*/\s*", "\v/\v", text))
        names = [name.replace("\v", " ") for name in re.split(r"[ \t]+", glued)]
        if len(names) != columns:
            names = [name.strip() for name in re.split(r"\t+|\s{2,}", text)]
    return names if len(names) == columns else None


def _layout(lines, path, *, unit, time_column, elevation_column, sampling_hz, fill_value):
    """Find delimiter, header, columns and units on the lines up to the first row of numbers."""
    comments, preamble = [], []
    for number, line in enumerate(lines, 1):
        if number == 1:
            line = line.removeprefix(b"\xef\xbb\xbf")
        line = line.replace(b'"', b"").rstrip(b"\r")
        if not line.strip():
            continue
        if _is_comment(line):
            comments.append(line.strip())
            continue
        fit = _fit(line, comments, preamble)
        if fit is not None:
            delimiter, fields, names, heading = fit
            break
        preamble.append(line)
        if number > 1000:
            raise RecordFormatError("no row of numbers in the first 1000 lines", path=path)
    else:
        found = f"its first line is {_text(preamble[0].strip())[:60]!r}" if preamble else "empty"
        raise RecordFormatError(
            f"holds no row of numbers ({found}): a record is a table with a time and an "
            "elevation column",
            path=path,
        )
    kinds = [_kind(token, delimiter) for token in fields]
    said = f"delimited text, {_DELIMITER_NAMES[delimiter]}-separated, {len(fields)} column(s)"
    unused = len(preamble) - (1 if heading in preamble else 0)
    if unused > 0:
        said += f", {unused} line(s) above the header skipped"
    columns = _Columns(names, kinds, fields, path, number)
    time, day_clock = columns.time(time_column, sampling_hz)
    value = columns.value(elevation_column, {time, day_clock})
    history, warnings = [], []
    calendar, stamps, zoned, time_unit, epoch = False, False, True, 1.0, 0.0
    if time is not None:
        said += f"; time from {columns.label(time)}"
        if day_clock is not None:
            said += f" and {columns.label(day_clock)}"
        name, stated = units.split_unit(names[time])
        if kinds[time] in ("stamp", "date", "clock") or day_clock is not None:
            calendar = stamps = True
            stamp = fields[time] if day_clock is None else fields[time] + b"T" + fields[day_clock]
            try:
                _, zoned = clock.instant(_text(stamp))
            except InputError as error:
                raise RecordFormatError(
                    f"{columns.label(time)}: {error}", path=path, line=number
                ) from error
            if not zoned and not re.search(r"\b(utc|gmt|z)\b", names[time].lower()):
                warnings.append("time stamps state no offset from UTC: taken as UTC")
        else:
            since = _SINCE.search(names[time])
            if since:
                epoch, calendar = clock.instant(since[1].rstrip(" ])"))[0], True
            elif _EPOCH_WORDS & _words(name):
                calendar = True
            if stated:
                try:
                    time_unit = units.time_scale(stated)
                except InputError as error:
                    raise RecordFormatError(f"{columns.label(time)}: {error}", path=path) from error
            else:
                warnings.append(f"{columns.label(time)} states no unit: taken as seconds")
    name, stated = units.split_unit(names[value])
    length = unit or stated or "m"
    try:
        units.length_scale(length)
    except InputError as error:
        raise RecordFormatError(f"{columns.label(value)}: {error}", path=path) from error
    if unit and stated and units.length_scale(unit) != _scale_or_nan(stated):
        warnings.append(f"{columns.label(value)} states {stated} but was read as {unit}, as asked")
    elif not unit and not stated:
        warnings.append(f"{columns.label(value)} states no unit: taken as metres")
    history.append(f"{said}; elevation from {columns.label(value)} in {length}")
    fills = [] if fill_value is None else [float(fill_value)]
    for line in (*comments, *preamble):
        fills += [float(found.replace(",", ".")) for found in _FILL.findall(_text(line))]
    if fills:
        history.append(f"fill value(s) {', '.join(f'{fill:g}' for fill in fills)} read as missing")
    return _Layout(
        delimiter=delimiter, columns=len(fields), first_line=number, value=value, time=time,
        clock=day_clock, stamps=stamps, zoned=zoned, time_unit=time_unit, epoch=epoch,
        calendar=calendar, unit=length, fills=tuple(fills), history=tuple(history),
        warnings=tuple(warnings),
    )  # fmt: skip


def _is_length(unit: str) -> bool:
    return not np.isnan(_scale_or_nan(unit))


def _scale_or_nan(unit: str) -> float:
    try:
        return units.length_scale(unit)
    except InputError:
        return np.nan


def _fit(line: bytes, comments: list[bytes], preamble: list[bytes]):
    """Delimiter, fields, names and heading line that fit a row of numbers best, or None.

    A line is a row of numbers if its first field, or most of its fields, are a number, a time or
    missing, or if at least two are numbers and the line above is a heading for it.  Of several
    delimiters the one whose field count the heading shares goes first, then the one that leaves
    no text.
    """
    best = None
    for order, delimiter in enumerate(_DELIMITERS):
        if delimiter is not None and delimiter not in line:
            continue
        fields = _split(line, delimiter)
        kinds = [_kind(token, delimiter) for token in fields]
        plain = [kind != "text" for kind in kinds]
        measured = [kind not in ("text", "missing") for kind in kinds]
        if not any(measured):
            continue
        names, heading = None, None
        candidates = [(row, row) for row in preamble[-2:][::-1]]
        candidates += [(row, row.lstrip(b"#%!/").strip(b" ")) for row in comments[-1:]]
        for original, candidate in candidates:
            names = _headings(candidate, delimiter, len(fields), trailing=not fields[-1])
            if original in comments:
                names = names or _headings(candidate, None, len(fields), trailing=False)
                if names and not _names_a_table(names):
                    names = None
            if names and any(_kind(n.encode(), delimiter) == "text" for n in names if n):
                heading = original
                break
            names = None
        if heading is not None and heading in preamble[-1:] and len(preamble) > 1:
            names, heading = _with_units_row(names, preamble, delimiter, len(fields), heading)
        tabular = names is not None and sum(measured) >= 2
        if not (plain[0] or sum(plain) > len(plain) / 2 or tabular):
            continue
        rank = (names is None, not all(plain), order)
        if best is None or rank < best[0]:
            names = names or [""] * len(fields)
            best = (rank, (delimiter, fields, names, heading))
    return None if best is None else best[1]


def _with_units_row(names, preamble, delimiter, columns, heading):
    """Join a row of bare units under the heading (``time;eta`` over ``s;cm``)."""
    stated = [name.strip("[](){} ").lower() for name in names]
    if not all(unit in units.LENGTH_UNITS or unit in units.TIME_UNITS or not unit
               for unit in stated):  # fmt: skip
        return names, heading
    above = _headings(preamble[-2], delimiter, columns, trailing=names[-1] == "")
    if above is None:
        return names, heading
    joined = [
        f"{name} [{unit}]" if unit else name for name, unit in zip(above, stated, strict=True)
    ]
    return joined, heading


def _names_a_table(names: list[str]) -> bool:
    """Whether a comment of as many words as there are columns is meant as their heading."""
    if len(names) > 1:
        return any(_named_time(name) for name in names)
    bare, unit = units.split_unit(names[0])
    return bool(unit or _words(bare) & _ELEVATION_WORDS)


def _named_time(name: str) -> bool:
    bare, unit = units.split_unit(name)
    words = _words(bare)
    if words & _ELEVATION_WORDS:
        return False
    return bool(words & _TIME_WORDS) or unit.split(" ")[0] in units.TIME_UNITS


def _words(name: str) -> set[str]:
    return set(re.split(r"[^a-z]+", name.lower()))


@dataclass(slots=True)
class _Columns:
    """Choice of the time and elevation columns from their names and first values."""

    names: list[str]
    kinds: list[str]
    fields: list[bytes]
    path: str
    line: int

    def label(self, column: int) -> str:
        name = self.names[column]
        return f"column {name!r}" if name else f"column {column + 1}"

    def _listed(self) -> str:
        return ", ".join(
            f"{number} {name!r}" if name else str(number)
            for number, name in enumerate(self.names, 1)
        )

    def _find(self, wanted: str, option: str) -> int:
        folded = str(wanted).strip().lower()
        for spelled in (
            [name.lower() for name in self.names],
            [units.split_unit(name)[0].lower() for name in self.names],
        ):
            if spelled.count(folded) == 1:
                return spelled.index(folded)
        if folded.isdigit() and 1 <= int(folded) <= len(self.names):
            return int(folded) - 1
        raise RecordFormatError(
            f"{option} {wanted!r} names no single column; the columns are {self._listed()}",
            path=self.path,
        )

    def _clock_beside(self, date: int) -> int | None:
        others = [i for i, kind in enumerate(self.kinds) if kind == "clock" and i != date]
        return others[0] if len(others) == 1 else None

    def time(self, wanted: str | None, sampling_hz: float | None) -> tuple[int | None, int | None]:
        """Column of the times, and that of the time of day if it stands apart."""
        if wanted is not None:
            column = self._find(wanted, "time_column")
            if self.kinds[column] == "clock":
                dates = [i for i, kind in enumerate(self.kinds) if kind == "date"]
                return (dates[0], column) if len(dates) == 1 else (column, None)
            if self.kinds[column] == "date":
                return column, self._clock_beside(column)
            return column, None
        stamps = [i for i, kind in enumerate(self.kinds) if kind == "stamp"]
        dates = [i for i, kind in enumerate(self.kinds) if kind == "date"]
        clocks = [i for i, kind in enumerate(self.kinds) if kind == "clock"]
        numbers = [
            i
            for i, (name, kind) in enumerate(zip(self.names, self.kinds, strict=True))
            if kind in ("number", "missing", "text") and _named_time(name)
        ]
        if len(dates) == 1 and len(clocks) == 1:
            candidates = [*stamps, dates[0], *numbers]
            numbers_only = False
        else:
            candidates = [*stamps, *(clocks if not numbers else []), *numbers]
            numbers_only = True
            if not candidates:
                candidates = dates
        if len(candidates) > 1:
            raise RecordFormatError(
                f"has several columns of time; choose one with time_column; "
                f"the columns are {self._listed()}",
                path=self.path,
            )
        if candidates:
            return candidates[0], None if numbers_only else clocks[0]
        if sampling_hz is not None:
            return None, None
        if len(self.kinds) == 2 and not any(self.names):
            return 0, None
        if len(self.kinds) == 1:
            raise RecordFormatError(
                "has one column and no time: give the sampling rate (sampling_hz)", path=self.path
            )
        raise RecordFormatError(
            "has no column that is clearly time: choose one with time_column, or give the "
            f"sampling rate (sampling_hz); the columns are {self._listed()}",
            path=self.path,
        )

    def value(self, wanted: str | None, taken: set[int | None]) -> int:
        """Column of the elevation."""
        if wanted is not None:
            column = self._find(wanted, "elevation_column")
            if column in taken:
                raise RecordFormatError(
                    f"elevation_column {wanted!r} is the column of time; the columns are "
                    f"{self._listed()}",
                    path=self.path,
                )
            return column
        free = [i for i in range(len(self.names)) if i not in taken]
        if len(free) > 1:
            free = [i for i in free if self.names[i] or self.kinds[i] != "missing"]
        named = [i for i in free if _words(units.split_unit(self.names[i])[0]) & _ELEVATION_WORDS]
        if len(named) == 1:
            return named[0]
        if len(free) > 1:  # "Temp [C]" is no elevation, whatever it is called
            stated = [units.split_unit(self.names[i])[1] for i in free]
            lengths = [i for i, unit in zip(free, stated, strict=True) if _is_length(unit)]
            free = lengths if len(lengths) == 1 and all(stated) else free
        if len(free) == 1:
            return free[0]
        what = "several columns that could be the elevation" if free else "no column of elevation"
        raise RecordFormatError(
            f"has {what}; choose one with elevation_column; the columns are {self._listed()}",
            path=self.path,
        )


class _RowReader:
    """Turns lines into times and values, in order, until the issue time is passed."""

    def __init__(self, layout: _Layout, path: str, limit: float, sampling_hz: float | None):
        self.layout, self.path, self.limit = layout, path, limit
        self.step = None if sampling_hz is None else 1.0 / sampling_hz
        self.rows = 0
        self.first_time = np.nan
        self.last_time = -np.inf
        self.marks: dict[int, bytes] = {}  # decimal mark seen in each column
        self.warnings: tuple[str, ...] = ()

    def feed(self, first_line: int, lines: list[bytes], kept: _LastWindow, *, whole: bool) -> bool:
        """Add the rows of `lines` up to the issue time to `kept`; true when it was passed.

        `whole`: the last line had its line end.  One without may still be being written, and is
        left out if it cannot be read.
        """
        layout = self.layout
        fields, numbers = [], []
        for number, line in enumerate(lines, first_line):
            if b'"' in line:
                line = line.replace(b'"', b"")
            if not line.strip() or _is_comment(line):
                continue
            fields.append(_split(line, layout.delimiter))
            numbers.append(number)
        if not fields:
            return False
        wrong = next((i for i, row in enumerate(fields) if len(row) != layout.columns), None)
        timed = fields
        if wrong is not None:  # its time still tells whether it lies past the issue time
            needed = max(layout.time or 0, layout.clock or 0)
            timed = fields[: wrong + (len(fields[wrong]) > needed)]
        times, trouble = self._times(timed)
        if times.size and not self.rows:
            self.first_time = float(times[0])
        past = np.flatnonzero(times > self.limit)
        finished = past.size > 0
        if finished:
            times, trouble = times[: past[0]], None
        elif wrong is not None and (trouble is None or trouble[0] >= wrong):
            times = times[:wrong]
            trouble = (
                wrong,
                f"{len(fields[wrong])} field(s) where the first row has {layout.columns}: "
                f"{_text(b' | '.join(fields[wrong]))[:80]!r}; correct or remove the row",
            )
        self._check_order(times, numbers)
        if times.size:
            self.last_time = float(times[-1])
        values, bad_value = self._values(fields[: times.size])
        trouble = bad_value or trouble
        if trouble is not None:
            row, message = trouble
            if whole or row < len(fields) - 1 or self.rows + row == 0:
                raise RecordFormatError(message, path=self.path, line=numbers[row])
            times, values = times[:row], values[:row]
            self.warnings = (f"line {numbers[row]}, the last, is incomplete: left out",)
        self.rows += times.size
        kept.add(times, values, np.array(numbers[: times.size]))
        return finished

    def _check_order(self, times, numbers):
        previous = np.concatenate(([self.last_time], times[:-1]))
        back = np.flatnonzero(times < previous)
        if back.size:
            row = back[0]
            written = [
                clock.written(t, calendar=self.layout.calendar) for t in (previous[row], times[row])
            ]
            raise RecordFormatError(
                f"time runs backwards, from {written[0]} to {written[1]}: sort the rows, or, if "
                "the logger began anew, keep only those from this row on",
                path=self.path,
                line=numbers[row],
            )

    def _times(self, fields):
        """Times [s] up to the first that cannot be read, and what is wrong with that one."""
        layout = self.layout
        if layout.time is None:
            return (self.rows + np.arange(len(fields))) * self.step, None
        tokens = [row[layout.time] for row in fields]
        name = "time"
        if layout.stamps:
            if layout.clock is not None:
                tokens = [row[layout.time] + b"T" + row[layout.clock] for row in fields]
            seconds, zoned = clock.instants(tokens) if tokens else (np.empty(0), np.empty(0))
            bad = np.flatnonzero(np.isnan(seconds) | (zoned != layout.zoned))
            if not bad.size:
                return seconds, None
            row = int(bad[0])
            text = _text(tokens[row])
            try:
                clock.instant(text)
                message = (
                    f"{text!r} {'states no' if layout.zoned else 'states an'} offset from UTC "
                    "unlike the first row: write all time stamps alike"
                )
            except InputError as error:
                message = f"time {error}"
            return seconds[:row], (row, message)
        numbers, trouble = self._numbers(tokens, layout.time, name)
        gaps = np.flatnonzero(~np.isfinite(numbers))
        if gaps.size:
            row = int(gaps[0])
            text = _text(tokens[row])
            numbers = numbers[:row]
            trouble = (row, f"time is {text!r}: every row needs a finite time; remove the row")
        return layout.epoch + numbers * layout.time_unit, trouble

    def _values(self, fields):
        tokens = [row[self.layout.value] for row in fields]
        values, trouble = self._numbers(tokens, self.layout.value, "elevation")
        infinite = np.flatnonzero(np.isinf(values))
        if infinite.size:
            row = int(infinite[0])
            return values, (
                row,
                f"elevation is {_text(tokens[row])!r}: leave the field blank where nothing was "
                "measured",
            )
        for fill in self.layout.fills:
            values[np.isclose(values, fill, rtol=1e-9, atol=0)] = np.nan
        return values, trouble

    def _numbers(self, tokens, column, name):
        """Numbers up to the first that is none (missing: NaN), and what is wrong with that one."""
        if not tokens:
            return np.empty(0), None
        joined = b" ".join(tokens)
        mark = self.marks.get(column)
        if b"," not in joined and mark != b"," and b"_" not in joined:
            if mark is None and b"." in joined:
                self.marks[column] = b"."
            try:
                return np.array(tokens).astype(float), None
            except ValueError:
                pass  # a missing value or text: found below, token by token
        values = np.full(len(tokens), np.nan)
        for row, token in enumerate(tokens):
            if token.lower() in _MISSING:
                continue
            here = b"," if b"," in token else b"." if b"." in token else None
            mark = mark or here
            if here is not None and here != mark:
                return values[:row], (
                    row,
                    f"{name} {_text(token)!r} has a decimal {_mark(here)} where rows above have a "
                    f"decimal {_mark(mark)}: write all numbers alike, without thousands separators",
                )
            try:
                values[row] = float(token.replace(b",", b"."))
                if b"_" in token:
                    raise ValueError
            except ValueError:
                return values[:row], (
                    row,
                    f"{name} {_text(token)[:40]!r} is not a number: correct it, or leave the field "
                    "blank where nothing was measured",
                )
        if mark is not None:
            self.marks[column] = mark
        return values, None


def _mark(mark: bytes) -> str:
    return "comma" if mark == b"," else "point"
