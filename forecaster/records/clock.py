"""Time stamps as text: ISO 8601 to POSIX seconds (UTC).

>>> instant("2031-05-01T12:00:00.5+02:00")
(1935396000.5, True)
"""

from __future__ import annotations

import re
from datetime import UTC, datetime, timedelta
from math import isfinite

import numpy as np

from forecaster.errors import InputError

_STAMP = re.compile(
    r"^(\d{4})([-/]?)(\d{2})\2(\d{2})"
    r"(?:[Tt ]\s*(\d{1,2}):?(\d{2})(?::?(\d{2})(?:[.,](\d+))?)?)?"
    r"\s*(Z|z|UTC|[+-]\d{2}(?::?\d{2})?)?$"
)
_DAY_FIRST = re.compile(r"^\d{1,2}[/.\-]\d{1,2}[/.\-]\d{2,4}\b")
_DATE = re.compile(r"^\d{4}([-/])\d{2}\1\d{2}$")
_CLOCK = re.compile(r"^\d{1,2}:\d{2}(:\d{2}([.,]\d+)?)?\s*(Z|z|UTC|[+-]\d{2}:?\d{2})?$")
_ZERO = ord("0")


def is_date(text: str) -> bool:
    """Whether `text` is a date alone, year first.

    >>> is_date("2031-05-01"), is_date("2031-05-01T00:00")
    (True, False)
    """
    return bool(_DATE.match(text))


def is_clock(text: str) -> bool:
    """Whether `text` is a time of day alone.

    >>> is_clock("12:00:00.25"), is_clock("12.5")
    (True, False)
    """
    return bool(_CLOCK.match(text))


def is_stamp(text: str) -> bool:
    """Whether `text` looks like a date with or without a time, in any order of day and month.

    >>> is_stamp("01/05/2031 12:00"), is_stamp("20310501")
    (True, False)
    """
    return bool(_DAY_FIRST.match(text)) or (bool(_STAMP.match(text)) and not text.isdigit())


def instant(text: str) -> tuple[float, bool]:
    """POSIX seconds of an ISO 8601 time stamp, and whether it states its offset from UTC.

    Raises
    ------
    InputError
        For a stamp that is no such time, or that puts the day or month first.

    Examples
    --------
    >>> instant("1970-01-01 00:01")
    (60.0, False)
    """
    text = text.strip()
    if _DAY_FIRST.match(text):
        raise InputError(
            f"{text!r}: day and month cannot be told apart; write the year first, "
            "as in 2031-05-01T12:00:00Z"
        )
    found = _STAMP.match(text)
    if not found:
        raise InputError(f"{text!r} is not a time; write seconds or 2031-05-01T12:00:00Z")
    year, _, month, day, hour, minute, second, fraction, zone = found.groups()
    try:
        moment = datetime(
            int(year), int(month), int(day), int(hour or 0), int(minute or 0), int(second or 0),
            tzinfo=UTC,
        )  # fmt: skip
        offset = _offset(zone)
    except ValueError as error:
        raise InputError(f"{text!r} is not a time that exists: {error}") from error
    whole = (moment - datetime(1970, 1, 1, tzinfo=UTC) - offset) // timedelta(seconds=1)
    return whole + (float(f"0.{fraction}") if fraction else 0.0), zone is not None


def _offset(zone: str | None) -> timedelta:
    if zone is None or zone in ("Z", "z", "UTC"):
        return timedelta(0)
    digits = zone[1:].replace(":", "").ljust(4, "0")
    hours, minutes = int(digits[:2]), int(digits[2:])
    if hours > 23 or minutes > 59:
        raise ValueError(f"offset {zone} from UTC")
    return (-1 if zone[0] == "-" else 1) * timedelta(hours=hours, minutes=minutes)


def instants(tokens) -> tuple[np.ndarray, np.ndarray]:
    """POSIX seconds of many time stamps, and which of them state their offset from UTC.

    Parameters
    ----------
    tokens : (n,) array_like of bytes

    Returns
    -------
    seconds : (n,) array [s]
        NaN where a token is no time: `instant` says why.
    zoned : (n,) bool array

    Notes
    -----
    Tokens of one length that follow ``YYYY-MM-DDTHH:MM:SS`` are read together, digit column by
    digit column; all others one by one.

    Examples
    --------
    >>> instants([b"1970-01-01T00:00:01.50Z", b"yesterday"])[0].tolist()
    [1.5, nan]
    """
    tokens = np.char.strip(np.asarray(tokens, dtype="S"))
    seconds = np.full(tokens.size, np.nan)
    zoned = np.zeros(tokens.size, dtype=bool)
    lengths = np.char.str_len(tokens)
    characters = np.ascontiguousarray(tokens).view(np.uint8).reshape(tokens.size, -1)
    for length in np.unique(lengths):
        if length >= 19:
            rows = np.flatnonzero(lengths == length)
            seconds[rows], zoned[rows] = _instants_of_one_length(characters[rows, :length])
    for row in np.flatnonzero(np.isnan(seconds)):
        try:
            seconds[row], zoned[row] = instant(tokens[row].decode("latin-1"))
        except InputError:
            continue  # stays NaN, as documented
    return seconds, zoned


