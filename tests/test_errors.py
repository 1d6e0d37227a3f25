"""Exceptions and warnings: what they carry, and that every error has an exit code."""

import inspect

import pytest

from forecaster import errors
from forecaster.errors import (
    ForecasterError,
    ForecasterWarning,
    InputError,
    ModelError,
    NumericsError,
    OutsideDomain,
    QualityError,
    RecordFormatError,
    RecordWarning,
    SettingsError,
)

CLASSES = [
    item
    for _, item in inspect.getmembers(errors, inspect.isclass)
    if item.__module__ == errors.__name__
]
ERRORS = [cls for cls in CLASSES if issubclass(cls, Exception) and not issubclass(cls, Warning)]


def exit_code(cls):
    """The code of the nearest class of the hierarchy that the table knows."""
    from forecaster.cli import EXIT_CODES

    return next(EXIT_CODES[base] for base in cls.__mro__ if base in EXIT_CODES)


def test_every_class_has_the_root_of_its_kind():
    assert len(ERRORS) > 5
    for cls in CLASSES:
        root = ForecasterWarning if issubclass(cls, Warning) else ForecasterError
        assert issubclass(cls, root)


def test_input_errors_are_value_errors_and_warnings_are_user_warnings():
    for cls in (InputError, RecordFormatError, SettingsError):
        assert issubclass(cls, ValueError)
    assert issubclass(RecordWarning, UserWarning)


def test_record_format_error_names_file_and_line():
    error = RecordFormatError("no number in 'abc'", path="buoy.csv", line=7)
    assert str(error) == "buoy.csv, line 7: no number in 'abc'"
    assert (error.path, error.line) == ("buoy.csv", 7)
    assert str(RecordFormatError("is empty", path="-")) == "-: is empty"


def test_settings_error_names_the_key():
    error = SettingsError("must be positive, got -1", key="views.noise")
    assert str(error) == "views.noise: must be positive, got -1"
    assert error.key == "views.noise"


def test_errors_carry_what_was_achieved():
    assert QualityError("spikes", report="the report").report == "the report"
    assert NumericsError("did not settle", achieved=(1, 2)).achieved == (1, 2)
    assert NumericsError("did not settle").achieved is None
    assert OutsideDomain("too steep", reasons=("steepness 0.3",)).reasons == ("steepness 0.3",)
    assert OutsideDomain("too steep").reasons == ()


@pytest.mark.parametrize("cls", ERRORS)
def test_every_error_has_an_exit_code(cls):
    assert exit_code(cls) in (1, 2, 3, 4)


@pytest.mark.parametrize(
    ("cls", "code"),
    [
        # the program's outside contract: 1 run failed, 2 usage, 3 data not usable, 4 model refused
        (ForecasterError, 1),
        (NumericsError, 1),
        (SettingsError, 2),
        (RecordFormatError, 3),
        (QualityError, 3),
        (OutsideDomain, 3),
        (ModelError, 4),
        (errors.ModelNotFoundError, 4),
        (errors.ModelIntegrityError, 4),
        (errors.FeatureMismatchError, 4),
    ],
)
def test_exit_code_of_the_contract(cls, code):
    assert exit_code(cls) == code
