"""The command: exit codes, what goes to which stream, and that one bad record stops no other."""

import json
import re
import resource
import subprocess
import sys
from dataclasses import replace
from pathlib import Path
from types import SimpleNamespace

import click
import numpy as np
import pytest

from forecaster import cli, datatypes, errors, forecasting
from forecaster.learning import ensemble, registry
from forecaster.serialize import check_schema, forecast_schema
from tests import tiny_model
from tests.hand_built import BAD, forecast, unanswered
from tests.json_schema import problems

OUTCOMES = {
    "good.csv": forecast(),
    "outside.csv": unanswered(),
    "failed.csv": unanswered(quality=BAD),
    "empty.csv": errors.RecordFormatError("is empty", path="empty.csv"),
    "early.csv": errors.InputError("fewer than 2 samples up to the issue time"),
    "wild.csv": errors.NumericsError("did not settle"),
    "bug.csv": IndexError("index 3 is out of bounds"),
    "altered.csv": errors.ModelIntegrityError("model.npz was altered"),
    "slow.csv": KeyboardInterrupt(),
}


@pytest.fixture
def asked(monkeypatch):
    """`forecasting.score` gives the outcomes above; the list holds what it was asked."""
    calls = []

    def score(record, **options):
        calls.append((record, options))
        outcome = OUTCOMES[record]
        if isinstance(outcome, BaseException):
            raise outcome
        return replace(outcome, record=replace(outcome.record, source=record))

    monkeypatch.setattr(forecasting, "score", score)
    return calls


@pytest.fixture
def sea_file(tmp_path):
    """A quarter of an hour of waves as a table."""
    generator = np.random.default_rng(3)
    t = np.arange(0, 900, 0.5)
    f = np.linspace(0.07, 0.2, 100)
    eta = np.cos(2 * np.pi * np.outer(t, f) + generator.uniform(0, 2 * np.pi, f.size)) @ (
        (f / 0.1) ** -2.5 * np.exp(-0.6 * (f / 0.1) ** -4)
    )
    path = tmp_path / "sea.csv"
    rows = "\n".join(f"{a:.1f},{b:.4f}" for a, b in zip(t, 1.0 * eta / eta.std(), strict=True))
    path.write_text(f"time_s,eta_m\n{rows}\n", encoding="utf-8")
    return path


# by hand: the outside contract of the program
@pytest.mark.parametrize(
    ("record", "code"),
    [
        ("good.csv", 0),
        ("outside.csv", 3),
        ("failed.csv", 3),
        ("empty.csv", 3),
        ("early.csv", 2),
        ("wild.csv", 1),
        ("bug.csv", 1),
        ("altered.csv", 4),
        ("slow.csv", 130),
    ],
)
@pytest.mark.parametrize("form", [[], ["--json"]])
def test_exit_code_of_one_record(asked, capsys, record, code, form):
    assert cli.main(["score", record, *form]) == code
    out, err = capsys.readouterr()
    assert "Traceback" not in err
    failed = isinstance(OUTCOMES[record], BaseException)
    assert bool(err) == failed
    if failed and code != 130:
        assert len(err.splitlines()) == 1 and err.startswith("trikymia: ")
    if form and code not in (4, 130):
        assert problems(json.loads(out), forecast_schema()) == []


@pytest.mark.parametrize(
    "arguments",
    [
        ["nonsense"],
        ["score"],
        ["score", "--nonsense", "good.csv"],
        ["score", "--depth", "-3", "good.csv"],
        ["score", "--depth", "nan", "good.csv"],
        ["score", "--height", "inf", "good.csv"],
        ["score", "--sensor", "satellite", "good.csv"],
        ["score", "--ratio", "2", "--height", "3", "good.csv"],
        ["score", "--bearing", "90", "good.csv"],
        ["score", "--distance", "9", "--range", "9", "good.csv"],
        ["score", "--range", "9", "--bearing", "0", "--waves-from", "0", "good.csv"],
        ["score", "--figure", "a.bmp", "good.csv"],
        ["score", "--figure", "no/such/folder/a.png", "good.csv"],
        ["score", "--report", "a.html", "good.csv", "outside.csv"],
        ["score", "--report", ".", "good.csv"],
        ["synth", "--shard", "3/2", "a.toml", "b"],
        ["synth", "no-such-recipe.toml", "b"],
    ],
)
def test_wrong_usage_is_said_in_one_line_before_any_work(asked, capsys, arguments):
    assert cli.main(arguments) == 2
    out, err = capsys.readouterr()
    assert out == "" and asked == []
    assert len(err.splitlines()) == 1 and err.startswith("trikymia: ")


