"""Documents: the published keys, strict JSON, and a schema that accepts them and nothing less."""

import copy
import json
from dataclasses import replace
from datetime import UTC, datetime
from math import inf, nan

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecaster import serialize
from forecaster.datatypes import GroupForecast, IntervalForecast, WaveStatistics
from forecaster.errors import NumericsError
from forecaster.waves.scattering_spectrum import scattering_spectrum
from tests.hand_built import BAD, GOOD, SEA, forecast, record, unanswered
from tests.json_schema import problems

# by hand: the outside contract of trikymia.forecast/1; a key may be added, none renamed
CONTRACT = {
    "": "schema issued_at record quality sea_state target probability probability_90 base_rate "
    "base_rate_known_hs odds_ratio intervals exceedance groups reasons domain caveats model "
    "program",
    "record": "source start end dt_s n depth_m sensor",
    "quality": "verdict tests",
    "sea_state": "hs_m tp_s tm01_s tm02_s steepness bandwidth qp bfi kph spread_deg",
    "target": "distance_m travel_time_s valid_from valid_to criterion threshold threshold_m",
    "intervals": "from to lead_s probability base_rate coverage median_height_m",
    "exceedance": "ratio height_m probability base_rate",
    "groups": "time arrival duration_s height_m eigenvalues focus_distance_m amplification",
    "reasons": "feature effect",
    "domain": "status reasons",
    "model": "name version sha256",
    "program": "version",
}
WAVES = WaveStatistics(
    count=210, highest=6.3, highest_ratio=1.5, highest_time=1700.25, highest_crest=3.5,
    crest_ratio=0.83, expected_ratio=1.56, run_length=1.4, total_run=9.2,
)  # fmt: skip
ANSWERS = {
    "answered": forecast(),
    "own clock": forecast(calendar=False),
    "outside": unanswered(),
    "failed": unanswered(quality=BAD),
}
FAILURE = serialize.error_document(
    "a.csv", "RecordFormatError", "a.csv: is empty", issued_at=0.0, program_version="0"
)


@pytest.mark.parametrize("place", CONTRACT)
def test_keys_of_the_contract_are_there_in_their_order(place):
    document = serialize.forecast_document(forecast())
    part = document[place] if place else document
    part = part[0] if isinstance(part, list) else part
    wanted = CONTRACT[place].split()
    assert [key for key in part if key in wanted] == wanted


@pytest.mark.parametrize("name", ANSWERS)
def test_documents_obey_the_schema_and_survive_a_strict_reader(name):
    document = serialize.forecast_document(ANSWERS[name])
    assert problems(document, serialize.forecast_schema()) == []

    def refuse(constant):
        raise AssertionError(f"{constant} is no JSON")

    assert json.loads(serialize.dumps(document), parse_constant=refuse) == document


def test_error_document_has_every_key_and_obeys_the_schema():
    assert problems(FAILURE, serialize.forecast_schema()) == []
    assert set(FAILURE) == set(serialize.forecast_document(forecast()))
    for key in ("probability", "probability_90", "odds_ratio", "base_rate"):
        assert FAILURE[key] is None
    assert FAILURE["error"] == {"class": "RecordFormatError", "message": "a.csv: is empty"}


@pytest.mark.parametrize(
    "spoil",
    [
        lambda d: d.pop("caveats"),
        lambda d: d["record"].pop("end"),
        lambda d: d.update(schema="trikymia.forecast/2"),
        lambda d: d.update(probability=1.2),
        lambda d: d.update(probability="0.1"),
        lambda d: d.update(probability_90=[0.1]),
        lambda d: d.update(issued_at="yesterday"),
        lambda d: d["domain"].update(status="perhaps"),
        lambda d: d["intervals"][0].update(coverage=None),
        lambda d: d["groups"][0].update(eigenvalues=[{"re": 0.1}]),
        lambda d: d["sea_state"].update(hs_m=-1.0),
        lambda d: d.update(error={"class": "X", "message": "an answer has none"}),
    ],
)
def test_the_schema_refuses_what_is_no_document(spoil):
    document = copy.deepcopy(serialize.forecast_document(forecast()))
    spoil(document)
    assert problems(document, serialize.forecast_schema())


def test_the_schema_explains_every_key():
    def objects(schema):
        if isinstance(schema, dict):
            if "properties" in schema:
                yield schema
            for inner in schema.values():
                yield from objects(inner)
        elif isinstance(schema, list):
            for inner in schema:
                yield from objects(inner)

    found = list(objects(serialize.forecast_schema()))
    assert len(found) > 15
    for schema in found:
        for key, inner in schema["properties"].items():
            assert inner.get("description") or key in ("re", "im")


def test_values_arrive_under_their_key_in_their_unit():
    document = serialize.forecast_document(forecast())
    # by hand, from tests/hand_built.py
    assert document["sea_state"]["hs_m"] == 4.2
    assert document["sea_state"]["tm02_s"] == 7.8
    assert document["target"]["threshold_m"] == 8.4
    assert document["record"]["n"] == 3600
    assert document["probability_90"] == [0.021, 0.079]
    assert document["intervals"][4]["probability"] == 0.021
    assert document["intervals"][4]["lead_s"] == 160.0
    assert document["groups"][0]["eigenvalues"] == [{"re": 0, "im": 0.4}, {"re": 0.1, "im": 0.2}]


def test_infinite_and_missing_become_null():
    document = serialize.forecast_document(forecast())
    assert document["record"]["depth_m"] is None  # deep water
    assert document["sea_state"]["kph"] is None
    assert document["sea_state"]["spread_deg"] is None  # unknown
    made = forecast(
        groups=(GroupForecast(0.0, 1.0, 2.0, 3.0, (), nan, nan),),
        sea_state=replace(SEA, kph=np.float32(inf)),
    )
    document = serialize.forecast_document(made)
    assert document["groups"][0]["focus_distance_m"] is None
    assert document["sea_state"]["kph"] is None


