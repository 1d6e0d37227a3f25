"""Settings: validity, TOML in and out, hash, reference."""

import tomllib
from dataclasses import FrozenInstanceError, dataclass, field, replace
from math import inf, nan

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecaster.errors import InputError, SettingsError
from forecaster.settings import (
    SeaRecipe,
    SensorViews,
    Settings,
    TrainSettings,
    describe_settings,
    load_settings,
    setting,
    settings_from_table,
    settings_hash,
    settings_to_table,
    settings_to_toml,
)

RECIPE = SeaRecipe(engine="hos", members=3, root_seed=11)
CLASSES = (SeaRecipe, SensorViews, TrainSettings)


@dataclass(frozen=True, slots=True, kw_only=True)
class Buoy(Settings):
    mass_kg: float = setting("mass", unit="kg", low=0, open_low=True)


@dataclass(frozen=True, slots=True, kw_only=True)
class Mooring(Settings):
    name: str = setting("what it is called", default="north")
    slack: bool = setting("whether the line may go slack", default=False)
    turns: int = setting("turns on the winch", default=3, low=0, high=9)
    depth_m: float = setting("water depth", default=inf, unit="m", low=0)
    loads: tuple[float, ...] = setting("loads in order", default=(1.0,), unit="N")
    words: tuple[str, ...] = setting("tags", default=("a",), choices=("a", "b"))
    buoy: Buoy = field(default_factory=lambda: Buoy(mass_kg=5))
    anchor: Buoy = field()


ONE = {"one": setting("a number", default=1)}
TWO = {"two": setting("a number", default=2)}


def mooring(**values):
    return settings_from_table(Mooring, {"anchor": {"mass_kg": 2}, **values})


# --- files ---


def test_file_gives_nested_settings_with_defaults(tmp_path):
    file = tmp_path / "recipe.toml"
    file.write_text(
        "engine = 'dysthe'\nmembers = 40\nroot_seed = 7\nsteepness = [0.04, 0.14]\n"
        "[views]\nnoise = [0, 0.03]\n"
    )
    recipe = load_settings(file, SeaRecipe)
    assert recipe == SeaRecipe(
        engine="dysthe",
        members=40,
        root_seed=7,
        steepness=(0.04, 0.14),
        views=SensorViews(noise=(0.0, 0.03)),
    )
    assert recipe.gamma == (1.0, 10.0)


@pytest.mark.parametrize(
    ("text", "key", "message"),
    [
        ("members = ", "recipe.toml", "not valid TOML: Invalid value"),
        ("members = 3\nroot_seed = 1", "engine", r"missing, .*linear \| nls"),
        ("engine='hos'\nmembers=3\nroot_seed=1\nsteepnes=[0.1,0.2]", "steepnes", "mean steepness"),
        ("engine='hos'\nmembers=3\nroot_seed=1\nxyzzy=1", "xyzzy", "settings here are engine, me"),
        ("engine='hos'\nmembers=3\nroot_seed=1\n[views]\nnoises=1", "views.noises", "views.noise"),
        ("engine='hos'\nmembers=3\nroot_seed=1\nviews=1", "views", "must be a table, got 1"),
        (
            "engine='hos'\nmembers=3\nroot_seed=1\n[views]\nnoise=[0, 7]",
            "views.noise",
            r"at least 0, at most 0.5 \[Hs\], got 7",
        ),
        ("engine='hos'\nmembers=3\nroot_seed=1\nsensors=60", "sensors", "number of gauges, 48"),
    ],
)
def test_file_with_an_error_is_refused_naming_key_remedy_and_file(tmp_path, text, key, message):
    file = tmp_path / "recipe.toml"
    file.write_text(text)
    with pytest.raises(SettingsError, match=message) as caught:
        load_settings(file, SeaRecipe)
    assert caught.value.key.endswith(key)
    assert "recipe.toml" in str(caught.value)
    assert str(caught.value).count(caught.value.key + ":") == 1


