"""Frozen settings: what each value means, which values are valid, TOML in and out, their hash.

A settings class is a frozen dataclass derived from `Settings` whose fields are made by
`setting`; whatever way an object is made, an invalid value is refused with its dotted key.

>>> recipe = settings_from_table(SeaRecipe, {"engine": "hos", "members": 3, "root_seed": 11})
>>> recipe.gamma, recipe.views.noise
((1.0, 10.0), (0.0, 0.0))
"""

from __future__ import annotations

import difflib
import hashlib
import json
import tomllib
from collections.abc import Mapping
from dataclasses import MISSING, dataclass, field, fields, is_dataclass
from functools import cache
from itertools import pairwise
from math import inf, isnan, nan
from numbers import Integral, Real
from pathlib import Path
from types import MappingProxyType
from typing import Any, TypeVar, get_args, get_origin, get_type_hints

from forecaster.errors import InputError, SettingsError

ENGINES = ("linear", "nls", "dysthe", "hos")

_REQUIRED = "required"


@dataclass(frozen=True, slots=True)
class Rule:
    """What a setting means and which values it may take.

    Parameters
    ----------
    meaning : str
        One line for the reference.
    unit : str
        ``""`` for a pure number.
    low, high : float
        Smallest and largest valid value, both included unless `open_low`; of each element, for a
        list.
    open_low : bool
        Whether `low` itself is not valid.
    choices : tuple of str
        The valid words, when the setting is a word.
    increasing : bool
        Whether a list must increase.
    """

    meaning: str
    unit: str = ""
    low: float = -inf
    high: float = inf
    open_low: bool = False
    choices: tuple[str, ...] = ()
    increasing: bool = False

    @property
    def valid(self) -> str:
        """The valid values in words.

        >>> Rule("share", low=0, high=1, open_low=True).valid
        'above 0, at most 1'
        """
        if self.choices:
            return " | ".join(self.choices)
        parts = []
        if self.low > -inf:
            parts.append(f"{'above' if self.open_low else 'at least'} {self.low:.10g}")
        if self.high < inf:
            parts.append(f"at most {self.high:.10g}")
        if self.increasing:
            parts.append("increasing")
        return ", ".join(parts)


def setting(meaning: str, *, default=MISSING, **rule) -> Any:
    """A field of a settings class; options as of `Rule`; without `default` it must be given.

    Examples
    --------
    >>> @dataclass(frozen=True, slots=True, kw_only=True)
    ... class Tank(Settings):
    ...     depth_m: float = setting("still-water depth", default=3.0, unit="m", low=0.1)
    >>> Tank(depth_m=0)
    Traceback (most recent call last):
    ...
    forecaster.errors.SettingsError: depth_m: must be at least 0.1 [m], got 0
    """
    return field(default=default, metadata={"rule": Rule(meaning, **rule)})


class Settings:
    """Base of the settings classes: values are checked, and brought to their declared type.

    Fields are ``bool``, ``int``, ``float``, ``str``, ``tuple[float, float]`` (a range, lowest
    first), ``tuple[X, ...]`` (a list, not empty), made by `setting`, or another settings class
    (a table of the file), made by ``field(default_factory=...)``.
    """

    __slots__ = ()

    def __post_init__(self):
        for item in fields(self):
            value = _checked(
                _types(type(self))[item.name],
                item.metadata.get("rule"),
                getattr(self, item.name),
                item.name,
            )
            object.__setattr__(self, item.name, value)
        self.check()

    def check(self) -> None:
        """Raise SettingsError where valid values do not go together; a class may override it."""


@cache
def _types(cls: type) -> Mapping[str, Any]:
    """Field name -> type of a settings class."""
    return MappingProxyType(get_type_hints(cls))


def _checked(kind: Any, rule: Rule | None, value: Any, key: str) -> Any:
    """`value` as the type `kind`, or SettingsError."""
    if is_dataclass(kind):
        if not isinstance(value, kind):
            raise SettingsError(f"must be a table (a {kind.__name__}), got {value!r}", key=key)
        return value
    if get_origin(kind) is tuple:
        return _checked_tuple(get_args(kind), rule, value, key)
    unit = f" [{rule.unit}]" if rule.unit else ""
    if kind is bool:
        if not isinstance(value, bool):
            raise SettingsError(f"must be true or false, got {value!r}", key=key)
        return value
    if kind is str:
        if not isinstance(value, str):
            raise SettingsError(f"must be a text, got {value!r}", key=key)
        if rule.choices and value not in rule.choices:
            raise SettingsError(f"must be one of {', '.join(rule.choices)}; got {value!r}", key=key)
        return value
    if isinstance(value, bool) or not isinstance(value, Integral if kind is int else Real):
        noun = "a whole number" if kind is int else "a number"
        raise SettingsError(f"must be {noun}{unit}, got {value!r}", key=key)
    try:
        number = kind(value)
    except OverflowError:
        number = nan  # a whole number too large for a float
    too_low = number <= rule.low if rule.open_low else number < rule.low
    if isnan(number) or too_low or number > rule.high:
        raise SettingsError(f"must be {rule.valid or 'a number'}{unit}, got {value!r}", key=key)
    return number


