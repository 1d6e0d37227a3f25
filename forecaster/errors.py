"""Every exception and warning class of the package, and nothing else.

A message says what was wrong, gives the value, and says what would be right.

>>> issubclass(RecordFormatError, ValueError)
True
"""

from __future__ import annotations


class ForecasterError(Exception):
    """Root of all errors that the package raises on purpose."""


class InputError(ForecasterError, ValueError):
    """A value given by the caller cannot be used."""


class RecordFormatError(InputError):
    """A file cannot be read as a record.

    Attributes
    ----------
    path : str
        The file, or ``"-"`` for standard input.
    line : int or None
        Line of the file (counted from 1) where reading stopped, when known.
    """

    def __init__(self, message: str, *, path: str, line: int | None = None):
        self.path = path
        self.line = line
        where = path if line is None else f"{path}, line {line}"
        super().__init__(f"{where}: {message}")


class SettingsError(InputError):
    """A settings file or recipe holds a key or value that cannot be used.

    Attributes
    ----------
    key : str
        The dotted key.
    """

    def __init__(self, message: str, *, key: str):
        self.key = key
        super().__init__(f"{key}: {message}")


class QualityError(ForecasterError):
    """A record failed its quality tests and was asked to be used strictly.

    Attributes
    ----------
    report : forecaster.datatypes.QualityReport
        What was examined and what failed.
    """

    def __init__(self, message: str, *, report):
        self.report = report
        super().__init__(message)


class NumericsError(ForecasterError):
    """A computation did not reach what it promises.

    Attributes
    ----------
    achieved : object
        What was reached (for example the eigenvalues found so far).
    """

    def __init__(self, message: str, *, achieved=None):
        self.achieved = achieved
        super().__init__(message)


class ModelError(ForecasterError):
    """A trained model cannot be used."""


class ModelNotFoundError(ModelError):
    """No model of that name and version is installed."""


class ModelIntegrityError(ModelError):
    """A model file is damaged, altered, too large, or not what its card says."""


class FeatureMismatchError(ModelError):
    """A model asks for features that this version of the package does not compute."""


class OutsideDomain(ForecasterError):
    """The sea lies outside what the model was trained and verified on (strict use only).

    Attributes
    ----------
    reasons : tuple of str
        Why.
    """

    def __init__(self, message: str, *, reasons: tuple[str, ...] = ()):
        self.reasons = reasons
        super().__init__(message)


class ForecasterWarning(UserWarning):
    """Root of all warnings of the package."""


class RecordWarning(ForecasterWarning):
    """Something about a record was assumed or repaired, and the user should know."""