def test_missing_or_binary_file_is_refused(tmp_path):
    with pytest.raises(InputError, match=r"no settings file .*absent"):
        load_settings(tmp_path / "absent.toml", SeaRecipe)
    (tmp_path / "binary.toml").write_bytes(b"\xff\xfe")
    with pytest.raises(InputError, match="UTF-8"):
        load_settings(tmp_path / "binary.toml", SeaRecipe)


# --- values ---


@pytest.mark.parametrize(
    ("value", "message"),
    [
        ({"name": 3}, "name: must be a text, got 3"),
        ({"slack": 1}, "slack: must be true or false, got 1"),
        ({"turns": 3.0}, "turns: must be a whole number, got 3.0"),
        ({"turns": True}, "turns: must be a whole number, got True"),
        ({"turns": 10}, "turns: must be at least 0, at most 9, got 10"),
        ({"depth_m": "deep"}, r"depth_m: must be a number \[m\], got 'deep'"),
        ({"depth_m": nan}, r"depth_m: must be at least 0 \[m\], got nan"),
        ({"depth_m": 10**400}, "depth_m: must be at least 0"),
        ({"loads": []}, "loads: must be a list with at least one value"),
        ({"loads": 3.0}, "loads: must be a list with at least one value"),
        ({"loads": [1, "x"]}, r"loads: must be a number \[N\], got 'x'"),
        ({"words": ["c"]}, "words: must be one of a, b; got 'c'"),
        ({"buoy": {"mass_kg": 0}}, r"buoy.mass_kg: must be above 0 \[kg\], got 0"),
        ({"buoy": {}}, r"buoy.mass_kg: is missing, must be given: mass \(number, above 0\)"),
    ],
)
def test_invalid_value_is_refused(value, message):
    with pytest.raises(SettingsError, match=message):
        mooring(**value)


def test_missing_table_and_wrong_object_are_refused():
    with pytest.raises(SettingsError, match="anchor: is missing, must be given: a Buoy table"):
        settings_from_table(Mooring, {})
    with pytest.raises(SettingsError, match="anchor: must be a table"):
        Mooring(anchor={"mass_kg": 2})


@pytest.mark.parametrize(
    ("change", "key"),
    [
        ({"gamma": (5, 2)}, "gamma"),
        ({"gamma": (1, 2, 3)}, "gamma"),
        ({"steepness": (0, 0.1)}, "steepness"),
        ({"settling_periods": 29.9}, "settling_periods"),
        ({"samples_per_period": 8}, "samples_per_period"),
        ({"distances_wavelengths": (5, 2.5)}, "distances_wavelengths"),
        ({"distances_wavelengths": (2.5, 4)}, "distances_wavelengths"),
        ({"distances_wavelengths": (2.5, 120)}, "distances_wavelengths"),
        ({"engine": "euler"}, "engine"),
    ],
)
def test_recipe_that_cannot_be_run_is_refused_however_it_is_made(change, key):
    with pytest.raises(SettingsError) as caught:
        replace(RECIPE, **change)
    assert caught.value.key == key
    table = {**settings_to_table(RECIPE), **change}
    with pytest.raises(SettingsError) as caught:
        settings_from_table(SeaRecipe, table)
    assert caught.value.key == key


@pytest.mark.parametrize(
    ("change", "key"),
    [
        ({"calibration_share": 0.9}, "calibration_share"),
        ({"bags": 1}, "bags"),  # one bag cannot say how sure it is
        ({"learning_rate": 0}, "learning_rate"),
    ],
)
def test_training_that_cannot_be_run_is_refused(change, key):
    with pytest.raises(SettingsError) as caught:
        TrainSettings(root_seed=1, **change)
    assert caught.value.key == key


def test_values_take_their_declared_type_and_cannot_be_changed():
    made = mooring(depth_m=20, turns=np.int64(4), loads=(1, np.float32(0.5)))
    assert [type(v) for v in (made.depth_m, made.turns, *made.loads)] == [float, int, float, float]
    with pytest.raises(FrozenInstanceError):
        made.turns = 5


# --- TOML out, hash ---