def test_no_command_shows_the_help_as_wrong_usage(capsys):
    assert cli.main([]) == 2
    out, err = capsys.readouterr()
    assert out == "" and "Usage: trikymia" in err


def test_batch_is_one_document_a_line_and_goes_on_after_a_bad_record(asked, capsys):
    records = ["empty.csv", "good.csv", "bug.csv", "wild.csv", "failed.csv", "good.csv"]
    assert cli.main(["score", *records]) == 3
    out, err = capsys.readouterr()
    documents = [json.loads(line) for line in out.splitlines()]
    assert [document["record"]["source"] for document in documents] == records
    assert [d["probability"] for d in documents] == [None, 0.042, None, None, None, 0.042]
    assert [d["error"] and d["error"]["class"] for d in documents] == [
        "RecordFormatError", None, "IndexError", "NumericsError", None, None,
    ]  # fmt: skip
    assert all(problems(document, forecast_schema()) == [] for document in documents)
    assert len(err.splitlines()) == 3


@pytest.mark.parametrize(
    ("records", "code"),
    [
        ("good.csv good.csv", 0),
        ("good.csv wild.csv", 1),
        ("good.csv early.csv wild.csv", 3),
        ("outside.csv good.csv", 3),
        ("good.csv altered.csv good.csv", 4),
        ("good.csv slow.csv good.csv", 130),
    ],
)
def test_exit_code_of_a_batch(asked, capsys, records, code):
    assert cli.main(["score", *records.split()]) == code


def test_text_answer_goes_to_standard_output(asked, capsys):
    assert cli.main(["score", "good.csv"]) == 0
    out, err = capsys.readouterr()
    assert out.startswith("PROBABILITY") and err == ""


def test_options_reach_the_library_under_its_names(asked):
    text = (
        "score good.csv --distance 1500 --horizon 600 --at 2031-05-01T00:00Z --window 900 "
        "--height 9 --spread 12 --depth 40 --current -0.5 --sensor buoy --model north/2 --unit ft "
        "--time-column t --elevation-column 3 --sampling-hz 4 --fill-value -99"
    )
    assert cli.main(text.split()) == 0
    assert asked == [
        (
            "good.csv",
            {
                "distance": 1500.0, "horizon": 600.0, "at": "2031-05-01T00:00Z", "window": 900.0,
                "ratio": None, "height": 9.0, "crest_ratio": None, "spread": 12.0, "depth": 40.0,
                "current": -0.5, "sensor": "buoy", "model": "north/2", "unit": "ft",
                "time_column": "t", "elevation_column": "3", "sampling_hz": 4.0,
                "fill_value": -99.0,
            },
        )
    ]  # fmt: skip


def test_bearing_gives_the_distance_along_the_waves_and_says_the_angle(asked, capsys):
    text = "score good.csv --range 1000 --bearing 100 --waves-from 260 --json"
    assert cli.main(text.split()) == 0
    # by hand: the waves run to 80 deg, the target lies 20 deg off: 1000 cos 20 = 939.7 m
    assert asked[0][1]["distance"] == pytest.approx(939.69, abs=0.01)
    document = json.loads(capsys.readouterr().out)
    assert "20 deg off" in document["caveats"][0] and "940 m" in document["caveats"][0]
    assert len(document["caveats"]) > len(forecast().caveats)


