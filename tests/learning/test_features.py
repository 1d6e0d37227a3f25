from dataclasses import replace
from math import inf

import numpy as np
import pytest
from scipy.stats import rice

from forecaster.datatypes import Record, Spectrum, Waves
from forecaster.errors import InputError
from forecaster.learning.domain import BOUNDING
from forecaster.learning.events import INTERVAL_PERIODS, interval_edges
from forecaster.learning.features import (
    FEATURES,
    PLACES,
    WAVES_PER_INTERVAL,
    FirstLook,
    Scene,
    Track,
    carried,
    feature_table,
    first_look,
    look_ahead,
    rice_exceedance,
)
from forecaster.waves.heights import rayleigh_largest_quantile, zero_crossing_waves
from forecaster.waves.spectrum import sea_state
from tests import tiny_model

G = 9.81
TP, DT, N = 10.0, 0.625, 1600  # 1000 s, 16 samples a period
K = (2 * np.pi / TP) ** 2 / G
CG = G * TP / (4 * np.pi)  # exact: group velocity in deep water
WAVELENGTH = G * TP**2 / (2 * np.pi)


def swell(*periods, amplitude=0.05):
    """Regular waves of one amplitude and several periods, far too gentle to be nonlinear."""
    t = DT * np.arange(N)
    return Record(sum(amplitude * np.cos(2 * np.pi * t / p) for p in periods), DT)


def scene_of(record, distance, *, count=6, spread=None):
    ahead = look_ahead(record, [distance], spread=spread)
    return Scene(ahead, 0, interval_edges(record.end, ahead.sea.tp, count))


def value(scene, name):
    return feature_table(scene, (name,))[:, 0]


@pytest.fixture(scope="module")
def regular():
    """A regular wave, seen 4 wavelengths downwave."""
    return scene_of(swell(TP), 4 * WAVELENGTH)


@pytest.fixture(scope="module")
def random_scene():
    """A random sea at the sensor and 8 wavelengths downwave."""
    record = tiny_model.sea_record(dt=DT, n=1600, seed=11)
    ahead = look_ahead(record, [0.0, 8 * WAVELENGTH])
    return Scene(ahead, 1, interval_edges(record.end, ahead.sea.tp, 6))


# --- the table ---


@pytest.mark.parametrize("name", FEATURES)
def test_every_feature_says_what_it_is(name):
    feature = FEATURES[name]
    assert callable(feature.function)
    assert feature.unit and feature.source and feature.words
    assert feature.words[0].islower() or feature.words.startswith("Benjamin-Feir")
    assert "_" not in feature.words


def test_the_table_has_one_row_an_interval_and_one_column_a_feature(random_scene):
    table = feature_table(random_scene)
    assert table.shape == (6, len(FEATURES))
    assert table.dtype == np.float32
    assert np.isfinite(table).all()
    names = ("coverage", "steepness")
    columns = [list(FEATURES).index(name) for name in names]
    assert np.array_equal(feature_table(random_scene, names), table[:, columns])


def test_no_feature_gives_the_recipe_away():
    assert not {"gamma", "true_steepness", "settling_periods"} & set(FEATURES)


def test_what_bounds_the_domain_needs_no_run(random_scene):
    ahead = random_scene.ahead
    first = first_look(ahead.record, ahead.distances)
    assert type(first) is FirstLook
    light = Scene(first, 1, random_scene.edges)
    assert np.array_equal(feature_table(light, BOUNDING), feature_table(random_scene, BOUNDING))
    assert np.array_equal(light.coverage(), random_scene.coverage())


# --- a regular wave: everything by hand ---


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        # a = 0.05 m: Hs = 4 a / sqrt 2, so height 2 a = Hs / sqrt 2, crest a = Hs / (2 sqrt 2)
        ("run_height", 2**-0.5),
        ("run_height_wide", 2**-0.5),
        ("full_height", 2**-0.5),
        ("linear_height", 2**-0.5),
        ("run_second_height", 2**-0.5),
        ("run_crest", 8**-0.5),
        ("run_crest_wide", 8**-0.5),
        ("full_crest", 8**-0.5),
        # envelope height 2 a
        ("run_envelope", 2**-0.5),
        ("full_envelope", 2**-0.5),
        ("linear_envelope", 2**-0.5),
        ("fed_envelope", 2**-0.5),
    ],
)
def test_heights_of_a_regular_wave(regular, name, expected):
    # by hand: energy travels 4 wavelengths in 8 periods: the first of the intervals, four periods
    # each, is fed by the record's middle and not its end
    assert value(regular, name)[0] == pytest.approx(expected, rel=0.02)


