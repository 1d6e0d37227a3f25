import json
import warnings
from dataclasses import replace
from itertools import pairwise
from math import inf, nan

import numpy as np
import pytest

from forecaster.datatypes import Record
from forecaster.errors import (
    InputError,
    ModelIntegrityError,
    ModelNotFoundError,
    OutsideDomain,
    QualityError,
    RecordFormatError,
)
from forecaster.forecasting import (
    CAVEATS,
    MAX_INTERVALS,
    along_wave_distance,
    check,
    scattering,
    score,
)
from forecaster.learning import features
from forecaster.learning.events import interval_edges
from forecaster.learning.features import Scene, look_ahead
from forecaster.learning.model import CRITERIA
from forecaster.learning.registry import load_model
from forecaster.serialize import forecast_document
from forecaster.waves.heights import (
    forristall_height_exceedance,
    largest_exceedance,
    zero_crossing_waves,
)
from forecaster.waves.spectrum import estimate_spectrum
from tests import tiny_model

DT = 0.5
G = 9.81


@pytest.fixture(scope="session")
def folder(tmp_path_factory):
    """Folder of the tiny model."""
    return str(tiny_model.saved(tmp_path_factory.mktemp("models")).folder)


@pytest.fixture(scope="module")
def sea():
    """Half an hour of a sea such as the tiny model was taught."""
    return tiny_model.sea_record(hs=4.0, tp=10.0, dt=DT, n=3600, seed=1, sensor="fixed")


@pytest.fixture
def ask(folder, sea):
    """`score` of the sea with the tiny model, long-crested unless told otherwise."""

    def asked(record=sea, **options):
        return score(record, **{"model": folder, "spread": 0.0, **options})

    return asked


def document(forecast):
    """The answer as text, without the wall clock."""
    written = forecast_document(forecast)
    del written["issued_at"]
    return json.dumps(written)


# --- along the waves ---


@pytest.mark.parametrize(
    ("range_m", "bearing", "waves_from", "distance", "off"),
    [
        # by hand: waves from 270 run to 90 degrees
        (1000.0, 90.0, 270.0, 1000.0, 0.0),
        (1000.0, 110.0, 270.0, 939.693, 20.0),
        (1000.0, 60.0, 270.0, 866.025, 30.0),
        (1000.0, 350.0, 180.0, 984.808, 10.0),
        (1000.0, 10.0, 180.0, 984.808, 10.0),
        (1000.0, 370.0, -180.0, 984.808, 10.0),
        (2000.0, 0.0, 165.0, 1931.852, 15.0),
        (0.0, 90.0, 270.0, 0.0, 0.0),
    ],
)
def test_along_wave_distance(range_m, bearing, waves_from, distance, off):
    got = along_wave_distance(range_m, bearing, waves_from)
    assert got == (pytest.approx(distance, abs=1e-3), pytest.approx(off, abs=1e-9))


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        ((1000.0, 121.0, 270.0), "31 deg off"),
        ((1000.0, 270.0, 270.0), "180 deg off the direction the waves run to"),
        ((-1.0, 90.0, 270.0), "range must be"),
        ((nan, 90.0, 270.0), "range must be"),
        ((1000.0, inf, 270.0), "finite degrees"),
    ],
)
def test_targets_that_other_waves_reach_are_refused(arguments, words):
    with pytest.raises(InputError, match=words):
        along_wave_distance(*arguments)


# --- a usual answer ---


def test_a_whole_answer(ask, sea, folder):
    forecast = ask(distance=1000.0)
    assert forecast.answered
    assert forecast.quality.verdict == "pass"
    low, high = forecast.probability_90
    assert 0 < low < forecast.probability < high < 1
    assert forecast.domain.status == "inside"
    assert forecast.model == load_model(folder).identity
    assert forecast.caveats[: len(CAVEATS)] == CAVEATS
    assert forecast.record.end == sea.end
    assert forecast.reasons and forecast.groups
    assert [abs(r.effect) for r in forecast.reasons] == sorted(
        (abs(r.effect) for r in forecast.reasons), reverse=True
    )


