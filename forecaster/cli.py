"""The command ``trikymia``: parse, one public call, print.

Answers go to standard output, everything else to standard error.  Each command imports what it
needs when it runs.

>>> main(["schema", "--help"])  # doctest: +ELLIPSIS
Usage: trikymia schema [OPTIONS] ...
...
0
"""

from __future__ import annotations

import os
import re
import sys
import time
import traceback
import warnings
from contextlib import ExitStack, contextmanager
from dataclasses import replace
from functools import cache
from math import isfinite
from pathlib import Path

import click

from forecaster import errors

# The nearest class of an error's ancestry decides.
EXIT_CODES = {
    errors.ForecasterError: 1,
    errors.InputError: 2,
    errors.RecordFormatError: 3,
    errors.QualityError: 3,
    errors.OutsideDomain: 3,
    errors.ModelError: 4,
}
ANSWERED, FAILED, USAGE, NO_FORECAST, INTERRUPTED = 0, 1, 2, 3, 130
_SHOW_TRACEBACK = "TRIKYMIA_TRACEBACK"
# Names of the library in messages; in a path they are part of a longer word.
_LIBRARY_OPTION = re.compile(
    r"(?<![\w./-])(time_column|elevation_column|sampling_hz|fill_value)(?![\w./-])"
)
_EXTRAS = {"matplotlib": "plot", "sklearn": "train", "joblib": "train", "threadpoolctl": "train"}


def main(argv: list[str] | None = None) -> int:
    """Run the command and give its exit code; never raises.

    Parameters
    ----------
    argv : list of str, optional
        The arguments after the command's name; those of the process by default.
    """
    with warnings.catch_warnings():
        warnings.showwarning = lambda message, *_, **__: _say(f"warning: {message}")
        try:
            return trikymia.main(argv, prog_name="trikymia", standalone_mode=False) or ANSWERED
        except click.exceptions.NoArgsIsHelpError as error:
            click.echo(error.format_message(), err=True)
            return USAGE
        except click.ClickException as error:
            context = getattr(error, "ctx", None)
            path = context.command_path if context else "trikymia"
            _say(f"{error.format_message()} ({path} --help tells more)")
            return USAGE
        except (click.Abort, KeyboardInterrupt):
            _say("interrupted")
            return INTERRUPTED
        except BrokenPipeError:
            # the reader of our output is gone; keep Python from complaining about it at exit
            os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
            return FAILED
        except Exception as error:  # the outermost boundary: a message, not a traceback
            if os.environ.get(_SHOW_TRACEBACK):
                traceback.print_exc()
            _say(_explained(error))
            return _exit_code(error)


def _exit_code(error: Exception) -> int:
    return next((EXIT_CODES[cls] for cls in type(error).__mro__ if cls in EXIT_CODES), FAILED)


def _explained(error: Exception) -> str:
    """What to tell about an error of any kind."""
    if isinstance(error, errors.ForecasterError):
        return _LIBRARY_OPTION.sub(lambda found: f"--{found[0].replace('_', '-')}", str(error))
    if isinstance(error, ModuleNotFoundError) and error.name in _EXTRAS:
        extra = _EXTRAS[error.name]
        return f"this needs {error.name}: install it with  pip install 'trikymia[{extra}]'"
    if isinstance(error, OSError):
        return f"{error.filename or 'input or output'}: {error.strerror or error}"
    return (
        f"an error in the program itself, please report it: {type(error).__name__}: {error} "
        f"({_SHOW_TRACEBACK}=1 in the environment shows where)"
    )


def _say(message) -> None:
    """One line on standard error."""
    click.echo(f"trikymia: {' '.join(str(message).split())}", err=True)


def _print_version(context, _, asked) -> None:
    if asked and not context.resilient_parsing:
        from forecaster.serialize import program_version

        click.echo(f"trikymia {program_version()}")
        context.exit()


@click.group(context_settings={"help_option_names": ["-h", "--help"], "max_content_width": 100})
@click.option(
    "--version", is_flag=True, is_eager=True, expose_value=False, callback=_print_version,
    help="Print the version and stop.",
)  # fmt: skip
def trikymia() -> None:
    """Probability that an extreme wave group arrives in the coming minutes.

    From a measured record of the sea surface, at the sensor or some distance downwave of it. It
    supports and does not replace marine-operations guidance and the judgement of the responsible
    person.

    Exit codes: 0 answered, 1 the run failed, 2 wrong usage, 3 no forecast (the record cannot be
    read, failed its quality tests, or lies outside the model), 4 the model was refused, 130
    interrupted.
    """