@pytest.mark.parametrize(
    ("name", "expected", "rel"),
    [
        ("steepness", np.sqrt(2) * K * 0.05, 0.005),  # kp Hs / 2 = kp 4 a / (2 sqrt 2)
        ("distance_wavelengths", 4.0, 0.005),
        ("record_periods", N * DT / TP, 0.005),
        ("samples_per_period", 16.0, 0.005),
        ("largest_height", 2**-0.5, 0.005),
        ("excess_kurtosis", -1.5, 0.01),  # <cos^4> / <cos^2>^2 - 3 = 3/2 - 3
        ("groupiness", 1.0, 0.01),  # |A| is constant
    ],
)
def test_numbers_of_a_regular_wave(regular, name, expected, rel):
    assert value(regular, name)[0] == pytest.approx(expected, rel=rel)


def test_a_regular_wave_is_not_skewed_and_has_no_noise(regular):
    assert abs(value(regular, "skewness")[0]) < 0.01
    assert value(regular, "noise_share")[0] < 0.01


def test_leads_count_from_the_issue_time(regular):
    np.testing.assert_allclose(value(regular, "lead_periods"), [0, 4, 8, 12, 16, 20], atol=1e-4)


def test_a_run_ends_where_the_record_no_longer_feeds_it(regular):
    # by hand: the last wave recorded arrives 8 periods after the issue time; what follows is the
    # record's continuation over 3 periods and then rest
    height = value(regular, "run_height")
    assert height[1] == pytest.approx(2**-0.5, rel=0.02)
    assert height[4] < 0.2 and height[5] < 0.05


def test_two_waves_beat():
    # by hand: |A|^2 = 2 a^2 (1 + cos), so <|A|^4>/<|A|^2>^2 = 3/2; the kurtosis of a sum of two
    # unrelated sines of one amplitude is 9/4
    scene = scene_of(swell(10.0, 8.0), 0.0)
    assert value(scene, "groupiness")[0] == pytest.approx(1.5, rel=0.03)
    assert value(scene, "excess_kurtosis")[0] == pytest.approx(-0.75, rel=0.03)


# --- what is covered ---


def looked(frequency, density, *, duration=600.0, distance=0.0, steepness=0.001):
    """A first look at a record of a given spectrum, TP its peak period."""
    n = int(duration / DT)
    record = Record(np.sin(2 * np.pi * np.arange(n) * DT / TP), DT)
    sea = replace(
        sea_state(record.elevation, DT), tp=TP, kp=K, steepness=steepness, depth=inf, kph=inf
    )
    return FirstLook(record, sea, Spectrum(frequency, density), np.array([distance]))


def test_coverage_of_a_single_frequency_is_the_time_its_energy_takes():
    # exact: energy at the peak needs X/cg = 70 s; the intervals of 40 s are covered fully, 30/40
    # and not at all
    first = looked([0.05, 0.1, 0.15], [0.0, 1.0, 0.0], distance=70.0 * CG)
    scene = Scene(first, 0, interval_edges(first.record.end, TP, 3))
    np.testing.assert_allclose(value(scene, "coverage"), [1, 0.75, 0], atol=0.5 / PLACES)
    np.testing.assert_allclose(value(scene, "least_coverage"), [1, 0, 0])


def test_coverage_adds_up_the_energy_of_each_frequency():
    # exact: group speeds g/(4 pi f): a wave of 5 s needs twice the time of one of 10 s; so at
    # 70 s for the latter 30 % of the energy arrive until 70 s, 70 % until 140 s
    f = np.array([0.05, 0.1, 0.15, 0.2, 0.25])
    first = looked(f, [0.0, 3.0, 0.0, 7.0, 0.0], distance=70.0 * CG)
    scene = Scene(first, 0, interval_edges(first.record.end, TP, 4))
    expected = [1, 0.7 + 0.3 * 0.75, 0.7, 0.7 * 0.5]
    np.testing.assert_allclose(value(scene, "coverage"), expected, atol=0.5 / PLACES)
    np.testing.assert_allclose(value(scene, "least_coverage"), [1, 0.7, 0.7, 0], atol=1e-6)