def test_the_answer_can_be_written(ask):
    asked = ({}, {"distance": 900.0}, {"crest_ratio": 1.2}, {"spread": 20.0}, {"ratio": 3.5})
    for options in asked:
        assert json.loads(document(ask(**options)))["schema"] == "trikymia.forecast/1"


def test_target_and_intervals_fit_together(ask, sea):
    forecast = ask(distance=1200.0)
    target, tp = forecast.target, forecast.sea_state.tp
    # exact: energy in deep water travels at g T / 4 pi
    assert target.travel_time == pytest.approx(1200.0 / (G * tp / (4 * np.pi)), rel=1e-6)
    assert target.valid_from == sea.end == forecast.intervals[0].start
    assert target.valid_to == forecast.intervals[-1].end
    for before, after in zip(forecast.intervals, forecast.intervals[1:], strict=False):
        assert before.end == after.start
    for j, interval in enumerate(forecast.intervals):
        assert interval.end - interval.start == pytest.approx(4 * tp)
        assert interval.lead == pytest.approx(4 * tp * j)
        assert interval.median_height > 0
    # the horizon ends with the last interval half measured
    assert forecast.intervals[-1].coverage >= 0.5
    assert forecast.intervals[0].coverage > 0.9


def test_groups_arrive_after_the_travel_time(ask):
    forecast = ask(distance=1200.0)
    times = [group.time for group in forecast.groups]
    assert times == sorted(times) and len(times) <= 5
    for group in forecast.groups:
        assert group.arrival - group.time == pytest.approx(forecast.target.travel_time)
        assert forecast.record.start <= group.time <= forecast.record.end + 30


def test_at_the_sensor_itself_the_horizon_is_half_an_hour(ask, sea):
    forecast = ask(distance=0.0)
    target = forecast.target
    assert (target.distance, target.travel_time) == (0.0, 0.0)
    length = target.valid_to - target.valid_from
    assert 1800.0 <= length < 1800.0 + 4 * forecast.sea_state.tp
    assert all(interval.coverage == 0 for interval in forecast.intervals)
    assert forecast.answered


def test_the_horizon_asked_for(ask):
    tp = ask().sea_state.tp
    for distance in (0.0, 1000.0):
        forecast = ask(distance=distance, horizon=10 * tp)
        # by hand: 10 Tp are two and a half intervals, so three
        assert len(forecast.intervals) == 3
    longer = ask(horizon=40 * tp)
    assert longer.probability > ask(horizon=10 * tp).probability
    assert longer.base_rate > ask(horizon=10 * tp).base_rate


def test_a_horizon_too_long_is_cut_and_said(ask):
    forecast = ask(horizon=1e9)
    assert len(forecast.intervals) == MAX_INTERVALS
    assert any("horizon is cut" in caveat for caveat in forecast.caveats)


def test_the_exceedance_falls_and_holds_the_answer(ask):
    for options in ({}, {"crest_ratio": 1.25}, {"ratio": 1.87}, {"distance": 1000.0}):
        forecast = ask(**options)
        rows = forecast.exceedance
        assert (np.diff([row.ratio for row in rows]) > 0).all()
        assert (np.diff([row.probability for row in rows]) <= 0).all()
        assert (np.diff([row.base_rate for row in rows]) < 0).all()
        (own,) = [row for row in rows if row.ratio == forecast.target.threshold]
        assert own.probability == forecast.probability
        assert own.base_rate == pytest.approx(forecast.base_rate)
        for row in rows:
            assert row.height == pytest.approx(row.ratio * forecast.sea_state.hs)


def test_probabilities_fall_as_the_ratio_rises(ask):
    answers = [ask(ratio=ratio, distance=800.0) for ratio in (1.2, 1.6, 2.0, 2.4)]
    assert (np.diff([a.probability for a in answers]) <= 0).all()
    assert answers[0].probability > answers[-1].probability
    assert (np.diff([a.base_rate for a in answers]) < 0).all()