def _instants_of_one_length(characters: np.ndarray) -> tuple[np.ndarray, bool]:
    """`instants` for an (n, length >= 19) array of characters; NaN where the layout differs."""
    first = bytes(characters[0])
    tail = 0
    if first.endswith((b"Z", b"z")):
        tail = 1
    elif first[-6:-5] in (b"+", b"-") and first[-3:-2] == b":" and len(first) >= 25:
        tail = 6
    stop = characters.shape[1] - tail
    good = np.isin(characters[:, 10], [ord("T"), ord("t"), ord(" ")])
    good &= (characters[:, 4] == characters[:, 7]) & np.isin(characters[:, 4], [ord("-"), ord("/")])
    good &= (characters[:, 13] == ord(":")) & (characters[:, 16] == ord(":"))

    def number(start: int, end: int) -> np.ndarray:
        nonlocal good
        value = np.zeros(len(characters))
        for column in range(start, end):
            digit = characters[:, column].astype(float) - _ZERO
            good &= (digit >= 0) & (digit <= 9)
            value = 10 * value + digit
        return value

    year, month, day = number(0, 4), number(5, 7), number(8, 10)
    hour, minute, second = number(11, 13), number(14, 16), number(17, 19)
    fraction = np.zeros(len(characters))
    if stop > 19:
        good &= np.isin(characters[:, 19], [ord("."), ord(",")]) & (stop > 20)
        fraction = number(20, stop) / 10.0 ** (stop - 20)
    offset = np.zeros(len(characters))
    if tail == 1:
        good &= np.isin(characters[:, -1], [ord("Z"), ord("z")])
    elif tail == 6:
        sign = np.where(characters[:, -6] == ord("-"), -1.0, 1.0)
        good &= np.isin(characters[:, -6], [ord("+"), ord("-")])
        good &= characters[:, -3] == ord(":")
        hours, minutes = number(stop + 1, stop + 3), number(stop + 4, stop + 6)
        good &= (hours < 24) & (minutes < 60)
        offset = sign * (3600 * hours + 60 * minutes)
    good &= (year >= 1) & (month >= 1) & (month <= 12) & (day >= 1)
    good &= (hour < 24) & (minute < 60) & (second < 60)
    months = np.where(good, 12 * (year - 1970) + month - 1, 0).astype("int64").astype("M8[M]")
    first_day = months.astype("M8[D]").astype("int64")
    good &= day <= (months + 1).astype("M8[D]").astype("int64") - first_day
    whole = 86400.0 * (first_day + day - 1) + 3600 * hour + 60 * minute + second - offset
    return np.where(good, whole + fraction, np.nan), tail > 0


def resolve(at: float | str, *, calendar: bool) -> float:
    """A time given by the caller, on the clock of a record.

    Parameters
    ----------
    at : float or str
        Seconds on the record's clock (POSIX seconds if `calendar`), or ISO 8601; a stamp without
        offset is UTC.
    calendar : bool
        Whether the record has calendar time.

    Raises
    ------
    InputError
        For a time that cannot be read, or a calendar time where the record has none.

    Examples
    --------
    >>> resolve("1970-01-01T00:01:00Z", calendar=True), resolve("90", calendar=False)
    (60.0, 90.0)
    """
    try:
        seconds = float(at)
    except ValueError:
        seconds, _ = instant(str(at))
        if not calendar:
            raise InputError(
                f"issue time {at!r} is a calendar time but the record has none: "
                "give seconds on the record's own clock"
            ) from None
    except TypeError:
        raise InputError(f"issue time must be seconds or ISO 8601 text, got {at!r}") from None
    if not isfinite(seconds):
        raise InputError(f"issue time must be finite, got {at!r}")
    return seconds


def written(seconds: float, *, calendar: bool) -> str:
    """A time on a record's clock in words for messages.

    >>> written(60.25, calendar=True), written(60.25, calendar=False)
    ('1970-01-01T00:01:00.250Z', '60.25 s')
    """
    if not calendar:
        return f"{seconds:.10g} s"
    return f"{np.datetime64(round(seconds * 1000), 'ms')}Z"