def test_energy_that_left_before_the_record_began_is_not_covered():
    first = looked([0.05, 0.1, 0.15], [0.0, 1.0, 0.0], duration=100.0, distance=150.0 * CG)
    scene = Scene(first, 0, interval_edges(first.record.end, TP, 5))
    # by hand: it arrives from 150 s to 250 s, 50 s to 150 s after the issue time
    np.testing.assert_allclose(value(scene, "coverage"), [0, 0.75, 1, 0.75, 0], atol=0.6 / PLACES)


def test_nothing_is_covered_at_the_sensor_after_the_issue_time(random_scene):
    scene = Scene(random_scene.ahead, 0, random_scene.edges)
    np.testing.assert_allclose(value(scene, "coverage"), 0)
    assert value(scene, "unexplained")[-1] == 1


def test_steep_seas_are_followed_less_far(random_scene):
    f = np.array([0.05, 0.1, 0.15, 0.2, 0.25])
    parts = []
    for steepness in (0.001, 0.06, 0.12):
        first = looked(f, [0.0, 3.0, 2.0, 1.0, 0.0], distance=2000.0, steepness=steepness)
        scene = Scene(first, 0, interval_edges(first.record.end, TP, 2))
        parts.append(value(scene, "unexplained")[0])
    assert parts[0] == pytest.approx(0, abs=1e-3)
    assert parts[0] < parts[1] < parts[2] < 1


# --- waves in intervals ---


@pytest.fixture
def handmade(random_scene):
    """Waves and an envelope written by hand, over a sea of Hs 2 m; intervals 0-40, 40-80 s."""
    crest_time = np.array([-5.0, 5.0, 15.0, 39.0, 41.0, 60.0, 95.0])
    height = np.array([8.0, 2.0, 3.0, 6.0, 1.0, 4.0, 5.0])
    waves = Waves(crest_time - 3, crest_time + 3, crest_time, height, 0.6 * height, 0.4 * height)
    times = np.arange(-40.0, 120.0, 1.0)
    track = Track(waves, times, 2 + 0.01 * times)
    sea = replace(random_scene.ahead.sea, hs=2.0, tp=10.0)
    scene = Scene(replace(random_scene.ahead, sea=sea), 0, np.array([0.0, 40.0, 80.0]))
    return scene, track


def test_largest_waves_of_intervals(handmade):
    scene, track = handmade
    # by hand, over Hs = 2 m
    assert scene.ranked_wave(track, "height").tolist() == [3.0, 2.0]
    assert scene.ranked_wave(track, "crest").tolist() == pytest.approx([1.8, 1.2])
    assert scene.ranked_wave(track, "height", rank=2).tolist() == [1.5, 0.5]
    # widened by 10 s at both ends: the 8 m wave at -5 s and the 6 m wave at 39 s come in
    assert scene.ranked_wave(track, "height", widen=1.0).tolist() == [4.0, 3.0]
    assert scene.ranked_wave(track, "height", widen=1.0, rank=2).tolist() == [3.0, 2.0]
    # moved by an interval
    assert scene.ranked_wave(track, "height", shift=-1).tolist() == [4.0, 3.0]
    assert scene.ranked_wave(track, "height", shift=1).tolist() == [2.0, 2.5]


def test_intervals_without_waves_are_zero(handmade):
    scene, track = handmade
    far = replace(track, waves=Waves(*[np.array([500.0])] * 6))
    assert scene.ranked_wave(far, "height").tolist() == [0, 0]
    assert scene.ranked_wave(far, "height", rank=2).tolist() == [0, 0]
    none = replace(track, waves=Waves(*[np.empty(0)] * 6))
    assert scene.ranked_wave(none, "height").tolist() == [0, 0]


def test_largest_envelope_of_intervals(handmade):
    scene, track = handmade
    # by hand: 2 + 0.01 t at 39 s and 79 s, over Hs = 2 m; a distance of 0 feeds without delay
    assert scene.largest_envelope(track).tolist() == pytest.approx([1.195, 1.395])
    assert scene.largest_envelope(track, shift=-1).tolist() == pytest.approx([0.995, 1.195])
    assert scene.largest_envelope(track, fed=True).tolist() == pytest.approx([1.195, 1.395])
    assert scene.largest_envelope(track, shift=5).tolist() == [0, 0]