def test_figure_and_report_are_written_and_the_answer_still_printed(asked, capsys, tmp_path):
    figure, report = tmp_path / "a.PNG", tmp_path / "a.html"
    assert cli.main(["score", "good.csv", "--figure", str(figure), "--report", str(report)]) == 0
    assert figure.read_bytes().startswith(b"\x89PNG")
    page = report.read_text(encoding="utf-8")
    assert page.count("<svg") == 1 and "responsible person" in page
    links = set(re.findall(r"https?://[^\"\s<]+", page))
    assert links <= {"http://www.w3.org/2000/svg", "http://www.w3.org/1999/xlink"}
    assert capsys.readouterr().out.startswith("PROBABILITY")
    assert {path.name for path in tmp_path.iterdir()} == {"a.PNG", "a.html"}


def test_check_reads_a_file_and_answers_in_words_and_as_a_document(sea_file, capsys):
    assert cli.main(["check", str(sea_file)]) == 0
    out = capsys.readouterr().out
    # by hand: the elevation has unit standard deviation, so Hs = 4 m
    assert out.startswith("QUALITY: ") and re.search(r"Hs (3\.9|4\.[01]) m", out)
    assert re.search(r"^Waves +\d+, the highest \d\.\d m at ", out, re.M)
    assert cli.main(["check", str(sea_file), "--json", "--depth", "40"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["record"]["depth_m"] == 40.0
    assert document["sea_state"]["hs_m"] == pytest.approx(4.0, rel=0.03)
    waves = document["waves"]
    assert waves["highest_m"] == pytest.approx(waves["highest_over_hs"] * 4.0, rel=0.03)


def test_check_tells_and_draws_the_scattering_spectrum_when_asked(sea_file, capsys, tmp_path):
    figure = tmp_path / "groups.png"
    asked = ["check", str(sea_file), "--scattering"]
    assert cli.main([*asked, "--figure", str(figure)]) == 0
    out = capsys.readouterr().out
    assert out.startswith("QUALITY: ") and "SCATTERING SPECTRUM: " in out
    assert figure.read_bytes().startswith(b"\x89PNG")
    assert cli.main([*asked, "--json"]) == 0
    document = json.loads(capsys.readouterr().out)
    assert document["scattering"]["eigenvalues"][0]["height_m"] > 1
    assert cli.main(["check", str(sea_file), "--json"]) == 0
    assert json.loads(capsys.readouterr().out)["scattering"] is None


def test_a_figure_of_a_check_needs_something_to_draw(sea_file, capsys, tmp_path):
    assert cli.main(["check", str(sea_file), "--figure", str(tmp_path / "a.png")]) == 2
    assert "--scattering" in capsys.readouterr().err


def test_a_failed_record_has_no_scattering_spectrum(tmp_path, capsys):
    path = tmp_path / "flat.csv"
    path.write_text("time_s,eta_m\n" + "".join(f"{i},0.5\n" for i in range(900)))
    figure = tmp_path / "a.png"
    asked = ["check", str(path), "--scattering", "--json", "--figure", str(figure)]
    assert cli.main(asked) == 3
    assert json.loads(capsys.readouterr().out)["scattering"] is None
    assert not figure.exists()


def test_check_of_a_dead_sensor_fails(tmp_path, capsys):
    path = tmp_path / "flat.csv"
    path.write_text("time_s,eta_m\n" + "".join(f"{i},0.5\n" for i in range(900)))
    assert cli.main(["check", str(path)]) == 3
    assert capsys.readouterr().out.startswith("QUALITY: FAIL")


def test_an_unreadable_file_is_named_with_line_and_remedy(tmp_path, capsys):
    assert cli.main(["check", str(tmp_path / "missing.csv")]) == 3
    assert "missing.csv: no such file" in capsys.readouterr().err


def test_a_message_names_the_option_of_the_command(tmp_path, capsys):
    path = tmp_path / "fill_value.csv"
    path.write_text("1.0\n2.0\n3.0\n")
    assert cli.main(["check", str(path)]) == 3
    told = capsys.readouterr().err
    assert "give the sampling rate (--sampling-hz)" in told
    assert "fill_value.csv" in told  # a path stays what it is


def test_sensors_offered_are_those_of_the_record():
    (option,) = [item for item in cli.score.params if item.name == "sensor"]
    assert tuple(option.type.choices) == datatypes.SENSORS


@pytest.mark.parametrize("name", cli.trikymia.commands)
def test_every_command_explains_itself_and_every_option(name, capsys):
    assert cli.main([name, "--help"]) == 0
    out = capsys.readouterr().out
    assert f"Usage: trikymia {name}" in out and "None" not in out
    command = cli.trikymia.commands[name]
    options = [item for item in command.params if isinstance(item, click.Option)]
    assert [item.name for item in options if not item.help] == []


def test_schema_is_printed_whole(capsys):
    assert cli.main(["schema"]) == 0
    assert json.loads(capsys.readouterr().out) == forecast_schema()
    assert cli.main(["schema", "check"]) == 0
    assert json.loads(capsys.readouterr().out) == check_schema()


def test_version(capsys):
    assert cli.main(["--version"]) == 0
    assert re.fullmatch(r"trikymia \d+\.\d+\.\d+\n", capsys.readouterr().out)


def test_settings_are_listed(capsys):
    assert cli.main(["settings", "recipe"]) == 0
    assert "engine = required" in capsys.readouterr().out


def test_models_are_listed_and_none_is_refused(monkeypatch, capsys):
    card = registry.ModelCard(
        datatypes.ModelIdentity("north", "1.2", "ab" * 32), None, "a summary", {}
    )
    monkeypatch.setattr(registry, "installed_models", lambda: (card,))
    assert cli.main(["models"]) == 0
    assert capsys.readouterr().out == "north/1.2  abababababab  a summary\n"
    monkeypatch.setattr(registry, "installed_models", lambda: ())
    assert cli.main(["models"]) == 4


def test_the_card_of_a_model_is_printed(tmp_path, capsys):
    folder = tiny_model.saved(tmp_path).folder
    assert cli.main(["models", str(folder)]) == 0
    assert "tiny 1: for tests" in capsys.readouterr().out
    assert cli.main(["models", str(tmp_path / "absent")]) == 4


def test_synth_hands_on_the_recipe_and_keeps_progress_off_the_output(monkeypatch, capsys, tmp_path):
    recipe = tmp_path / "seas.toml"
    recipe.write_text('engine = "linear"\nmembers = 4\nroot_seed = 1\n')
    calls = []

    def generate(plan, folder, *, workers, part, progress):
        calls.append((plan.members, folder, workers, part))
        progress(0, 2)
        progress(2, 2)
        return SimpleNamespace()

    monkeypatch.setattr(ensemble, "generate", generate)
    arguments = ["synth", str(recipe), "out", "--workers", "2", "--shard", "2/2"]
    assert cli.main(arguments) == 0
    assert calls == [(4, Path("out/seas"), 2, (1, 2))]
    assert capsys.readouterr().out == ""


def test_a_missing_extra_is_named(monkeypatch, capsys, asked):
    monkeypatch.setitem(sys.modules, "forecaster.plots", None)
    monkeypatch.setitem(cli._EXTRAS, "forecaster.plots", "plot")
    assert cli.main(["score", "good.csv", "--figure", "a.png"]) == 1
    assert "pip install 'trikymia[plot]'" in capsys.readouterr().err
    assert asked == []


def test_a_fault_of_the_program_shows_its_place_only_when_asked(asked, monkeypatch, capsys):
    monkeypatch.setenv("TRIKYMIA_TRACEBACK", "1")
    assert cli.main(["score", "bug.csv"]) == 1
    assert "Traceback" in capsys.readouterr().err


def run(*arguments, program=None):
    """The command as a process of its own."""
    start = ["-m", "forecaster"] if program is None else ["-c", program]
    return subprocess.run([sys.executable, *start, *arguments], capture_output=True, text=True)


def test_help_starts_fast():
    before = resource.getrusage(resource.RUSAGE_CHILDREN)
    assert run("--help").returncode == 0
    after = resource.getrusage(resource.RUSAGE_CHILDREN)
    used = after.ru_utime + after.ru_stime - before.ru_utime - before.ru_stime
    assert used < 0.3  # s of processor time; the project's own promise


def test_check_does_without_the_packages_of_training_and_plotting(sea_file):
    program = (
        "import sys; from forecaster.cli import main; "
        "code = main(['check', sys.argv[1], '--scattering']); "
        "print(code, {'sklearn', 'matplotlib', 'joblib'} & set(sys.modules))"
    )
    assert run(str(sea_file), program=program).stdout.splitlines()[-1] == "0 set()"


def test_a_reader_that_leaves_early_gets_no_complaint():
    command = f"{sys.executable} -m forecaster schema | head -n 1"
    done = subprocess.run(["sh", "-c", command], capture_output=True, text=True)
    assert done.stdout == "{\n" and done.stderr == ""


def test_records_come_from_standard_input(sea_file):
    done = subprocess.run(
        [sys.executable, "-m", "forecaster", "check", "-"],
        input=sea_file.read_bytes(), capture_output=True,
    )  # fmt: skip
    assert done.returncode == 0 and b"Hs 4" in done.stdout


@pytest.mark.slow
def test_seas_are_made_a_model_is_trained_verified_and_answers(tmp_path, monkeypatch, sea_file):
    monkeypatch.chdir(tmp_path)
    recipe = """
        engine = "linear"
        members = 32
        root_seed = {seed}
        steepness = [0.05, 0.12]
        duration_periods = 120.0
        after_periods = 40.0
        gauges = 8
        sensors = 6
        distances_wavelengths = [0.0, 2.5, 5.0]
        [views]
        record_periods = [40.0, 60.0]
    """
    Path("taught.toml").write_text(recipe.format(seed=1))
    Path("fresh.toml").write_text(recipe.format(seed=2))
    Path("train.toml").write_text(
        "root_seed = 1\nboosting_rounds = 10\nsamples_per_leaf = 20\nbags = 2\n"
    )
    assert run("synth", "taught.toml", "taught", "--shard", "1/2").returncode == 0
    assert run("synth", "taught.toml", "taught", "--shard", "2/2").returncode == 0
    assert len(list(Path("taught/seas").glob("*.npz"))) == 32
    done = run(
        *"train train.toml --seas taught.toml taught --name tiny --release 0.1".split(),
        *("--summary", "for a test"),
    )
    assert done.returncode == 0 and done.stdout == "models/tiny/0.1\n"
    again = run(
        *"train train.toml --seas taught.toml taught --name tiny --release 0.1".split(),
        *("--summary", "a released version never changes"),
    )
    assert again.returncode == 4 and "raise the version" in again.stderr
    done = run(*"verify --seas fresh.toml fresh --model models/tiny/0.1 --json --record".split())
    measured = json.loads(done.stdout)
    assert done.returncode == 0 and measured["model"] == {"name": "tiny", "version": "0.1"}
    written = Path("models/tiny/0.1/verification.json").read_text(encoding="utf-8")
    assert json.loads(written) == measured
    arguments = "--model models/tiny/0.1 --spread 0 --distance 300 --ratio 1.5 --json".split()
    done = run("score", str(sea_file), *arguments)
    document = json.loads(done.stdout)
    assert problems(document, forecast_schema()) == []
    assert done.returncode == (0 if document["probability"] is not None else 3)
    damaged = Path("models/tiny/0.1/model.npz")
    damaged.write_bytes(damaged.read_bytes()[:-1] + b"x")
    assert run("score", str(sea_file), *arguments).returncode == 4