def _options(*options):
    """A decorator that adds several options, shown in the order given."""

    def add(function):
        for option in reversed(options):
            function = option(function)
        return function

    return add


class _Finite:
    """Refuses what is no finite number."""

    def convert(self, value, param, ctx):
        number = super().convert(value, param, ctx)
        if not isfinite(number):
            self.fail(f"{value} is not a finite number.", param, ctx)
        return number


class _AnyNumber(_Finite, click.types.FloatParamType):
    """A finite number."""


class _Number(_Finite, click.FloatRange):
    """A finite number within limits."""


_any = _AnyNumber()
_not_negative = _Number(min=0)
_above_zero = _Number(min=0, min_open=True)
_compass = _Number(min=0, max=360)
_METRES, _DEGREES, _SECONDS = ({"metavar": unit} for unit in ("METRES", "DEGREES", "SECONDS"))

_reading = _options(
    click.option(
        "--at", metavar="TIME",
        help="Issue time: nothing later is used. ISO 8601, or seconds on the record's own clock. "
        "Default: the last row.",
    ),
    click.option(
        "--window", type=_above_zero, **_SECONDS, default=1800.0, show_default=True,
        help="Length of record used, up to the issue time.",
    ),
    click.option("--depth", type=_above_zero, **_METRES, help="Water depth. Default: deep water."),
    click.option(
        "--spread", type=_Number(min=0, max=90), **_DEGREES,
        help="Directional spread (circular standard deviation). Default: unknown.",
    ),
    click.option(
        "--sensor", type=click.Choice(("fixed", "buoy", "radar", "unknown")),
        help="Kind of sensor. Default: unknown.",
    ),
    click.option("--unit", help="Unit of the elevation, if the header has none: m, cm, mm, ft ..."),
    click.option("--time-column", metavar="NAME", help="Heading or number of the time column."),
    click.option("--elevation-column", metavar="NAME", help="The same for the elevation."),
    click.option(
        "--sampling-hz", type=_above_zero, metavar="HZ",
        help="Samples per second, if there is no time column.",
    ),
    click.option(
        "--fill-value", type=_any, metavar="NUMBER", help="Value that stands for a missing sample."
    ),
)  # fmt: skip


_question = _options(
    click.option(
        "--distance", type=_not_negative, **_METRES,
        help="From the sensor to the target along the waves. Default: 0, at the sensor.",
    ),
    click.option(
        "--bearing", type=_compass, **_DEGREES, help="True direction from the sensor to the target."
    ),
    click.option(
        "--waves-from", type=_compass, **_DEGREES, help="True direction that the waves come from."
    ),
    click.option(
        "--range", "reach", type=_above_zero, **_METRES,
        help="From the sensor to the target, with --bearing and --waves-from in place of "
        "--distance.",
    ),
    click.option(
        "--horizon", type=_above_zero, **_SECONDS,
        help="How far to look ahead. Default: as far as the record tells, at the sensor 30 min.",
    ),
    click.option(
        "--ratio", type=_above_zero, metavar="RATIO",
        help="Wave height asked for, over Hs. Default: 2.0, extreme.",
    ),
    click.option("--height", type=_above_zero, **_METRES, help="Wave height asked for."),
    click.option(
        "--crest-ratio", type=_above_zero, metavar="RATIO",
        help="Crest height asked for, over Hs (1.25 is extreme).",
    ),
    click.option(
        "--current", type=_any, metavar="M_PER_S",
        help="Current along the waves, negative against them. Default: unknown.",
    ),
    click.option("--model", metavar="NAME", help="Model that answers; see `trikymia models`."),
)  # fmt: skip