@pytest.mark.parametrize("name", ["arriving_short", "arriving_long", "arriving_short_before"])
def test_a_regular_wave_arrives_at_its_own_height(regular, name):
    # exact: 2|A| = 2 a and Hs = 4 a/sqrt 2, so that the envelope height is Hs/sqrt 2 throughout;
    # the first interval lies well inside what the record feeds 4 wavelengths away (8 periods)
    assert value(regular, name)[0] == pytest.approx(1 / np.sqrt(2), rel=0.03)
    # long after the record's last waves nothing is on its way
    assert value(regular, name)[-1] < 0.05


def test_the_mean_of_what_arrives_is_what_was_recorded(random_scene):
    # exact: without a distance energy arrives when it is there, in the mean at Hs^2/2
    ahead, tp = random_scene.ahead, random_scene.ahead.sea.tp
    edges = np.arange(ahead.record.start + 8 * tp, ahead.record.end - 8 * tp, 4 * tp)
    there = Scene(ahead, 0, edges)
    for window in ("short", "long"):
        times, height = there.arriving_waves(window)
        inside = (times > edges[0]) & (times < edges[-1])
        recorded = (ahead.sensor.times > edges[0]) & (ahead.sensor.times < edges[-1])
        square = (ahead.sensor.envelope_height[recorded] ** 2).mean() / ahead.sea.hs**2
        assert (height[inside] ** 2).mean() == pytest.approx(square, rel=0.05)
        assert (there.largest_arriving(window) > there.arriving_height(window) - 1e-9).mean() > 0.9


def test_a_soliton_arrives_once_in_the_interval_of_its_speed():
    # exact (Zakharov & Shabat 1972): a envelope soliton a sech(k a omega t/sqrt 2) has one
    # eigenvalue and the carrier's speed; by hand: 20 periods before the end, 10 wavelengths away
    # (20 periods of travel), hence at the issue time
    t = DT * np.arange(N)
    centre = t[-1] - 20 * TP
    amplitude = 0.1 / K
    train = amplitude / np.cosh(0.1 * (2 * np.pi / TP) * (t - centre) / np.sqrt(2))
    record = Record(train * np.cos(2 * np.pi * (t - centre) / TP), DT)
    scene = scene_of(record, 10 * WAVELENGTH)
    found = value(scene, "arriving_soliton")
    assert found[0] > 0 and (found[2:] == 0).all()
    scale = scene.ahead.content.scale
    assert found[0] * scale == pytest.approx(0.1 / np.sqrt(8), rel=0.05)


def test_another_equation_is_carried_on_undamped(random_scene):
    ahead = random_scene.ahead
    same = carried(ahead, "dysthe-pair")
    for ours, full in zip(same.expected, ahead.full, strict=True):
        np.testing.assert_array_equal(ours.envelope_height, full.envelope_height)
    other = carried(ahead, "dysthe")
    assert not np.allclose(other.expected[1].envelope_height, ahead.full[1].envelope_height)
    assert other.linear is ahead.linear


def test_a_group_feeds_the_interval_that_its_energy_reaches(random_scene):
    scene = random_scene
    centres, travel = scene.ahead.content.centres, scene.travel_time
    assert travel == pytest.approx(16 * scene.ahead.sea.tp, rel=0.1)  # exact: 2 Tp a wavelength
    group = scene.feeding_group()
    for j in np.flatnonzero(group >= 0):
        arrival = centres[group[j]] + travel
        slack = 1.001 * scene.ahead.sea.tp
        assert scene.edges[j] - slack <= arrival < scene.edges[j + 1] + slack
    # nothing recorded feeds what comes later than the last sample's travel time and slack
    late = Scene(scene.ahead, 1, interval_edges(scene.ahead.record.end + travel + 50, TP, 3))
    assert late.feeding_group().tolist() == [-1, -1, -1]
    assert value(late, "group_eigenvalue").tolist() == [0, 0, 0]


# --- what the rest of the sea may add ---


def test_rice_exceedance_against_scipy():
    # independent code: scipy.stats.rice
    a, b = np.meshgrid(np.linspace(0, 13, 27), np.linspace(0.03, 15.5, 41))
    np.testing.assert_allclose(rice_exceedance(a, b), rice.sf(b, a), atol=2.5e-3)


def test_rice_exceedance_far_out_depends_on_the_difference():
    # independent code: scipy.stats.rice
    a = np.array([20.0, 50.0])
    np.testing.assert_allclose(rice_exceedance(a, a + 1), rice.sf(a + 1, a), atol=0.01)


