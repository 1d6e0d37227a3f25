"""Data types: shapes, validity, read-only arrays."""

import dataclasses
import inspect
from math import inf, nan

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecaster import datatypes
from forecaster.datatypes import (
    Domain,
    Envelope,
    QualityReport,
    QualityTest,
    Record,
    Spectrum,
    WaveGroup,
    Waves,
)
from forecaster.errors import InputError

TYPES = [
    item
    for _, item in inspect.getmembers(datatypes, dataclasses.is_dataclass)
    if item.__module__ == datatypes.__name__
]


def record(**changes):
    return Record(**{"elevation": [0.0, 1.0, -1.0], "dt": 0.5, **changes})


@pytest.mark.parametrize("cls", TYPES)
def test_types_are_frozen_slotted_and_say_what_they_are(cls):
    assert cls.__dataclass_params__.frozen
    assert "__slots__" in vars(cls)
    assert cls.__doc__ and not cls.__doc__.startswith(f"{cls.__name__}(")  # not generated


@given(
    n=st.integers(2, 50),
    dt=st.floats(1e-3, 1e3),
    start=st.floats(-1e9, 2e9),
)
def test_record_times(n, dt, start):
    # by hand: n samples span n - 1 steps and represent n steps
    made = record(elevation=np.zeros(n), dt=dt, start=start)
    assert made.n == n
    assert made.times.shape == (n,)
    assert made.times[0] == start
    assert made.times[-1] == pytest.approx(made.end)
    assert made.end == pytest.approx(start + dt * n - dt)
    assert made.duration == pytest.approx(n * dt)


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"elevation": [1.0]}, "at least 2 samples"),
        ({"elevation": [[1.0, 2.0]]}, r"shape \(1, 2\)"),
        ({"elevation": [1.0, inf]}, "use NaN"),
        ({"dt": 0.0}, "dt .*0.0"),
        ({"dt": -1.0}, "dt"),
        ({"dt": nan}, "dt"),
        ({"dt": inf}, "dt"),
        ({"start": nan}, "start"),
        ({"depth": 0.0}, "depth .*0.0"),
        ({"depth": nan}, "depth"),
        ({"sensor": "lidar"}, "fixed, buoy, radar, unknown, got 'lidar'"),
    ],
)
def test_record_that_cannot_be_is_refused(change, message):
    with pytest.raises(InputError, match=message):
        record(**change)


def test_record_keeps_gaps_and_deep_water_and_whole_numbers():
    made = record(elevation=[1, nan, 3])
    assert made.elevation.dtype == float
    assert np.isnan(made.elevation).tolist() == [False, True, False]
    assert made.depth == inf


def test_step_makes_a_new_record_with_one_more_line_of_history():
    first = record(history=("read",))
    second = first.step("mean removed", elevation=first.elevation - 1)
    assert second.history == ("read", "mean removed")
    assert second.elevation.tolist() == [-1, 0, -2]
    assert first.history == ("read",) and first.elevation.tolist() == [0, 1, -1]
    with pytest.raises(InputError, match="dt"):
        first.step("stretched", dt=-1.0)


ROW = [0.0, 1.0]
WITH_ARRAYS = [
    (record(), ("elevation",)),
    (Spectrum(ROW, ROW), ("frequency", "density")),
    (Envelope(ROW, dt=1.0, start=0.0, omega0=1.0, k0=0.1), ("values",)),
    (
        Waves(ROW, ROW, ROW, ROW, ROW, ROW),
        ("start", "end", "crest_time", "height", "crest", "trough"),
    ),
    (WaveGroup(0.0, 1.0, 0.5, 2.0, [1j], 0.9, 0.0, nan, nan, 1.0), ("eigenvalues",)),
]


@pytest.mark.parametrize(("made", "names"), WITH_ARRAYS)
def test_arrays_are_read_only_and_the_giver_keeps_his_own_writable(made, names):
    for name in names:
        with pytest.raises(ValueError, match="read-only"):
            getattr(made, name)[0] = 5
        given_array = np.array(getattr(made, name))
        dataclasses.replace(made, **{name: given_array})
        given_array[0] = 5
    with pytest.raises(dataclasses.FrozenInstanceError):
        setattr(made, names[0], None)


def test_every_type_that_holds_arrays_was_looked_at():
    holding = {cls for cls in TYPES for f in dataclasses.fields(cls) if f.type == "np.ndarray"}
    assert holding == {type(made) for made, _ in WITH_ARRAYS}


def test_envelope_is_complex_and_has_times():
    made = Envelope([1.0, 2.0, 3.0], dt=0.5, start=10.0, omega0=1.0, k0=0.1)
    assert made.values.dtype == complex
    assert made.times.tolist() == [10.0, 10.5, 11.0]
    many = Envelope(np.zeros((4, 3)), dt=0.5, start=10.0, omega0=1.0, k0=0.1)
    assert many.times.shape == (3,)  # the last axis is time


@pytest.mark.parametrize(
    ("frequency", "density"), [([0.1, 0.2], [1.0]), ([[0.1]], [[1.0]]), (0.1, 1.0)]
)
def test_spectrum_of_unequal_rows_is_refused(frequency, density):
    with pytest.raises(InputError, match="one length"):
        Spectrum(frequency, density)


def test_flag_verdict_and_status_outside_the_list_are_refused():
    with pytest.raises(InputError, match="pass, not evaluated, suspect, fail, missing, got 'ok'"):
        QualityTest("spike", "ok", 1, 0, "")
    with pytest.raises(InputError, match="pass, suspect, fail, got 'good'"):
        QualityReport("good", ())
    with pytest.raises(InputError, match="inside, edge, outside, got 'near'"):
        Domain("near")
    for flag in datatypes.FLAGS:
        assert QualityTest("spike", flag, 1, 0, "").flag == flag
    for verdict in datatypes.VERDICTS:
        assert QualityReport(verdict, ()).verdict == verdict
    for status in datatypes.DOMAIN_STATUS:
        assert Domain(status).status == status