@trikymia.command()
@click.argument("records", nargs=-1, required=True, metavar="RECORD...")
@_question
@_reading
@click.option("--json", "as_json", is_flag=True, help="Print the answer as a JSON document.")
@click.option("--figure", type=Path, metavar="FILE", help="Draw it: .png, .svg or .pdf.")
@click.option("--report", type=Path, metavar="FILE", help="Write one self-contained HTML page.")
def score(records, distance, bearing, waves_from, reach, as_json, figure, report, **options):
    """Probability of an extreme wave group at the target.

    RECORD is a file or - for standard input. With several records, one JSON document is printed
    a line.
    """
    _check_question(options)
    _check_files(records, figure, report)
    options["distance"], notes = _along_waves(distance, bearing, waves_from, reach)
    lines = as_json or len(records) > 1
    codes = []
    for source in records:
        try:
            forecast = _forecast(source, notes, options)
        except (errors.ModelError, ModuleNotFoundError):
            raise  # the same for every record
        except Exception as error:
            if not lines:
                raise
            _print_error_document(source, error)
            codes.append(_exit_code(error))
            continue
        _print_forecast(forecast, as_document=lines)
        _write_files(forecast, figure, report)
        codes.append(ANSWERED if forecast.answered else NO_FORECAST)
    return _overall(codes)


def _check_question(options) -> None:
    """At most one criterion is asked for."""
    asked = ("ratio", "height", "crest_ratio")
    given = [f"--{name.replace('_', '-')}" for name in asked if options[name] is not None]
    if len(given) > 1:
        raise click.UsageError(f"{' and '.join(given)} exclude each other: give one of them")


def _check_files(records, figure, report) -> None:
    """Refuse what could not be written before the work is done."""
    if figure is None and report is None:
        return
    if len(records) > 1:
        raise click.UsageError(f"--figure and --report take one record, got {len(records)}")
    from forecaster.plots import FORMATS

    if figure is not None and _format_of(figure) not in FORMATS:
        raise click.UsageError(
            f"--figure must end in {', '.join('.' + name for name in FORMATS)}; got {figure}"
        )
    for path in filter(None, (figure, report)):
        if path.is_dir():
            raise click.UsageError(f"cannot write {path}: it is a folder, name a file in it")
        if not path.absolute().parent.is_dir():
            raise click.UsageError(f"cannot write {path}: there is no folder {path.parent}")


def _format_of(figure: Path) -> str:
    return figure.suffix.lower().removeprefix(".")


def _along_waves(distance, bearing, waves_from, reach) -> tuple[float, tuple[str, ...]]:
    """Distance along the waves [m] and what is to be said about it."""
    by_bearing = (bearing, waves_from, reach)
    if all(value is None for value in by_bearing):
        return distance or 0.0, ()
    if distance is not None:
        raise click.UsageError("give either --distance, or --bearing, --waves-from and --range")
    if any(value is None for value in by_bearing):
        raise click.UsageError("--bearing, --waves-from and --range are needed together")
    from forecaster.forecasting import along_wave_distance
    from forecaster.wording import off_axis_caveat

    distance, off_axis = along_wave_distance(reach, bearing, waves_from)
    return distance, (off_axis_caveat(off_axis, distance),) if off_axis >= 0.5 else ()


def _forecast(source, notes, options):
    from forecaster import forecasting

    forecast = forecasting.score(source, **options)
    return replace(forecast, caveats=(*notes, *forecast.caveats))


def _print_forecast(forecast, *, as_document: bool) -> None:
    if as_document:
        from forecaster.serialize import dumps, forecast_document

        click.echo(dumps(forecast_document(forecast)))
    else:
        from forecaster.wording import forecast_text

        click.echo(forecast_text(forecast), nl=False)


def _print_error_document(source: str, error: Exception) -> None:
    from forecaster.serialize import dumps, error_document, program_version

    explained = _explained(error)
    document = error_document(
        source, type(error).__name__, explained, issued_at=time.time(),
        program_version=program_version(),
    )  # fmt: skip
    click.echo(dumps(document))
    _say(explained)


def _write_files(forecast, figure: Path | None, report: Path | None) -> None:
    if figure is None and report is None:
        return
    from forecaster import plots, wording
    from forecaster.storage import write_atomically

    drawn = plots.forecast_figure(forecast)
    if figure is not None:
        write_atomically(figure, plots.image_bytes(drawn, _format_of(figure)))
    if report is not None:
        page = wording.report_page(forecast, plots.inline_svg(drawn))
        write_atomically(report, page.encode("utf-8"))


def _overall(codes: list[int]) -> int:
    """Of one record its own code; of several 3 if any could not be used, else the worst."""
    if len(codes) > 1 and {USAGE, NO_FORECAST} & set(codes):
        return NO_FORECAST
    return max(codes)


