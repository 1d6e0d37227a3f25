"""Data types as JSON-ready documents: the one place where keys with units (``hs_m``) are spelled.

Each document is a table of rows (key, attribute, kind, meaning); the same table writes the
document and its JSON Schema, so that the two cannot disagree.

Rules of all documents: key order is fixed; a number is finite or, where the schema allows it,
null; ``depth_m`` and ``kph`` null mean deep water; an eigenvalue is ``{"re": .., "im": ..}``;
times are ISO 8601 UTC to the millisecond where the record has calendar time, else seconds on the
record's own clock.

>>> report = QualityReport("pass", ())
>>> document = check_document(Record([0.0, 1.0], dt=0.5), report, None, None, program_version="0")
>>> document["record"]["dt_s"], document["record"]["depth_m"], document["quality"]["verdict"]
(0.5, None, 'pass')
"""

from __future__ import annotations

import json
from collections.abc import Callable, Iterable
from dataclasses import dataclass
from math import isfinite
from operator import attrgetter
from typing import Any

import numpy as np

from forecaster.datatypes import (
    DOMAIN_STATUS,
    FLAGS,
    SENSORS,
    VERDICTS,
    Forecast,
    QualityReport,
    Record,
    SeaState,
    WaveStatistics,
)
from forecaster.errors import NumericsError

FORECAST_SCHEMA = "trikymia.forecast/1"
CHECK_SCHEMA = "trikymia.check/1"
_DIALECT = "https://json-schema.org/draft/2020-12/schema"
_NULL = {"type": "null"}
_STAMP = {
    "type": "string",
    "format": "date-time",
    "pattern": r"^\d{4,}-\d{2}-\d{2}T\d{2}:\d{2}:\d{2}\.\d{3}Z$",
}


def program_version() -> str:
    """Version of the installed package, ``"unknown"`` when it runs without being installed."""
    from importlib.metadata import PackageNotFoundError, version

    try:
        return version("trikymia")
    except PackageNotFoundError:
        return "unknown"


def utc_text(seconds: float) -> str:
    """POSIX seconds as ISO 8601 UTC, to the millisecond.

    >>> utc_text(1935396000.5)
    '2031-05-01T10:00:00.500Z'
    """
    return f"{np.datetime64(round(seconds * 1000), 'ms')}Z"


@dataclass(frozen=True, slots=True)
class _Kind:
    """How a value is written (given the value and whether times are calendar), and its schema."""

    write: Callable[[Any, bool], Any]
    schema: dict


def _number(value, calendar) -> float:
    if not isfinite(value):
        raise NumericsError(f"a document holds finite numbers only, got {value!r}", achieved=value)
    return float(value)


def _text(value, calendar) -> str:
    return str(value)


def _time(value, calendar) -> str | float:
    return utc_text(value) if calendar else round(_number(value, calendar), 3)


def _complex(value, calendar) -> dict[str, float]:
    return {"re": _number(value.real, calendar), "im": _number(value.imag, calendar)}


def _missing(value) -> bool:
    """Whether a value stands for "not known" or "without limit"."""
    return value is None or (isinstance(value, float | np.floating) and not isfinite(value))


def _or_null(kind: _Kind) -> _Kind:
    return _Kind(
        lambda value, calendar: None if _missing(value) else kind.write(value, calendar),
        {"anyOf": [kind.schema, _NULL]},
    )


def _list(kind: _Kind) -> _Kind:
    return _Kind(
        lambda values, calendar: [kind.write(value, calendar) for value in values],
        {"type": "array", "items": kind.schema},
    )


def _words(*choices: str) -> _Kind:
    return _Kind(_text, {"enum": list(choices)})


NUMBER = _Kind(_number, {"type": "number"})
POSITIVE = _Kind(_number, {"type": "number", "minimum": 0})
SHARE = _Kind(_number, {"type": "number", "minimum": 0, "maximum": 1})
COUNT = _Kind(lambda value, calendar: int(value), {"type": "integer", "minimum": 0})
YES_NO = _Kind(lambda value, calendar: bool(value), {"type": "boolean"})
TEXT = _Kind(_text, {"type": "string"})
TIME = _Kind(_time, {"anyOf": [_STAMP, {"type": "number"}]})
WALL_CLOCK = _Kind(lambda value, calendar: utc_text(value), _STAMP)
COMPLEX = _Kind(
    _complex,
    {
        "type": "object",
        "properties": {"re": {"type": "number"}, "im": {"type": "number"}},
        "required": ["re", "im"],
    },
)
SHARE_RANGE = _Kind(
    lambda value, calendar: [_number(item, calendar) for item in value],
    {"type": "array", "items": SHARE.schema, "minItems": 2, "maxItems": 2},
)

