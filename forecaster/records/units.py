"""Units in column headings: what a length or a time is worth in SI.

>>> split_unit("surface elevation / ft")
('surface elevation', 'ft')
>>> split_unit("heave_mm"), split_unit("eta")
(('heave', 'mm'), ('eta', ''))
"""

from __future__ import annotations

import re

from forecaster.errors import InputError

# International yard and pound agreement (1959): 1 ft = 0.3048 m exactly.
LENGTH_UNITS = {
    **dict.fromkeys(("m", "metre", "metres", "meter", "meters"), 1.0),
    **dict.fromkeys(("dm", "decimetre", "decimetres", "decimeter", "decimeters"), 0.1),
    **dict.fromkeys(("cm", "centimetre", "centimetres", "centimeter", "centimeters"), 0.01),
    **dict.fromkeys(("mm", "millimetre", "millimetres", "millimeter", "millimeters"), 0.001),
    **dict.fromkeys(("ft", "foot", "feet"), 0.3048),
    **dict.fromkeys(("inch", "inches"), 0.0254),
}
TIME_UNITS = {
    **dict.fromkeys(("s", "sec", "secs", "second", "seconds"), 1.0),
    **dict.fromkeys(("ms", "msec", "millisecond", "milliseconds"), 1e-3),
    **dict.fromkeys(("us", "µs", "μs", "microsecond", "microseconds"), 1e-6),
    **dict.fromkeys(("min", "minute", "minutes"), 60.0),
    **dict.fromkeys(("h", "hr", "hour", "hours"), 3600.0),
}
_KNOWN = LENGTH_UNITS.keys() | TIME_UNITS.keys()
_BRACKETED = re.compile(r"^(.*?)\s*[\[({]\s*(.*?)\s*[\])}]\s*$")
_SLASHED = re.compile(r"^(.*\S)\s*/\s*([^/]+)$")
_LAST_WORD = re.compile(r"^(.*[^\s_])[\s_]+([^\s_]+)$")


def split_unit(heading: str) -> tuple[str, str]:
    """Name and unit of a column heading; the unit is ``""`` when the heading states none.

    ``name [u]``, ``name (u)`` and ``name / u`` state a unit even if it is unknown;
    ``name_u`` and ``name u`` only if u is a known unit.

    >>> split_unit("t [s]"), split_unit("level (fathom)"), split_unit("eta_2")
    (('t', 's'), ('level', 'fathom'), ('eta_2', ''))
    """
    heading = heading.strip()
    for pattern in (_BRACKETED, _SLASHED):
        found = pattern.match(heading)
        if found and found[2]:
            return found[1], _folded(found[2])
    found = _LAST_WORD.match(heading)
    if found and _folded(found[2]) in _KNOWN:
        return found[1], _folded(found[2])
    return heading, ""


def _folded(unit: str) -> str:
    return unit.strip().lower()


def length_scale(unit: str) -> float:
    """Metres in one `unit`.

    Raises
    ------
    InputError
        For a unit that is no length known here.

    Examples
    --------
    >>> length_scale("cm"), length_scale("m above datum")
    (0.01, 1.0)
    """
    words = _folded(unit).split()
    if not words or words[0] not in LENGTH_UNITS:
        raise InputError(
            f"{unit!r} is not a known unit of elevation: give unit as one of "
            "m, dm, cm, mm, ft, inch"
        )
    return LENGTH_UNITS[words[0]]


def time_scale(unit: str) -> float:
    """Seconds in one `unit`.

    Raises
    ------
    InputError
        For a unit that is no time known here.

    Examples
    --------
    >>> time_scale("ms")
    0.001
    """
    words = _folded(unit).split()
    if not words or words[0] not in TIME_UNITS:
        raise InputError(f"{unit!r} is not a known unit of time: use s, ms, us, min or h")
    return TIME_UNITS[words[0]]