@trikymia.command()
@click.argument("record", metavar="RECORD")
@_reading
@click.option("--json", "as_json", is_flag=True, help="Print a JSON document.")
@click.option(
    "--scattering",
    is_flag=True,
    help="Also the scattering spectrum: which wave groups would keep together, and where they are.",
)
@click.option(
    "--figure", type=Path, metavar="FILE",
    help="Draw the scattering spectrum: .png, .svg or .pdf (with --scattering).",
)  # fmt: skip
def check(record, as_json, scattering, figure, **options):
    """Quality, sea state and waves of a record, no forecast.

    RECORD is a file or - for standard input.
    """
    from forecaster import forecasting
    from forecaster.serialize import check_document, dumps, program_version
    from forecaster.wording import check_text

    if figure is not None and not scattering:
        raise click.UsageError("--figure draws what --scattering finds: give both")
    _check_files((record,), figure, None)
    done = forecasting.check(record, **options)
    failed = done.quality.verdict == "fail"
    spectrum = forecasting.scattering(done) if scattering and not failed else None
    found = done.record, done.quality, done.sea_state, done.waves, spectrum
    if as_json:
        click.echo(dumps(check_document(*found, program_version=program_version())))
    else:
        click.echo(check_text(*found), nl=False)
    if figure is not None and spectrum is not None:
        from forecaster import plots
        from forecaster.storage import write_atomically

        drawn = plots.scattering_figure(done.record, done.sea_state, spectrum)
        write_atomically(figure, plots.image_bytes(drawn, _format_of(figure)))
    return NO_FORECAST if failed else ANSWERED


def _part(context, parameter, value: str) -> tuple[int, int]:
    """``"2/4"`` as (1, 4)."""
    try:
        index, parts = (int(number) for number in value.split("/"))
    except ValueError:
        index = parts = 0
    if not 1 <= index <= parts:
        raise click.BadParameter(f"write it as 1/4 for the first of four parts, got {value!r}")
    return index - 1, parts


_workers = click.option(
    "--workers", type=click.IntRange(min=1), default=1, show_default=True,
    help="Processes on this machine.",
)  # fmt: skip


@trikymia.command()
@click.argument("recipe")
@click.argument("folder", type=Path)
@_workers
@click.option(
    "--shard", "part", default="1/1", callback=_part, metavar="I/N", show_default=True,
    help="Make the I-th of N parts: several machines share a recipe.",
)  # fmt: skip
def synth(recipe, folder, workers, part):
    """Make the synthetic seas of a RECIPE (TOML) in a FOLDER.

    A stopped run goes on where it was. The same seas come out whatever the number of workers.
    """
    from forecaster.learning.ensemble import generate
    from forecaster.settings import SeaRecipe, load_settings

    plan = load_settings(recipe, SeaRecipe)
    with _progress_bars() as progress:
        generate(plan, folder / "seas", workers=workers, part=part, progress=progress("seas"))


@contextmanager
def _progress_bars():
    """Makes, for each label, a function of (done, total) that shows a bar on standard error."""
    with ExitStack() as stack:

        def start(label: str):
            bar = stack.enter_context(
                click.progressbar(length=1, label=label, file=sys.stderr, show_pos=True)
            )

            def show(done: int, total: int) -> None:
                bar.length = max(total, 1)
                bar.update(done - bar.pos)

            return show

        yield start


def _seas(name: str, *, required: bool, text: str):
    return click.option(
        name, nargs=2, multiple=True, required=required, metavar="RECIPE FOLDER",
        help=f"{text} As made by `trikymia synth RECIPE FOLDER`; may be given several times.",
    )  # fmt: skip


def _dataset(seas, workers: int, **options):
    """Rows of features and outcomes of all recipes, or None if there are none."""
    from forecaster.learning.dataset import build, joined
    from forecaster.settings import SeaRecipe, load_settings

    parts = []
    for recipe, folder in seas:
        plan = load_settings(recipe, SeaRecipe)
        with _progress_bars() as start:
            show = cache(start)
            parts.append(
                build(
                    plan, folder, workers=workers, **options,
                    progress=lambda label, done, total: show(label)(done, total),  # noqa: B023
                )
            )  # fmt: skip
    return joined(parts) if parts else None