def _checked_tuple(kinds: tuple, rule: Rule, value: Any, key: str) -> tuple:
    """`value` as a range (two kinds) or a list (one kind and an ellipsis), or SettingsError."""
    is_list = kinds[-1] is Ellipsis
    wanted = "a list with at least one value" if is_list else "two values [lowest, highest]"
    if not isinstance(value, list | tuple) or len(value) < 1 or not (is_list or len(value) == 2):
        raise SettingsError(f"must be {wanted}, got {value!r}", key=key)
    result = tuple(_checked(kinds[0], rule, item, key) for item in value)
    if not is_list and result[0] > result[1]:
        raise SettingsError(f"must be {wanted}, lowest first, got {value!r}", key=key)
    if rule.increasing and any(b <= a for a, b in pairwise(result)):
        raise SettingsError(f"must increase from value to value, got {value!r}", key=key)
    return result


S = TypeVar("S", bound=Settings)


def load_settings(path: str | Path, cls: type[S]) -> S:
    """Settings of class `cls` from a TOML file.

    Parameters
    ----------
    path : str or Path
    cls : type
        A settings class; its sections are the tables of the file.

    Raises
    ------
    InputError
        When there is no such file, or it is not text in UTF-8.
    SettingsError
        For a file that is not TOML, a key that `cls` does not have, a missing key, or a value of
        the wrong type or outside its range.  Carries the dotted key and names the file.
    """
    path = Path(path)
    try:
        text = path.read_text(encoding="utf-8")
    except (FileNotFoundError, IsADirectoryError) as error:
        raise InputError(f"there is no settings file {path}") from error
    except UnicodeDecodeError as error:
        raise InputError(f"{path}: settings are text in UTF-8, this is not ({error})") from error
    try:
        table = tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        raise SettingsError(f"not valid TOML: {error}", key=str(path)) from error
    try:
        return settings_from_table(cls, table)
    except SettingsError as error:
        raise SettingsError(f"{_problem(error)} (in {path})", key=error.key) from error


def settings_from_table(cls: type[S], table: Mapping[str, Any]) -> S:
    """Settings of class `cls` from nested tables, as TOML or JSON give them.

    Raises
    ------
    SettingsError
        As `load_settings`.

    Examples
    --------
    >>> settings_from_table(SeaRecipe, {"views": {"nois": [0, 0.05]}})
    Traceback (most recent call last):
    ...
    forecaster.errors.SettingsError: views.nois: there is no such setting; did you mean views.noise?
    """
    return _from_table(cls, table, "")


def _from_table(cls: type[S], table: Mapping[str, Any], prefix: str) -> S:
    if not isinstance(table, Mapping):
        raise SettingsError(f"must be a table, got {table!r}", key=prefix.rstrip("."))
    types = _types(cls)
    for key in table:
        if key not in types:
            near = difflib.get_close_matches(key, types, n=3, cutoff=0.5)
            advice = (
                f"did you mean {' or '.join(prefix + name for name in near)}?"
                if near
                else f"the settings here are {', '.join(types)}"
            )
            raise SettingsError(f"there is no such setting; {advice}", key=prefix + key)
    values = {
        key: _from_table(types[key], value, f"{prefix}{key}.")
        if is_dataclass(types[key])
        else value
        for key, value in table.items()
    }
    for item in fields(cls):
        if item.default is MISSING and item.default_factory is MISSING and item.name not in table:
            rule = item.metadata.get("rule")
            wanted = (
                f"a {types[item.name].__name__} table"
                if rule is None
                else (f"{rule.meaning} ({_valid(types[item.name], rule)})")
            )
            raise SettingsError(f"is missing, must be given: {wanted}", key=prefix + item.name)
    try:
        return cls(**values)
    except SettingsError as error:
        raise SettingsError(_problem(error), key=prefix + error.key) from error


def _problem(error: SettingsError) -> str:
    """The message of `error` without its key."""
    return str(error).removeprefix(f"{error.key}: ")


def settings_to_table(settings: Settings) -> dict[str, Any]:
    """Nested tables of plain values; tuples become lists.  Inverse of `settings_from_table`."""
    return {item.name: _plain(getattr(settings, item.name)) for item in fields(settings)}