def test_a_height_in_metres_is_its_ratio(ask):
    by_ratio = ask(ratio=1.75, distance=600.0)
    by_height = ask(height=1.75 * by_ratio.sea_state.hs, distance=600.0)
    assert by_height.target.threshold == pytest.approx(1.75, rel=1e-12)
    assert by_height.target.threshold_m == pytest.approx(1.75 * by_ratio.sea_state.hs)
    assert by_height.probability == pytest.approx(by_ratio.probability, rel=1e-9)
    assert by_height.base_rate == pytest.approx(by_ratio.base_rate, rel=1e-9)


def test_base_rates_by_hand(ask):
    forecast = ask(ratio=2.0)
    waves = (forecast.target.valid_to - forecast.target.valid_from) / forecast.sea_state.tm02
    # published: Forristall 1978, P = exp(-(H / 0.681 Hs)^2.126), waves independent
    known = 1 - (1 - np.exp(-((2.0 / 0.681) ** 2.126))) ** waves
    assert forecast.base_rate_known_hs == pytest.approx(known, rel=0.01)
    # an error of Hs raises the tail: up to five times at 11 % (30 minutes are about 5 %)
    assert forecast.base_rate_known_hs < forecast.base_rate < 5 * forecast.base_rate_known_hs
    each = largest_exceedance(forristall_height_exceedance(2.0), waves / len(forecast.intervals))
    assert forecast.intervals[0].base_rate > each
    p, b = forecast.probability, forecast.base_rate
    assert forecast.odds_ratio == pytest.approx(p / (1 - p) / (b / (1 - b)))


def test_a_short_record_says_that_its_height_is_uncertain(ask):
    peaked = tiny_model.sea_record(hs=4.0, dt=DT, n=3600, gamma=6.0, seed=2)
    short, long = ask(peaked, window=260.0), ask(peaked)
    assert short.sea_state.hs_error > 0.1 > long.sea_state.hs_error
    said = f"Hs is known to {short.sea_state.hs_error:.0%} only"
    assert any(said in caveat for caveat in short.caveats)
    assert not any("record is short" in caveat for caveat in long.caveats)
    raised = [f.base_rate / f.base_rate_known_hs for f in (short, long)]
    assert raised[0] > raised[1]


# --- thresholds at and beyond the ends ---


def test_above_the_taught_thresholds_an_upper_bound_is_given(ask):
    top, beyond = ask(ratio=2.8), ask(ratio=3.3)
    assert beyond.domain.status == "edge"
    assert any("upper bound" in reason for reason in beyond.domain.reasons)
    assert beyond.probability == top.probability
    assert beyond.target.threshold == 3.3
    assert beyond.base_rate < top.base_rate
    assert beyond.odds_ratio is None  # the two are not about one height


def test_below_them_a_lower_bound(ask):
    bottom, below = ask(ratio=0.6), ask(ratio=0.2)
    assert below.probability == bottom.probability
    assert below.target.threshold == 0.2
    assert any("a lower bound" in caveat for caveat in below.caveats)


@pytest.mark.parametrize("ratio", [0.01, 30.0, 1e6])
def test_absurd_thresholds_stay_numbers(ask, ratio):
    forecast = ask(ratio=ratio)
    assert np.isfinite(forecast.probability) and np.isfinite(forecast.base_rate)
    document(forecast)


# --- current ---


def test_a_current_shifts_arrivals(ask, sea):
    still, against = ask(distance=1500.0), ask(distance=1500.0, current=-1.0)
    speed = 1500.0 / still.target.travel_time
    later = 1500.0 / (speed - 1.0) - 1500.0 / speed
    assert against.target.travel_time - still.target.travel_time == pytest.approx(later)
    assert against.target.valid_from == pytest.approx(sea.end + later)
    for one, other in zip(still.groups, against.groups, strict=True):
        assert other.time == one.time
        assert other.arrival - one.arrival == pytest.approx(later)
    # the waves are the same, only later
    assert against.probability == still.probability
    assert any(f"the first {later:.0f} s after" in c for c in against.caveats)
    assert not any("holds the waves back" in c for c in still.caveats)