@given(
    name=st.text(st.characters(exclude_categories=["Cs"])),
    slack=st.booleans(),
    turns=st.integers(0, 9),
    depth_m=st.floats(min_value=0, allow_infinity=True),
    loads=st.lists(st.floats(allow_nan=False), min_size=1, max_size=4),
    mass=st.floats(min_value=0, exclude_min=True, allow_infinity=False),
)
def test_toml_text_gives_the_same_settings_back(name, slack, turns, depth_m, loads, mass):
    made = mooring(
        name=name, slack=slack, turns=turns, depth_m=depth_m, loads=loads, buoy={"mass_kg": mass}
    )
    # independent code: the standard library's TOML reader
    back = settings_from_table(Mooring, tomllib.loads(settings_to_toml(made)))
    assert back == made
    assert settings_hash(back) == settings_hash(made)


def test_text_that_toml_wants_escaped_is_escaped():
    made = mooring(name='\x7f"\\\n\x00é🌊')
    assert settings_from_table(Mooring, tomllib.loads(settings_to_toml(made))) == made


def test_written_recipe_is_loaded_again(tmp_path):
    file = tmp_path / "recipe.toml"
    file.write_text(settings_to_toml(RECIPE))
    assert load_settings(file, SeaRecipe) == RECIPE


def test_hash_ignores_layout_and_follows_every_value():
    table = settings_to_table(RECIPE)
    assert settings_hash(
        settings_from_table(SeaRecipe, dict(reversed(table.items())))
    ) == settings_hash(RECIPE)
    assert settings_hash(replace(RECIPE, settling_periods=(30, 30))) == settings_hash(RECIPE)
    changed = [
        replace(RECIPE, members=4),
        replace(RECIPE, gamma=(1.0, 9.0)),
        replace(RECIPE, views=SensorViews(gap_share=0.01)),
    ]
    assert len({settings_hash(recipe) for recipe in (RECIPE, *changed)}) == 4


def test_hash_does_not_depend_on_the_order_of_declaration():
    first = dataclass(frozen=True, kw_only=True)(
        type("First", (Settings,), {**ONE, **TWO, "__annotations__": {"one": int, "two": int}})
    )
    second = dataclass(frozen=True, kw_only=True)(
        type("Second", (Settings,), {**TWO, **ONE, "__annotations__": {"two": int, "one": int}})
    )
    assert settings_hash(first()) == settings_hash(second())


def test_hash_is_the_digest_of_the_canonical_text():
    # by hand: the JSON text of the settings, SHA-256 by `printf ... | sha256sum`
    assert settings_hash(Buoy(mass_kg=2)) == (
        "ba091c46a436e0e58d9f490e2aa893b27fdf36a23ba6691b74abd94fec8462c3"
    )


# --- reference ---


def test_reference_has_a_row_for_every_key_and_says_what_is_valid():
    rows = {row.key: row for row in describe_settings(SeaRecipe)}
    flat = settings_to_table(RECIPE)
    views = flat.pop("views")
    assert list(rows) == [*flat, *(f"views.{key}" for key in views)]
    assert rows["engine"].default == "required"
    noise = rows["views.noise"]
    assert (noise.default, noise.unit) == ("[0.0, 0.0]", "Hs")
    assert noise.valid == "two numbers [lowest, highest], at least 0, at most 0.5"
    assert rows["distances_wavelengths"].valid == (
        "list of numbers, at least 0, at most 200, increasing"
    )
    assert rows["members"].valid == "whole number, at least 1, at most 1000000"


@pytest.mark.parametrize("cls", CLASSES)
def test_printed_default_is_the_default(cls):
    rows = describe_settings(cls)
    lines = [f"{row.key} = {row.default}" for row in rows if row.default != "required"]
    given = tomllib.loads("\n".join(lines))
    required = {"engine": "nls", "members": 2, "root_seed": 1}
    required = {row.key: required[row.key] for row in rows if row.default == "required"}
    assert settings_from_table(cls, {**given, **required}) == settings_from_table(cls, required)
    assert all(row.meaning for row in rows)