def _plain(value: Any) -> Any:
    if isinstance(value, Settings):
        return settings_to_table(value)
    return list(value) if isinstance(value, tuple) else value


def settings_to_toml(settings: Settings) -> str:
    """The settings as TOML text, every key written; `load_settings` gives the same object back.

    Examples
    --------
    >>> print(settings_to_toml(SensorViews(per_sensor=2)).splitlines()[0])
    per_sensor = 2
    """
    return "\n".join(_toml_lines(settings_to_table(settings), "")) + "\n"


def _toml_lines(table: Mapping[str, Any], prefix: str) -> list[str]:
    lines = [
        f"{key} = {_toml_value(value)}"
        for key, value in table.items()
        if not isinstance(value, dict)
    ]
    for key, value in table.items():
        if isinstance(value, dict):
            lines += ["", f"[{prefix}{key}]", *_toml_lines(value, f"{prefix}{key}.")]
    return lines


def _toml_value(value: Any) -> str:
    if isinstance(value, list):
        return f"[{', '.join(map(_toml_value, value))}]"
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, str):
        # a JSON string is a TOML string but for DEL, which only TOML wants escaped
        return json.dumps(value, ensure_ascii=False).replace("\x7f", "\\u007f")
    return repr(value)


def settings_hash(settings: Settings) -> str:
    """SHA-256, in hexadecimal, that is equal for equal settings and changes with any value.

    Notes
    -----
    Of the JSON text of all values, defaults included, keys sorted: it depends neither on the
    order or layout of a file nor on whether it spells a default out, and it does change when a
    new version of the program adds a setting or alters a default.

    Examples
    --------
    >>> settings_hash(SensorViews()) == settings_hash(SensorViews(gap_share=0))
    True
    """
    text = json.dumps(settings_to_table(settings), sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()


@dataclass(frozen=True, slots=True)
class SettingRow:
    """One line of the settings reference, all fields as text."""

    key: str
    default: str
    unit: str
    valid: str
    meaning: str


def describe_settings(cls: type[Settings]) -> tuple[SettingRow, ...]:
    """The reference of a settings class: one row a setting, sections by dotted key.

    Examples
    --------
    >>> row = describe_settings(SeaRecipe)[0]
    >>> row.key, row.default, row.valid
    ('engine', 'required', 'linear | nls | dysthe | hos')
    """
    return tuple(_rows(cls, ""))


def _rows(cls: type[Settings], prefix: str) -> list[SettingRow]:
    rows = []
    for item in fields(cls):
        kind = _types(cls)[item.name]
        if is_dataclass(kind):
            rows += _rows(kind, f"{prefix}{item.name}.")
            continue
        rule = item.metadata.get("rule")
        default = _REQUIRED if item.default is MISSING else _toml_value(_plain(item.default))
        rows.append(
            SettingRow(prefix + item.name, default, rule.unit, _valid(kind, rule), rule.meaning)
        )
    return rows


def _valid(kind: Any, rule: Rule) -> str:
    """Type and valid values in words."""
    if rule.choices:
        return rule.valid
    nouns = {int: "whole number", float: "number", bool: "true | false", str: "text"}
    if get_origin(kind) is tuple:
        element, last = get_args(kind)
        many = f"{nouns[element]}s"
        noun = f"list of {many}" if last is Ellipsis else f"two {many} [lowest, highest]"
    else:
        noun = nouns[kind]
    return f"{noun}, {rule.valid}" if rule.valid else noun


# --- the settings of the program ---


@dataclass(frozen=True, slots=True, kw_only=True)
class SensorViews(Settings):
    """How sensors see a member's sea: each view is one record with its own imperfections."""

    per_sensor: int = setting("records taken at each sensor", default=1, low=1, high=1000)
    clean_share: float = setting(
        "share of the views that are noise-free and sampled as the sea is stored",
        default=0.0,
        low=0,
        high=1,
    )
    record_periods: tuple[float, float] = setting(
        "length of the record, drawn log-uniformly",
        default=(70.0, 70.0),
        unit="Tp",
        low=16,
        high=2000,
    )
    noise: tuple[float, float] = setting(
        "standard deviation of sensor noise, drawn uniformly; [0, 0] is noise-free",
        default=(0.0, 0.0),
        unit="Hs",
        low=0,
        high=0.5,
    )
    decimation: tuple[int, int] = setting(
        "every how many stored samples the sensor takes one, drawn uniformly",
        default=(1, 1),
        low=1,
        high=16,
    )
    quantisation: tuple[float, float] = setting(
        "step of the recorded values, drawn uniformly; 0 is none",
        default=(0.0, 0.0),
        unit="Hs",
        low=0,
        high=0.2,
    )
    gap_share: float = setting(
        "share of the samples missing, in gaps of up to half a peak period",
        default=0.0,
        low=0,
        high=0.1,
    )


@dataclass(frozen=True, slots=True, kw_only=True)
class SeaRecipe(Settings):
    """An ensemble of synthetic seas: which seas, how they age, who records them where."""

    engine: str = setting("equation that carries the waves", choices=ENGINES)
    members: int = setting("number of seas", low=1, high=10**6)
    root_seed: int = setting(
        "seed of the plan; each member's own seed follows from it and its number", low=0
    )
    gamma: tuple[float, float] = setting(
        "JONSWAP peak enhancement, drawn log-uniformly", default=(1.0, 10.0), low=1, high=20
    )
    steepness: tuple[float, float] = setting(
        "kp Hs / 2, drawn uniformly", default=(0.02, 0.15), low=0, open_low=True, high=0.2
    )
    second_system_share: float = setting(
        "share of the seas with a second, shorter wave system", default=0.0, low=0, high=1
    )
    settling_periods: tuple[float, float] = setting(
        "time the sea ages before it is stored, drawn uniformly",
        default=(30.0, 30.0),
        unit="Tp",
        low=10,
        high=1000,
    )
    duration_periods: float = setting("time stored", default=150.0, unit="Tp", low=40, high=4000)
    after_periods: float = setting(
        "time kept for outcomes after the issue time", default=80.0, unit="Tp", low=4, high=2000
    )
    samples_per_period: int = setting(
        "sampling of the stored elevation, for labels", default=16, unit="1/Tp", low=16, high=128
    )
    gauges: int = setting("places where the sea is stored", default=48, low=1, high=4096)
    gauge_spacing_wavelengths: float = setting(
        "distance between neighbouring gauges",
        default=2.5,
        unit="peak wavelengths",
        low=0,
        open_low=True,
        high=100,
    )
    sensors: int = setting("gauges that serve as sensors", default=8, low=1, high=4096)
    distances_wavelengths: tuple[float, ...] = setting(
        "distances from sensor to target",
        default=(0.0, 2.5, 5.0, 10.0, 15.0, 20.0, 30.0),
        unit="peak wavelengths",
        low=0,
        high=200,
        increasing=True,
    )
    views: SensorViews = field(default_factory=SensorViews)

    def check(self) -> None:
        """Sensors are gauges, distances end at gauges, and the longest record fits."""
        if self.sensors > self.gauges:
            raise SettingsError(
                f"must be at most the number of gauges, {self.gauges}, got {self.sensors}",
                key="sensors",
            )
        reach = (self.gauges - 1) * self.gauge_spacing_wavelengths
        for distance in self.distances_wavelengths:
            steps = distance / self.gauge_spacing_wavelengths
            if distance > reach or abs(steps - round(steps)) > 1e-9:
                raise SettingsError(
                    f"must be multiples of the gauge spacing {self.gauge_spacing_wavelengths:g} "
                    f"up to {reach:g} peak wavelengths, got {distance:g}",
                    key="distances_wavelengths",
                )
        room = self.duration_periods - self.after_periods
        if self.views.record_periods[1] > room:
            raise SettingsError(
                f"must be at most duration_periods - after_periods = {room:g}, "
                f"got {self.views.record_periods[1]:g}",
                key="views.record_periods",
            )


@dataclass(frozen=True, slots=True, kw_only=True)
class TrainSettings(Settings):
    """How a model is fitted to ensembles and calibrated."""

    root_seed: int = setting("seed of splits, thresholds and boosting", low=0)
    boosting_rounds: int = setting("trees in a bag", default=200, low=1, high=5000)
    learning_rate: float = setting(
        "shrinkage of each tree", default=0.06, low=0, open_low=True, high=1
    )
    leaves: int = setting("most leaves of a tree", default=24, low=2, high=1024)
    samples_per_leaf: int = setting("fewest rows in a leaf", default=300, low=1, high=10**6)
    bags: int = setting("models fitted to different shares of the seas", default=4, low=2, high=50)
    rows_per_bag: int = setting(
        "most (interval, threshold) pairs a bag is fitted to",
        default=1_200_000,
        low=1000,
        high=10**8,
    )
    uncovered_below: float = setting(
        "coverage up to which an interval counts as not covered", default=0.05, low=0, high=1
    )
    uncovered_share: float = setting(
        "share of the intervals not covered that a bag is fitted to", default=0.15, low=0, high=1
    )
    thresholds_per_interval: int = setting(
        "thresholds drawn for each interval", default=3, low=1, high=50
    )
    bag_share: float = setting(
        "share of the fitted seas that one bag sees", default=0.8, low=0.1, high=1
    )
    calibration_share: float = setting(
        "share of the seas kept from the fit for calibration", default=0.25, low=0.05, high=0.5
    )