def test_a_following_current_leaves_nothing_before_the_issue_time(ask, sea):
    still, along = ask(distance=1500.0), ask(distance=1500.0, current=1.5)
    speed = 1500.0 / still.target.travel_time
    assert along.target.travel_time == pytest.approx(1500.0 / (speed + 1.5))
    assert along.target.valid_from == pytest.approx(sea.end)
    assert along.intervals[0].lead == pytest.approx(0, abs=1e-6)
    assert len(along.intervals) <= len(still.intervals)


def test_an_unknown_current_is_said_with_what_it_would_do(ask):
    unknown = ask(distance=1500.0)
    speed = 1500.0 / unknown.target.travel_time
    moved = 1500.0 / speed - 1500.0 / (speed + 1)
    assert any(f"by {moved:.0f} s" in c for c in unknown.caveats if "Current unknown" in c)
    for known in (ask(distance=1500.0, current=0.0), ask(distance=1500.0, current=1.0), ask()):
        assert not any("Current unknown" in caveat for caveat in known.caveats)


def test_a_current_that_stops_the_waves_is_refused(ask):
    slow = tiny_model.sea_record(hs=0.4, tp=3.0, dt=0.25, n=3600)
    with pytest.raises(InputError, match="all but stops them"):
        ask(slow, distance=100.0, current=-2.2)


# --- the issue time ---


def test_rows_after_the_issue_time_change_no_byte(ask, sea):
    end = 1500.0
    upto = replace(sea, elevation=sea.elevation[: int(end / DT) + 1])
    wild = sea.elevation.copy()
    wild[int(end / DT) + 1 :] = 1e3 * np.random.default_rng(1).standard_normal(
        wild.size - int(end / DT) - 1
    )
    answers = [
        document(ask(replace(sea, elevation=e), at=end, distance=1000.0))
        for e in (sea.elevation, wild, sea.elevation[: int(end / DT) + 2])
    ]
    assert answers[0] == answers[1] == answers[2]
    cut = ask(upto, distance=1000.0)
    # the record that ends there gives the same numbers (its history does not speak of a cut)
    later = ask(at=end, distance=1000.0)
    assert later.record.end == cut.record.end == end
    assert later.probability == pytest.approx(cut.probability, rel=1e-6)


def test_rows_of_a_file_after_the_issue_time_change_no_byte(ask, sea, tmp_path):
    path = tmp_path / "staff.csv"
    rows = [f"{DT * i:.1f},{z:.3f}" for i, z in enumerate(sea.elevation)]
    answers = []
    for text in (rows[:3001], rows, [*rows[:3001], "1500.5,not a number", "junk"]):
        path.write_text("\n".join(["time_s,elevation_m", *text]) + "\n")
        answers.append(document(ask(path, at=1500.0, distance=1000.0)))
    assert answers[0] == answers[1] == answers[2]


def test_a_file_and_its_numbers_give_one_answer(ask, sea, tmp_path):
    path = tmp_path / "staff.csv"
    rows = [f"{DT * i:.1f},{100 * z!r}" for i, z in enumerate(sea.elevation.tolist())]
    path.write_text("\n".join(["time_s,elevation", *rows]) + "\n")
    from_file = ask(str(path), unit="cm", distance=1000.0, sensor="fixed")
    assert from_file.probability == pytest.approx(ask(distance=1000.0).probability, rel=1e-6)


def test_the_window_is_the_last_part_of_the_record(ask, sea):
    forecast = ask(window=900.0)
    assert forecast.record.duration == pytest.approx(900.0)
    assert forecast.record.end == sea.end


# --- extreme waves in the record are no faults ---