Row = tuple[str, str, _Kind, str]  # key, attribute of the data type, kind, meaning


def _object(*rows: Row) -> _Kind:
    """A JSON object; an empty attribute name hands on the whole data type."""

    def write(value, calendar):
        return {
            key: kind.write(attrgetter(name)(value) if name else value, calendar)
            for key, name, kind, _ in rows
        }

    return _Kind(
        write, _object_schema((key, kind.schema, meaning) for key, _, kind, meaning in rows)
    )


def _object_schema(properties: Iterable[tuple[str, dict, str]]) -> dict:
    described = {key: {**schema, "description": meaning} for key, schema, meaning in properties}
    return {"type": "object", "properties": described, "required": list(described)}


RECORD = _object(
    ("source", "source", TEXT, "file name or origin"),
    ("start", "start", TIME, "first sample used"),
    ("end", "end", TIME, "last sample used: the issue time"),
    ("dt_s", "dt", POSITIVE, "step between samples [s]"),
    ("n", "n", COUNT, "number of samples, gaps included"),
    ("depth_m", "depth", _or_null(POSITIVE), "water depth [m]; null: deep water"),
    ("sensor", "sensor", _words(*SENSORS), "kind of sensor"),
    ("calendar", "calendar", YES_NO, "whether times are UTC; false: the record's own seconds"),
    ("history", "history", _list(TEXT), "what was done to the data, in order"),
    ("warnings", "warnings", _list(TEXT), "what was assumed about the data"),
)

QUALITY = _object(
    ("verdict", "verdict", _words(*VERDICTS), "verdict on the record; fail is not scored"),
    (
        "tests",
        "tests",
        _list(
            _object(
                ("name", "name", TEXT, "name of the test"),
                ("flag", "flag", _words(*FLAGS), "its result"),
                ("examined", "examined", COUNT, "samples or segments looked at"),
                ("failed", "failed", COUNT, "how many of them failed"),
                ("detail", "detail", TEXT, "values and remedy"),
            )
        ),
        "all tests, those not evaluated included",
    ),
)

SEA_STATE = _object(
    ("hs_m", "hs", POSITIVE, "significant wave height 4 sqrt(m0) [m]"),
    ("tp_s", "tp", POSITIVE, "peak period [s]"),
    ("tm01_s", "tm01", POSITIVE, "mean period m0/m1 [s]"),
    ("tm02_s", "tm02", POSITIVE, "mean period sqrt(m0/m2) [s]"),
    ("steepness", "steepness", POSITIVE, "kp Hs / 2"),
    ("bandwidth", "bandwidth", POSITIVE, "spectral width nu"),
    ("qp", "qp", POSITIVE, "Goda peakedness"),
    ("bfi", "bfi", POSITIVE, "Benjamin-Feir index, deep water"),
    ("kph", "kph", _or_null(POSITIVE), "kp times depth; null: deep water"),
    ("spread_deg", "spread", _or_null(POSITIVE), "directional spread [deg]; null: unknown"),
    ("bfi_depth", "bfi_depth", NUMBER, "Benjamin-Feir index, finite depth"),
    ("kp_rad_per_m", "kp", POSITIVE, "wavenumber at the peak [rad/m]"),
    ("hs_error", "hs_error", POSITIVE, "relative standard sampling error of Hs"),
)

WAVES = _object(
    ("count", "count", COUNT, "complete zero-down-crossing waves"),
    ("highest_m", "highest", POSITIVE, "largest height [m]"),
    ("highest_over_hs", "highest_ratio", POSITIVE, "the same over Hs"),
    ("highest_time", "highest_time", _or_null(TIME), "of its crest; null: no complete wave"),
    ("highest_crest_m", "highest_crest", POSITIVE, "largest crest above the mean level [m]"),
    ("highest_crest_over_hs", "crest_ratio", POSITIVE, "the same over Hs"),
    (
        "expected_highest_over_hs",
        "expected_ratio",
        POSITIVE,
        "mean largest height of records of so many waves, over Hs (Forristall 1978)",
    ),
    ("mean_run_waves", "run_length", POSITIVE, "successive waves of Hs or more; 0: none"),
    (
        "mean_total_run_waves",
        "total_run",
        _or_null(POSITIVE),
        "waves from the begin of one such run to the next; null: fewer than two runs",
    ),
)