def test_reach_of_a_sea_that_is_not_known_is_rayleigh(random_scene):
    # exact: no run reaches beyond a hundred intervals, so all is Gaussian: the largest of
    # WAVES_PER_INTERVAL Rayleigh heights (Longuet-Higgins 1952)
    scene = Scene(random_scene.ahead, 1, interval_edges(random_scene.ahead.record.end + 4e3, TP, 2))
    for probability in (0.5, 0.1, 0.01):
        expected = rayleigh_largest_quantile(1 - probability, WAVES_PER_INTERVAL)
        assert scene.reach(probability)[0] == pytest.approx(expected, abs=0.03)


def test_reach_rises_as_its_probability_falls(random_scene):
    assert (np.diff([random_scene.reach(p) for p in (0.9, 0.5, 0.1, 0.01)], axis=0) > 0).all()


def test_reach_is_the_envelope_where_all_is_known(regular):
    assert value(regular, "reach_50")[0] == pytest.approx(2**-0.5, rel=0.2)


# --- laws ---


@pytest.mark.parametrize("scale", [2.0, 0.37])
def test_features_know_no_scale(scale):
    # exact: Froude's law: lengths times s and times times sqrt s leave deep-water waves the same
    record = tiny_model.sea_record(dt=DT, n=1280, seed=5)
    larger = Record(scale * record.elevation, np.sqrt(scale) * DT)
    tables = []
    for one, s in ((record, 1.0), (larger, scale)):
        tables.append(feature_table(scene_of(one, 5 * WAVELENGTH * s)))
    np.testing.assert_allclose(tables[1], tables[0], rtol=1e-6, atol=1e-7)


def test_the_clock_does_not_matter():
    record = tiny_model.sea_record(dt=DT, n=1280, seed=5)
    tables = [
        feature_table(scene_of(replace(record, start=start), 5 * WAVELENGTH))
        for start in (0.0, 5000.0)
    ]
    np.testing.assert_allclose(tables[1], tables[0], rtol=1e-4, atol=1e-5)


def test_distances_asked_for_together_are_those_asked_for_alone():
    record = tiny_model.sea_record(dt=DT, n=1280, seed=5)
    distances = np.array([0.0, 4.0, 10.0]) * WAVELENGTH
    edges = interval_edges(record.end, TP, 4)
    together = look_ahead(record, distances)
    for index, distance in enumerate(distances):
        alone = feature_table(Scene(look_ahead(record, [distance]), 0, edges))
        # the runs differ in their empty margins and steps only
        np.testing.assert_allclose(
            feature_table(Scene(together, index, edges)), alone, rtol=0.02, atol=0.02
        )


def test_an_extreme_wave_is_seen_coming():
    # exact: linear waves of phases such that all crests meet 6 wavelengths downwave, 45 s after
    # the issue time (Airy 1845: k = omega^2 / g)
    t = DT * np.arange(N)
    f = np.linspace(0.07, 0.14, 60)
    amplitude = np.exp(-(((f - 0.1) / 0.015) ** 2))
    amplitude *= 0.025 / amplitude.sum()
    x, at = 6 * WAVELENGTH, t[-1] + 45.0
    k = (2 * np.pi * f) ** 2 / G
    group = np.cos(2 * np.pi * f * (t[:, None] - at) + k * x) @ amplitude
    focus = np.cos(2 * np.pi * f * np.arange(-50, 50, DT)[:, None]) @ amplitude
    background = tiny_model.sea_record(dt=DT, n=N, seed=3, hs=0.01)
    scene = scene_of(Record(group + background.elevation, DT), x)
    run = value(scene, "run_height")
    assert run.argmax() == int(45.0 // (INTERVAL_PERIODS * scene.ahead.sea.tp))
    expected = zero_crossing_waves(focus, DT).height.max()
    assert run.max() * scene.ahead.sea.hs == pytest.approx(expected, rel=0.2)


@pytest.mark.parametrize(
    ("record", "distances", "words"),
    [
        (Record(np.where(np.arange(N) == 9, np.nan, 1.0), DT), [0.0], "gaps"),
        (Record(np.sin(np.arange(400) * 2.0), 1.0), [0.0], "too coarse"),
        (swell(TP), [-1.0], "not negative"),
        (swell(TP), [500.0, 100.0], "increase"),
    ],
)
def test_what_cannot_be_looked_at_is_refused(record, distances, words):
    with pytest.raises(InputError, match=words):
        look_ahead(record, distances)