def with_a_great_wave(*, at, crest=1.4, hs=4.0, n=4800, seed=4):
    """A periodic linear sea with a crest of 1.4 Hs at a time: the mean shape of a high crest.

    Published: Tromans, Anaturk & Hagemeijer 1991 (after Lindgren 1970): the autocorrelation.
    """
    record = tiny_model.sea_record(hs=hs, tp=10.0, dt=DT, n=n, seed=seed, sensor="fixed")
    power = np.abs(np.fft.rfft(record.elevation)) ** 2
    place = round(at / DT)
    shape = np.roll(np.fft.irfft(power) / np.fft.irfft(power)[0], place)
    added = crest * 4 * record.elevation.std() - record.elevation[place]
    return replace(record, elevation=record.elevation + added * shape)


def test_a_great_wave_passes_quality_untouched():
    record = with_a_great_wave(at=900.0)
    record = replace(record, elevation=record.elevation[:3600])
    hs = 4 * record.elevation.std()
    waves = zero_crossing_waves(record.elevation, DT)
    assert waves.height.max() > 2.2 * hs and waves.crest.max() > 1.35 * hs
    done = check(record, spread=0.0)
    assert done.quality.verdict == "pass", [t for t in done.quality.tests if t.flag != "pass"]
    np.testing.assert_array_equal(done.record.elevation, record.elevation)
    assert not any("spike" in line for line in done.record.history)


@pytest.mark.parametrize("before_end", [6.0, 12.0, 20.0])
@pytest.mark.parametrize("wavelengths", [0.5, 4.0])
def test_a_great_wave_in_the_last_periods_is_run_forward(before_end, wavelengths):
    # exact: a linear sea of period n dt is known downwave (Airy 1845: k = omega^2 / g); the run
    # sees only what passed until `before_end` after the great crest
    whole = with_a_great_wave(at=1800.0 - before_end, hs=0.5)
    record = replace(whole, elevation=whole.elevation[:3600])
    distance = wavelengths * G * 10.0**2 / (2 * np.pi)
    omega = 2 * np.pi * np.fft.rfftfreq(whole.n, DT)
    carried = np.fft.rfft(whole.elevation) * np.exp(-1j * omega**2 / G * distance)
    true = zero_crossing_waves(np.fft.irfft(carried, whole.n), DT)
    done = check(record, spread=0.0)
    ahead = look_ahead(done.record, [distance])
    arrival = 1800.0 - before_end + wavelengths * 20.0  # exact: two periods a wavelength

    def highest(waves):
        return waves.height[np.abs(waves.crest_time - arrival) < 15.0].max()

    assert highest(true) > 1.3 * done.sea_state.hs
    for track in (ahead.linear, ahead.expected):
        assert highest(track[0].waves) == pytest.approx(highest(true), rel=0.15)
    edges = interval_edges(done.record.end, done.sea_state.tp, 4)
    scene = Scene(ahead, 0, edges)
    if wavelengths == 4.0:  # it is in the intervals of the forecast, and those are covered
        run = scene.ranked_wave(ahead.expected[0], "height")
        assert scene.coverage()[run.argmax()] > 0.5
        assert run.max() * done.sea_state.hs == pytest.approx(highest(true), rel=0.15)


# --- bad input ends in an error or a document without probability, never in a traceback ---


def gappy(sea, share):
    values = sea.elevation.copy()
    values[np.random.default_rng(2).uniform(size=values.size) < share] = np.nan
    return replace(sea, elevation=values)


def records(sea):
    return {
        "flat line": Record(np.zeros(3600), DT),
        "40 % gaps": gappy(sea, 0.4),
        "millimetres as metres": replace(sea, elevation=1000 * sea.elevation),
        "kilometres as metres": replace(sea, elevation=sea.elevation / 1000),
        "three minutes": replace(sea, elevation=sea.elevation[:360]),
        "half a hertz for waves of 4 s": tiny_model.sea_record(hs=1, tp=4, dt=2.0, n=900),
        "nothing measured": Record(np.full(1000, np.nan), DT),
        "two samples": Record(np.array([0.0, 1.0]), DT),
        "forty samples": replace(sea, elevation=sea.elevation[:40]),
        "steps": Record(np.where(np.arange(3600) % 2, 1.0, -1.0), DT),
    }