TARGET = _object(
    ("distance_m", "distance", POSITIVE, "from sensor to target along the waves [m]"),
    ("travel_time_s", "travel_time", POSITIVE, "of the energy at the peak [s]"),
    ("valid_from", "valid_from", TIME, "start of the horizon at the target"),
    ("valid_to", "valid_to", TIME, "end of the horizon at the target"),
    ("criterion", "criterion", _words("height", "crest"), "what is compared to the threshold"),
    ("threshold", "threshold", POSITIVE, "over Hs"),
    ("threshold_m", "threshold_m", POSITIVE, "the same [m]"),
)

INTERVAL = _object(
    ("from", "start", TIME, "start at the target"),
    ("to", "end", TIME, "end at the target"),
    ("lead_s", "lead", NUMBER, "from the issue time to the start [s]"),
    ("probability", "probability", _or_null(SHARE), "largest wave reaches the threshold"),
    ("base_rate", "base_rate", _or_null(SHARE), "the same from the sea state alone"),
    ("coverage", "coverage", SHARE, "share of the wave energy that the record holds"),
    ("median_height_m", "median_height", _or_null(POSITIVE), "median of the largest wave [m]"),
)

EXCEEDANCE = _object(
    ("ratio", "ratio", POSITIVE, "height or crest over Hs"),
    ("height_m", "height", POSITIVE, "the same [m]"),
    ("probability", "probability", _or_null(SHARE), "largest wave of the horizon reaches it"),
    ("base_rate", "base_rate", _or_null(SHARE), "the same from the sea state alone"),
)

GROUP = _object(
    ("time", "time", TIME, "of its envelope maximum, at the sensor"),
    ("arrival", "arrival", TIME, "at the target"),
    ("duration_s", "duration", POSITIVE, "[s]"),
    ("height_m", "height", POSITIVE, "envelope height 2|A| at the sensor [m]"),
    (
        "eigenvalues",
        "eigenvalues",
        _list(COMPLEX),
        "discrete Zakharov-Shabat eigenvalues, of q = conj(k0 A)/sqrt(2) over omega0 t",
    ),
    ("focus_distance_m", "focus_distance", _or_null(NUMBER), "downwave [m]; null: does not focus"),
    ("amplification", "amplification", _or_null(POSITIVE), "of the envelope at the focus"),
)

SCATTERING = _object(
    ("carrier_rad_per_s", "envelope.omega0", POSITIVE, "frequency of the carrier [rad/s]"),
    ("carrier_speed_m_per_s", "carrier_speed", POSITIVE, "its group speed [m/s]"),
    (
        "eigenvalues",
        "eigenvalues",
        _list(
            _object(
                ("eigenvalue", "value", COMPLEX, "of q = conj(k0 A)/sqrt(2) over omega0 t"),
                ("time", "time", TIME, "where in the record it lives"),
                ("height_m", "height", POSITIVE, "envelope height 2|A| of its soliton [m]"),
                ("height_over_hs", "height_ratio", POSITIVE, "the same over Hs"),
                ("group_speed_m_per_s", "speed", POSITIVE, "of its soliton [m/s]"),
                ("group_speed_offset", "speed_offset", NUMBER, "over the carrier's, less 1"),
            )
        ),
        "discrete Zakharov-Shabat eigenvalues of the whole record, highest first",
    ),
    (
        "groups",
        "groups",
        _list(
            _object(
                ("start", "start", TIME, "start of its window"),
                ("end", "end", TIME, "end of its window"),
                ("time", "peak_time", TIME, "of its envelope maximum"),
                ("height_m", "height", POSITIVE, "envelope height 2|A| there [m]"),
                ("eigenvalues", "eigenvalues", _list(COMPLEX), "of the window"),
                ("soliton_share", "soliton_share", POSITIVE, "of its energy, in these"),
                ("chirp_rad_per_s2", "chirp", NUMBER, "rise of the frequency through the group"),
                (
                    "focus_distance_m",
                    "focus_distance",
                    _or_null(NUMBER),
                    "downwave [m]; null: does not focus",
                ),
                ("focus_time", "focus_time", _or_null(TIME), "there; null: does not focus"),
                ("amplification", "amplification", _or_null(POSITIVE), "of the envelope there"),
            )
        ),
        "wave groups of the record, in order of time",
    ),
    ("energy_discrete", "discrete_share", POSITIVE, "share of the energy in the eigenvalues"),
    ("energy_continuous", "continuous_share", POSITIVE, "share in waves that disperse"),
    (
        "periodic",
        "periodic",
        _object(
            ("points", "points", COUNT, "of the main spectrum above the axis"),
            ("unstable_modes", "unstable_modes", COUNT, "pairs of them joined above the axis"),
            ("open_bands", "open_bands", COUNT, "pairs that lie apart"),
            ("single_points", "single_points", COUNT, "points without a partner above the axis"),
            ("widest_band_over_hs", "widest_band", POSITIVE, "as the height of a soliton over Hs"),
        ),
        "the record repeated for ever",
    ),
    (
        "expected_drift_over_hs",
        "drift",
        POSITIVE,
        "rms change of the largest soliton of a lone train over 20 wavelengths, over Hs",
    ),
    (
        "expected_group_drift_over_hs",
        "group_drift",
        POSITIVE,
        "the same of the largest group cut out of it",
    ),
    ("remarks", "remarks", _list(TEXT), "how far all of this holds"),
)