def test_a_number_that_must_be_there_is_not_silently_lost():
    with pytest.raises(NumericsError, match="finite"):
        serialize.forecast_document(forecast(sea_state=replace(SEA, hs=nan)))


def test_times_are_utc_or_seconds_to_the_millisecond():
    calendar = serialize.forecast_document(forecast())
    assert calendar["record"]["end"] == "2031-05-01T03:04:10.000Z"
    own = serialize.forecast_document(forecast(calendar=False))
    assert own["record"]["end"] == 1800.0
    assert own["issued_at"] == "2031-05-01T03:06:20.000Z"  # always the wall clock
    part = replace(forecast(calendar=False), intervals=(IntervalForecast(1 / 3, 2, 0, 0, 0, 1, 1),))
    assert serialize.forecast_document(part)["intervals"][0]["from"] == 0.333


@given(st.floats(0, 4e9))
def test_utc_text_is_the_time_of_the_standard_library(seconds):
    # independent code: datetime
    read = datetime.fromisoformat(serialize.utc_text(seconds))
    assert read.tzinfo == UTC
    assert read.timestamp() == pytest.approx(seconds, abs=0.00051)


def test_numpy_numbers_are_written_as_plain_ones():
    made = forecast(probability=np.float32(0.25), base_rate=np.float64(0.5))
    document = serialize.forecast_document(made)
    assert type(document["probability"]) is float
    assert json.loads(serialize.dumps(document))["probability"] == 0.25


def test_the_same_forecast_gives_the_same_bytes_on_one_line():
    texts = {serialize.dumps(serialize.forecast_document(forecast())) for _ in range(2)}
    assert len(texts) == 1
    assert "\n" not in texts.pop()
    with pytest.raises(ValueError, match="JSON"):
        serialize.dumps({"x": nan})


def test_check_document():
    document = serialize.check_document(record(), GOOD, SEA, WAVES, program_version="0.1.0")
    assert list(document) == "schema record quality sea_state waves scattering program".split()
    assert document["scattering"] is None  # not asked for
    assert document["schema"] == "trikymia.check/1"
    assert document["quality"]["tests"][1]["name"] == "spike"
    assert document["sea_state"]["hs_m"] == 4.2
    failed = serialize.check_document(record(), BAD, None, None, program_version="")
    assert failed["sea_state"] is None and failed["waves"] is None
    whole = serialize.check_document(
        record(), GOOD, SEA, WAVES, scattering_spectrum(record(), SEA), program_version="0.1.0"
    )
    assert whole["scattering"]["groups"]
    schema = serialize.check_schema()
    for one in (document, failed, whole):
        assert problems(json.loads(serialize.dumps(one)), schema) == []
    assert problems({**document, "schema": "trikymia.forecast/1"}, schema)
    assert problems({**document, "waves": {}}, schema)


@pytest.mark.parametrize("calendar", [True, False])
def test_check_document_holds_the_waves(calendar):
    made = record(calendar=calendar)
    waves = replace(WAVES, highest_time=made.start + 3.25)

    def written(waves):
        document = serialize.check_document(made, GOOD, SEA, waves, program_version="0")
        assert problems(document["waves"], serialize.WAVES.schema) == []
        return json.loads(serialize.dumps(document))["waves"]

    start = serialize.utc_text(made.start + 3.25) if calendar else 3.75  # the first sample at 0.5 s
    # by hand
    assert written(waves) == {
        "count": 210,
        "highest_m": 6.3,
        "highest_over_hs": 1.5,
        "highest_time": start,
        "highest_crest_m": 3.5,
        "highest_crest_over_hs": 0.83,
        "expected_highest_over_hs": 1.56,
        "mean_run_waves": 1.4,
        "mean_total_run_waves": 9.2,
    }
    lone = written(replace(waves, highest_time=nan, total_run=inf))
    assert lone["highest_time"] is None and lone["mean_total_run_waves"] is None
    assert problems({**lone, "highest_m": None}, serialize.WAVES.schema)


@pytest.mark.parametrize("calendar", [True, False])
def test_check_document_holds_the_scattering_spectrum(calendar):
    made = record(calendar=calendar)
    spectrum = scattering_spectrum(made, SEA)
    document = serialize.check_document(made, GOOD, SEA, WAVES, spectrum, program_version="0")
    written = json.loads(serialize.dumps(document))["scattering"]
    assert problems(written, serialize.SCATTERING.schema) == []
    first, found = written["eigenvalues"][0], spectrum.eigenvalues[0]
    assert len(written["eigenvalues"]) == len(spectrum.eigenvalues) > 10
    assert first["height_m"] == found.height
    assert first["height_over_hs"] == pytest.approx(found.height / SEA.hs)
    assert first["eigenvalue"] == {"re": found.value.real, "im": found.value.imag}
    assert first["time"] == (serialize.utc_text(found.time) if calendar else round(found.time, 3))
    assert [g["height_m"] for g in written["groups"]] == [g.height for g in spectrum.groups]
    assert written["energy_discrete"] + written["energy_continuous"] <= 1 + 1e-6
    assert written["carrier_rad_per_s"] == spectrum.envelope.omega0
    assert written["periodic"]["unstable_modes"] == spectrum.periodic.unstable_modes
    assert written["remarks"] == list(spectrum.remarks)


def test_program_version_is_that_of_the_project():
    import tomllib
    from pathlib import Path

    text = (Path(__file__).parents[1] / "pyproject.toml").read_text(encoding="utf-8")
    assert serialize.program_version() == tomllib.loads(text)["project"]["version"]