@pytest.mark.parametrize("name", records(tiny_model.sea_record()))
def test_records_that_fail_quality_get_no_probability(ask, sea, name):
    record = records(sea)[name]
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        forecast = ask(record, distance=500.0)
    assert forecast.quality.verdict == "fail"
    assert not forecast.answered
    for value in (
        forecast.probability, forecast.probability_90, forecast.base_rate,
        forecast.base_rate_known_hs, forecast.odds_ratio, forecast.sea_state, forecast.target,
    ):  # fmt: skip
        assert value is None
    assert forecast.intervals == forecast.exceedance == forecast.groups == ()
    assert "failed its quality tests" in forecast.domain.reasons[0]
    assert forecast.caveats[: len(CAVEATS)] == CAVEATS
    document(forecast)
    with pytest.raises(QualityError) as caught:
        ask(record, distance=500.0, strict=True)
    assert caught.value.report.verdict == "fail"


OUTSIDE = {
    "12 degrees of spread": {"spread": 12.0},
    "kp h of 3": {"depth": 75.0},
    "shallow": {"depth": 20.0},
    "a puddle": {"depth": 0.3},
    "beyond the distances taught": {"distance": 5000.0},
    "beyond the horizon": {"distance": 1e7},
}


@pytest.mark.parametrize("name", OUTSIDE)
def test_seas_outside_the_model_get_the_base_rate_only(ask, name):
    options = {"distance": 500.0, **OUTSIDE[name]}
    with warnings.catch_warnings():
        warnings.simplefilter("error")
        forecast = ask(**options)
    assert forecast.domain.status == "outside" and forecast.domain.reasons
    assert not forecast.answered
    for value in (forecast.probability, forecast.probability_90, forecast.odds_ratio):
        assert value is None
    assert 0 < forecast.base_rate_known_hs < forecast.base_rate < 1
    assert forecast.intervals and forecast.exceedance
    for interval in forecast.intervals:
        assert interval.probability is None and interval.median_height is None
        assert 0 <= interval.coverage <= 1 and interval.base_rate > 0
    for row in forecast.exceedance:
        assert row.probability is None and row.base_rate > 0
    document(forecast)
    with pytest.raises(OutsideDomain) as caught:
        ask(**options, strict=True)
    assert caught.value.reasons == forecast.domain.reasons


def test_a_sea_too_steep_for_the_model_is_outside(ask, sea):
    forecast = ask(replace(sea, elevation=1.9 * sea.elevation), distance=500.0)
    assert forecast.domain.status == "outside"
    assert "steepness of the sea" in forecast.domain.reasons[0]
    assert forecast.base_rate > 0


def test_waves_too_short_for_the_sampling_are_outside_and_no_fault_of_the_options(ask):
    # exact: 3.9 samples per peak period, fewer than an envelope takes
    record = tiny_model.sea_record(hs=1.0, tp=3.9, dt=1.0, n=1800, seed=3, sensor="fixed")
    forecast = ask(record, distance=100.0)
    assert forecast.quality.verdict != "fail" and not forecast.answered
    assert any("samples per peak period" in reason for reason in forecast.domain.reasons)