PROGRAM = (
    "program",
    "program_version",
    _object(("version", "", TEXT, "of the program")),
    "the program that answered",
)

_CHECK_BODY = (
    ("record", RECORD, "the record that was used"),
    ("quality", QUALITY, "quality of the record"),
    ("sea_state", _or_null(SEA_STATE), "of the record; null if quality failed"),
    ("waves", _or_null(WAVES), "of the record; null if quality failed"),
    ("scattering", _or_null(SCATTERING), "its scattering spectrum; null if not asked for"),
)

_BODY: tuple[Row, ...] = (
    ("record", "record", RECORD, "the record that was used"),
    ("quality", "quality", QUALITY, "quality of the record"),
    ("sea_state", "sea_state", _or_null(SEA_STATE), "of the record; null if quality failed"),
    ("target", "target", _or_null(TARGET), "place, horizon and criterion; null if quality failed"),
    (
        "probability",
        "probability",
        _or_null(SHARE),
        "of the event in the horizon; null: none given",
    ),
    ("probability_90", "probability_90", _or_null(SHARE_RANGE), "90 % interval of the probability"),
    ("base_rate", "base_rate", _or_null(SHARE), "from the sea state alone, Hs uncertain"),
    ("base_rate_known_hs", "base_rate_known_hs", _or_null(SHARE), "the same, Hs taken as exact"),
    ("odds_ratio", "odds_ratio", _or_null(POSITIVE), "odds of probability over those of base_rate"),
    ("intervals", "intervals", _list(INTERVAL), "the horizon, piece by piece"),
    ("exceedance", "exceedance", _list(EXCEEDANCE), "probability for every height"),
    ("groups", "groups", _list(GROUP), "wave groups of the record"),
    (
        "reasons",
        "reasons",
        _list(
            _object(
                ("feature", "feature", TEXT, "in words"),
                ("effect", "effect", NUMBER, "on the log odds"),
            )
        ),
        "what moved this forecast",
    ),
    (
        "domain",
        "domain",
        _object(
            ("status", "status", _words(*DOMAIN_STATUS), "of the sea, to the model"),
            ("reasons", "reasons", _list(TEXT), "why it is not inside"),
        ),
        "whether the sea lies where the model was trained and verified",
    ),
    ("caveats", "caveats", _list(TEXT), "what must be known to use the answer"),
    (
        "model",
        "model",
        _or_null(
            _object(
                ("name", "name", TEXT, "of the model"),
                ("version", "version", TEXT, "of the model"),
                ("sha256", "sha256", TEXT, "of the model file"),
            )
        ),
        "that answered; null if none was used",
    ),
    PROGRAM,
)
_FORECAST = _object(("issued_at", "issued_at", WALL_CLOCK, "wall clock of the answer"), *_BODY)
_ERROR = (
    "error",
    _object_schema(
        [("class", TEXT.schema, "class of the error"), ("message", TEXT.schema, "with remedy")]
    ),
    "why the record could not be used",
)


def forecast_document(forecast: Forecast) -> dict[str, Any]:
    """A forecast as a document of schema ``trikymia.forecast/1``.

    Raises
    ------
    NumericsError
        If a number that must be finite is not.
    """
    written = _FORECAST.write(forecast, forecast.record.calendar)
    return {"schema": FORECAST_SCHEMA, **written, "error": None}


