"""Trikymia: calibrated probabilities of extreme wave groups from a record of the sea surface.

The public names, loaded when they are first used:

======================  =========================================================================
`score`                 record (file, ``"-"`` or `Record`) -> `Forecast`: the whole answer
`check`                 record -> quality, sea state and waves only
`along_wave_distance`   range and bearing -> distance along the waves
`read_record`           file -> `Record`
`record_from_arrays`    numbers in memory -> `Record`
`Record`, `Forecast`    what goes in, what comes out
`forecast_text`         `Forecast` -> the answer in words
`forecast_document`     `Forecast` -> the JSON document
`forecast_figure`       `Forecast` -> a matplotlib figure
`installed_models`      the models that can answer
`load_model`            one of them
`ForecasterError`       root of all errors raised on purpose
======================  =========================================================================

The map of the package, lowest room first; a module imports only from rooms above its own line:

- ``errors``, ``datatypes``, ``settings``: exceptions, what flows, frozen settings
- ``serialize``, ``storage``: JSON documents, files that are whole or absent
- ``records``: files -> trustworthy records; ``waves``: the physics
- ``learning``: many seas -> a calibrated probability
- ``forecasting``: the chain from record to forecast
- ``wording``, ``plots``, ``cli``: words, figures, the command ``trikymia``
"""

from __future__ import annotations

_HOMES = {
    "score": "forecasting",
    "check": "forecasting",
    "along_wave_distance": "forecasting",
    "read_record": "records.read",
    "record_from_arrays": "records.read",
    "Record": "datatypes",
    "Forecast": "datatypes",
    "forecast_text": "wording",
    "forecast_document": "serialize",
    "forecast_figure": "plots",
    "installed_models": "learning.registry",
    "load_model": "learning.registry",
    "ForecasterError": "errors",
}

__all__ = ["__version__", *_HOMES]


def __getattr__(name: str):
    from importlib import import_module

    if name == "__version__":
        return import_module("forecaster.serialize").program_version()
    if name not in _HOMES:
        raise AttributeError(f"module {__name__!r} has no attribute {name!r}")
    value = getattr(import_module(f"forecaster.{_HOMES[name]}"), name)
    globals()[name] = value
    return value


def __dir__():
    return sorted([*globals(), *__all__])