def test_unknown_spread_is_edge_and_answered(ask):
    forecast = ask(spread=None)
    assert forecast.domain.status == "edge"
    assert forecast.answered and forecast.sea_state.spread is None


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"distance": -5.0}, "distance must be 0 or a positive"),
        ({"distance": nan}, "distance must be"),
        ({"distance": inf}, "distance must be"),
        ({"distance": 1e9}, "up to 2e\\+07"),
        ({"depth": 0.0}, "depth must lie between"),
        ({"depth": -30.0}, "depth must lie between"),
        ({"depth": nan}, "depth must lie between"),
        ({"depth": 1e5}, "depth must lie between 0 and 12000 m"),
        ({"spread": -1.0}, "spread must be 0 to 90"),
        ({"spread": nan}, "spread must be 0 to 90"),
        ({"current": 9.0}, "current must be within 5 m/s"),
        ({"current": nan}, "current must be within"),
        ({"horizon": 0.0}, "horizon must be a positive"),
        ({"horizon": inf}, "horizon must be a positive"),
        ({"window": 0.0}, "window must be a positive"),
        ({"window": nan}, "window must be a positive"),
        ({"sensor": "kite"}, "sensor must be one of"),
        ({"ratio": -2.0}, "threshold must be a positive"),
        ({"ratio": nan}, "threshold must be a positive"),
        ({"height": 0.0}, "threshold must be a positive"),
        ({"crest_ratio": inf}, "threshold must be a positive"),
        ({"ratio": 2.0, "height": 8.0}, "not several"),
        ({"at": -10.0}, "fewer than 2 samples"),
        ({"at": "yesterday"}, "yesterday"),
        ({"unit": "mm"}, "unit: say how a file is read"),
    ],
)
def test_bad_options_are_refused_with_what_would_be_right(ask, options, words):
    with pytest.raises(InputError, match=words):
        ask(**options)


def test_bad_thresholds_are_refused_whatever_the_record(ask):
    with pytest.raises(InputError, match="threshold"):
        ask(Record(np.zeros(3600), DT), ratio=-1.0)


def test_files_that_are_no_records_are_refused(ask, tmp_path):
    with pytest.raises(RecordFormatError, match="no such file"):
        ask(tmp_path / "absent.csv")
    path = tmp_path / "picture.bin"
    path.write_bytes(bytes(range(256)) * 10)
    with pytest.raises(RecordFormatError):
        ask(path)


def test_a_missing_model_is_named(ask):
    with pytest.raises(ModelNotFoundError, match="no model 'kraken'"):
        ask(model="kraken")


def test_a_tampered_model_is_refused(ask, tmp_path):
    card = tiny_model.saved(tmp_path)
    path = card.folder / "model.npz"
    path.write_bytes(path.read_bytes()[:-9] + b"tampered!")
    with pytest.raises(ModelIntegrityError, match="altered or damaged"):
        ask(model=card.folder)


def test_a_model_may_be_given_as_such(ask, folder, tmp_path):
    by_path = ask(distance=700.0)
    as_such = ask(distance=700.0, model=load_model(folder))
    assert document(by_path) == document(as_such)


# --- what is said beside the number ---


def test_caveats_of_the_case(ask, sea):
    deep, known = ask(), ask(depth=4000.0)
    assert any("No depth was given" in caveat for caveat in deep.caveats)
    assert not any("No depth was given" in caveat for caveat in known.caveats)
    assert known.record.depth == 4000.0
    warned = ask(replace(sea, warnings=("times are taken as UTC",)))
    assert "times are taken as UTC" in warned.caveats


def test_suspect_quality_is_said_and_scored(ask, sea):
    values = sea.elevation.copy()
    values[1000] += 25.0
    forecast = ask(replace(sea, elevation=values))
    assert forecast.quality.verdict == "suspect" and forecast.answered
    assert any("suspect (spike" in caveat for caveat in forecast.caveats)
    # the spike was taken out, not scored
    assert forecast.probability == pytest.approx(ask().probability, rel=0.2)


def test_short_gaps_are_bridged_and_scored(ask, sea):
    values = sea.elevation.copy()
    values[700:703] = np.nan
    forecast = ask(replace(sea, elevation=values), distance=1000.0)
    assert forecast.answered
    assert forecast.probability == pytest.approx(ask(distance=1000.0).probability, rel=0.1)


def test_gaps_at_the_ends_are_cut_off_and_not_counted_as_measured(ask, sea):
    values = sea.elevation.copy()
    values[:10] = values[-50:] = np.nan
    forecast = ask(replace(sea, elevation=values), distance=1000.0)
    # by hand: 50 samples are 25 s
    assert forecast.record.end == sea.end - 25.0
    assert forecast.record.start == sea.start + 5.0
    assert forecast.target.valid_from == sea.end - 25.0
    assert any("in the last 25 s" in caveat for caveat in forecast.caveats)
    cut = ask(replace(sea, elevation=sea.elevation[10:-50], start=5.0), distance=1000.0)
    assert forecast.probability == pytest.approx(cut.probability, rel=1e-6)