@trikymia.command()
@click.argument("settings")
@_seas("--seas", required=True, text="Seas to train on.")
@click.option("--name", required=True, help="Name of the model, such as north-basin.")
@click.option("--release", required=True, metavar="VERSION", help="Its version, such as 1.2.")
@click.option("--summary", required=True, metavar="TEXT", help="What it is for, in one line.")
@click.option(
    "--models", "folder", default="models", show_default=True, metavar="FOLDER",
    help="Folder that the model is written below.",
)  # fmt: skip
@_workers
def train(settings, seas, name, release, summary, folder, workers):
    """Fit and calibrate a model by SETTINGS (TOML) on synthetic seas."""
    from forecaster.learning.registry import save_model
    from forecaster.learning.train import fit, taught_on
    from forecaster.settings import TrainSettings, load_settings, settings_to_toml

    plan = load_settings(settings, TrainSettings)
    taught = _dataset(seas, workers)
    model = fit(taught, plan, name=name, version=release, workers=workers, progress=_say)
    card = save_model(
        model, folder, probe=taught.features, names=taught.names, summary=summary,
        card={"taught_on": taught_on([Path(recipe).name for recipe, _ in seas], taught, plan)},
        settings_toml=settings_to_toml(plan),
    )  # fmt: skip
    click.echo(card.folder)


@trikymia.command()
@_seas("--seas", required=True, text="Seas to verify on, never trained on.")
@_seas("--elsewhere", required=False, text="More seas, each scored in a table of its own.")
@_seas("--taught", required=False, text="The seas it was trained on, to set simpler forecasts up.")
@click.option("--model", "name", metavar="NAME", help="Model to verify. Default: the shipped one.")
@click.option(
    "--ablation", is_flag=True,
    help="Also train models on fewer features, to tell what each kind adds (needs --taught).",
)  # fmt: skip
@click.option("--record", is_flag=True, help="Also write the figures beside the model.")
@_workers
@click.option("--json", "as_json", is_flag=True, help="Print all figures as a JSON document.")
def verify(seas, elsewhere, taught, name, ablation, record, workers, as_json):
    """Measure how good a model is on seas that it was not trained on."""
    from forecaster.learning.registry import find_model, load_model, record_verification
    from forecaster.learning.verify import verify
    from forecaster.serialize import dumps
    from forecaster.settings import TrainSettings, load_settings
    from forecaster.wording import verification_text

    folder = find_model(name).folder
    measured = verify(
        load_model(name),
        _dataset(seas, workers, plain_records=None),
        elsewhere={
            Path(more[0]).stem: _dataset([more], workers, plain_records=None) for more in elsewhere
        },
        taught=_dataset(taught, workers),
        settings=load_settings(folder / "settings.toml", TrainSettings) if ablation else None,
        workers=workers,
        progress=_say,
    )
    if record:
        record_verification(folder, measured)
    click.echo(dumps(measured) if as_json else verification_text(measured), nl=as_json)


@trikymia.command()
@click.argument("name", required=False, metavar="[NAME]")
def models(name):
    """List the installed models, or print the card of one.

    The card says what the model is for, what it was taught on and what was measured of it.
    """
    from forecaster.learning.registry import find_model, installed_models, read_verification
    from forecaster.wording import card_text

    if name is not None:
        card = find_model(name)
        click.echo(card_text(card.card, read_verification(card)), nl=False)
        return None
    cards = installed_models()
    for card in cards:
        identity = card.identity
        click.echo(f"{identity.name}/{identity.version}  {identity.sha256[:12]}  {card.summary}")
    if not cards:
        _say("no model is installed")
        return EXIT_CODES[errors.ModelError]
    return None


@trikymia.command()
@click.argument("kind", type=click.Choice(("forecast", "check")), default="forecast")
def schema(kind):
    """Print the JSON Schema of the documents of `trikymia score`, or of `trikymia check`."""
    from forecaster.serialize import check_schema, dumps, forecast_schema

    click.echo(dumps({"forecast": forecast_schema, "check": check_schema}[kind](), indent=2))


@trikymia.command()
@click.argument("kind", type=click.Choice(("recipe", "train")))
def settings(kind):
    """Print every setting of a recipe of seas, or of training."""
    from forecaster.settings import SeaRecipe, TrainSettings, describe_settings

    for row in describe_settings({"recipe": SeaRecipe, "train": TrainSettings}[kind]):
        unit = f" [{row.unit}]" if row.unit else ""
        click.echo(f"{row.key} = {row.default}{unit}\n    {row.meaning}; {row.valid}")