def error_document(
    source: str, error_class: str, message: str, *, issued_at: float, program_version: str
) -> dict[str, Any]:
    """The document of a record that could not be read or scored: every key, and the error.

    Parameters
    ----------
    source : str
        The record as it was named.
    error_class, message : str
    issued_at : float [s]
        Wall clock, POSIX seconds.
    program_version : str

    Examples
    --------
    >>> document = error_document(
    ...     "a.csv", "RecordFormatError", "is empty", issued_at=0.0, program_version="0"
    ... )
    >>> document["probability"], document["intervals"], document["error"]["message"]
    (None, [], 'is empty')
    """
    empty = {key: [] if kind.schema.get("type") == "array" else None for key, _, kind, _ in _BODY}
    return {
        "schema": FORECAST_SCHEMA,
        "issued_at": utc_text(issued_at),
        **empty,
        "record": {"source": source},
        "program": {"version": program_version},
        "error": {"class": error_class, "message": message},
    }


def check_document(
    record: Record,
    quality: QualityReport,
    sea_state: SeaState | None,
    waves: WaveStatistics | None,
    scattering=None,
    *,
    program_version: str,
) -> dict[str, Any]:
    """Quality, sea state and waves of a record as a document of schema ``trikymia.check/1``.

    Parameters
    ----------
    record : Record
    quality : QualityReport
    sea_state : SeaState or None
    waves : WaveStatistics or None
        Null, as `sea_state`, where the record failed its quality tests.
    scattering : ScatteringSpectrum or None
        Null in the document where it was not asked for or could not be given.
    program_version : str
    """
    told = (record, quality, sea_state, waves, scattering)
    body = {
        key: kind.write(value, record.calendar)
        for (key, kind, _), value in zip(_CHECK_BODY, told, strict=True)
    }
    return {"schema": CHECK_SCHEMA, **body, "program": {"version": program_version}}


def check_schema() -> dict[str, Any]:
    """JSON Schema (draft 2020-12) of ``trikymia.check/1``.

    Examples
    --------
    >>> check_schema()["properties"]["waves"]["description"]
    'of the record; null if quality failed'
    """
    rows = [
        ("schema", {"const": CHECK_SCHEMA}, "name and version of this format"),
        *((key, kind.schema, meaning) for key, kind, meaning in _CHECK_BODY),
        (PROGRAM[0], PROGRAM[2].schema, PROGRAM[3]),
    ]
    return {
        "$schema": _DIALECT,
        "title": CHECK_SCHEMA,
        "description": "What one record holds. Readers must accept keys that are not listed here.",
        **_object_schema(rows),
    }


def forecast_schema() -> dict[str, Any]:
    """JSON Schema (draft 2020-12) of ``trikymia.forecast/1``, answers and errors.

    Examples
    --------
    >>> answer, failure = forecast_schema()["oneOf"]
    >>> answer["properties"]["record"]["properties"]["depth_m"]["description"]
    'water depth [m]; null: deep water'
    """
    head = [
        ("schema", {"const": FORECAST_SCHEMA}, "name and version of this format"),
        ("issued_at", _STAMP, "wall clock of the answer"),
    ]
    answer = [(key, kind.schema, meaning) for key, _, kind, meaning in _BODY]
    kept = {
        "record": _object_schema([("source", TEXT.schema, "the record as it was named")]),
        "program": PROGRAM[2].schema,
    }
    failure = [
        (key, kept.get(key, {"maxItems": 0} | schema if "items" in schema else _NULL), meaning)
        for key, schema, meaning in answer
    ]
    return {
        "$schema": _DIALECT,
        "title": FORECAST_SCHEMA,
        "description": "One forecast of an extreme wave group, or the error that prevented it. "
        "Readers must accept keys that are not listed here.",
        "oneOf": [
            _object_schema([*head, *answer, ("error", _NULL, "null: the record was read")]),
            _object_schema([*head, *failure, _ERROR]),
        ],
    }


def dumps(document: dict[str, Any], *, indent: int | None = None) -> str:
    """A document as strict JSON text in ASCII: one line, unless `indent` is given.

    >>> dumps({"hs_m": 2.5, "kph": None})
    '{"hs_m": 2.5, "kph": null}'
    """
    return json.dumps(document, indent=indent, allow_nan=False)