def test_a_crest_from_a_buoy_is_edge(ask):
    downwave = {"distance": 500.0, "crest_ratio": 1.25}
    assert ask(**downwave, sensor="buoy").domain.status == "edge"
    crest = ask(**downwave)
    assert crest.domain.status == "inside"
    assert crest.target.criterion == "crest"
    assert crest.target.threshold_m == pytest.approx(1.25 * crest.sea_state.hs)
    assert {row.ratio for row in crest.exceedance} <= {
        *np.arange(0.6, 1.71, 0.1).round(2), 1.25,
    }  # fmt: skip


def test_thresholds_shown_are_those_the_models_were_taught(ask):
    for options, criterion in (({}, "height"), ({"crest_ratio": 1.0}, "crest")):
        ratios = [row.ratio for row in ask(**options).exceedance]
        assert CRITERIA[criterion][0] <= ratios[0] and ratios[-1] <= CRITERIA[criterion][1]


def test_check_needs_no_model(sea):
    done = check(sea, spread=7.0, depth=300.0)
    assert done.quality.verdict == "pass"
    assert done.sea_state.hs == pytest.approx(4 * sea.elevation.std(), rel=0.01)
    assert (done.sea_state.spread, done.sea_state.depth) == (7.0, 300.0)
    failed = check(Record(np.zeros(900), DT))
    assert failed.sea_state is None and failed.waves is None


def test_check_counts_the_waves_of_the_record(sea):
    # independent code: waves cut at the samples below the mean level that follow one above it
    done = check(sea)
    x, t = done.record.elevation, done.record.times
    down = np.flatnonzero((x[:-1] > 0) & (x[1:] <= 0)) + 1
    spans = [x[a:b] for a, b in pairwise(down)]
    heights = np.array([span.max() - span.min() for span in spans])
    assert done.waves.count == heights.size
    # at 20 samples a wave the largest sample is at most 1.5 % below the vertex
    assert done.waves.highest == pytest.approx(heights.max(), rel=0.02)
    assert done.waves.highest_ratio == done.waves.highest / done.sea_state.hs
    assert done.waves.highest_crest == pytest.approx(x.max(), rel=0.02)
    first = down[heights.argmax()]
    crest = t[first + spans[heights.argmax()].argmax()]
    assert done.waves.highest_time == pytest.approx(crest, abs=DT)
    # a record on another clock: the same waves, its own time
    later = check(replace(sea, start=sea.start + 5000.0)).waves
    assert later.highest_time == pytest.approx(done.waves.highest_time + 5000.0)


def test_a_score_estimates_the_spectrum_of_its_record_once(ask, monkeypatch):
    called = []

    def counted(*arguments):
        called.append(arguments)
        return estimate_spectrum(*arguments)

    monkeypatch.setattr(features, "estimate_spectrum", counted)
    assert ask().answered
    assert len(called) == 1


# --- scattering spectrum of a checked record ---


def test_scattering_spectrum_of_a_checked_record(sea):
    done = check(sea)
    spectrum = scattering(done)
    assert len(spectrum.eigenvalues) > 10 and spectrum.groups
    assert spectrum.eigenvalues[0].height_ratio == pytest.approx(
        spectrum.eigenvalues[0].height / done.sea_state.hs
    )
    # the issue time is where it ends: later waves change nothing
    cut = scattering(check(sea, at=900.0))
    late = replace(sea, elevation=np.where(sea.times > 900, 0.0, sea.elevation))
    other = scattering(check(late, at=900.0))
    assert cut.eigenvalues == other.eigenvalues
    assert max(item.time for item in cut.eigenvalues) < 900 + 4 * done.sea_state.tp


def test_a_failed_record_has_no_scattering_spectrum():
    with pytest.raises(QualityError, match="quality"):
        scattering(check(Record(np.zeros(900), DT)))
