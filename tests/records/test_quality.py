import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from forecaster.datatypes import Record
from forecaster.records import quality
from forecaster.records.quality import (
    TESTS,
    check_quality,
    peak_period,
    remove_drift,
    spike_samples,
    without_spikes,
)
from forecaster.records.read import bridge_gaps, cut


def sea(rng, *, hs=2.0, tp=8.0, dt=0.5, n=3600, gamma=3.3):
    """A long-crested linear random sea, JONSWAP (Hasselmann et al. 1973), cut at 4 fp."""
    f = np.fft.rfftfreq(2 * n, dt)[1:]
    fp = 1 / tp
    width = np.where(f <= fp, 0.07, 0.09)
    density = f**-5.0 * np.exp(-1.25 * (fp / f) ** 4)
    density *= gamma ** np.exp(-0.5 * ((f - fp) / (width * fp)) ** 2) * (f < 4 * fp)
    parts = np.sqrt(density) * (rng.normal(size=f.size) + 1j * rng.normal(size=f.size))
    x = np.fft.irfft(np.concatenate(([0], parts)), 2 * n)[:n]
    return hs / 4 * (x - x.mean()) / x.std()


def flags(record):
    return {test.name: test.flag for test in check_quality(record).tests}


def detail(record, name):
    return next(test.detail for test in check_quality(record).tests if test.name == name)


def with_group(x, *, hs, tp, dt, crest, at):
    """A smooth wave group added so that its highest crest is `crest` above the mean level."""
    t = (np.arange(x.size) - at) * dt
    group = np.exp(-((t / tp) ** 2)) * np.cos(2 * np.pi * t / tp)
    return x * (1 - np.exp(-((t / (2 * tp)) ** 2))) + crest * group


@pytest.mark.parametrize("samples_per_tp", [4.5, 8, 16, 40])
@pytest.mark.parametrize("steepness", [0.02, 0.06, 0.12])
@pytest.mark.parametrize("tp", [1.2, 8.0, 14.0])
def test_good_seas_pass(samples_per_tp, steepness, tp):
    hs = 2 * steepness * 9.81 / (2 * np.pi / tp) ** 2
    rng = np.random.default_rng(3)
    dt = tp / samples_per_tp
    record = Record(sea(rng, hs=hs, tp=tp, dt=dt, n=int(150 * samples_per_tp)), dt=dt)
    report = check_quality(record)
    assert report.verdict == "pass", [t for t in report.tests if t.flag != "pass"]
    assert [t.name for t in report.tests] == list(TESTS)
    assert all(t.examined > 0 for t in report.tests)
    assert peak_period(record) == pytest.approx(tp, rel=0.1)
    assert without_spikes(record) is record


def test_a_big_wave_is_no_spike():
    # published: extreme waves have H > 2 to 2.2 Hs or a crest > 1.25 Hs (Haver 2000; Dysthe,
    # Krogstad & Müller 2008); the 4-sigma rule of the IOOS manual (2019) would flag this crest
    hs, tp, dt = 8.0, 12.0, 0.5
    x = sea(np.random.default_rng(4), hs=hs, tp=tp, dt=dt)
    x = with_group(x, hs=hs, tp=tp, dt=dt, crest=1.4 * hs, at=2000)
    record = Record(x, dt=dt)
    near = x[1950:2050]
    assert np.ptp(near) > 2.3 * hs and near.max() == pytest.approx(1.4 * hs)
    assert (np.abs(x) > 4 * x.std()).any()
    report = check_quality(record)
    assert report.verdict == "pass", [t for t in report.tests if t.flag != "pass"]
    for step in (without_spikes, lambda r: bridge_gaps(r, longest=3.0)):
        assert step(record).elevation.tobytes() == x.tobytes()
    assert remove_drift(record).elevation.tobytes() == x.tobytes()


@given(
    st.floats(4.2, 40), st.floats(0.5, 20), st.floats(0, 2 * np.pi), st.floats(0.8, 1.6),
    st.floats(0.4, 2), st.sampled_from([0.001, 0.05, 1.0]), st.integers(0, 10**6),
)  # fmt: skip
@settings(max_examples=150)
def test_no_smooth_wave_of_any_height_is_a_spike(rate, crest, phase, tune, width, calm, seed):
    tp, hs = 9.0, 2.0
    dt = tp / rate
    n = int(60 * rate)
    x = calm * sea(np.random.default_rng(seed), hs=hs, tp=tp, dt=dt, n=n)
    t = (np.arange(n) - n / 2) * dt / tp
    x = x + crest * hs * np.exp(-((t / width) ** 2)) * np.cos(2 * np.pi * tune * t + phase)
    assert not spike_samples(Record(x, dt=dt)).any()


@pytest.mark.parametrize("rate", [8, 16, 40])
@pytest.mark.parametrize("size", [2.0, 4.0, 100.0])
def test_spikes_are_found_where_they_are_and_nowhere_else(rate, size):
    hs, tp = 2.0, 8.0
    dt = tp / rate
    rng = np.random.default_rng(5)
    x = sea(rng, hs=hs, tp=tp, dt=dt, n=int(200 * rate))
    where = np.sort(rng.choice(np.arange(20, x.size - 20, 12), 6, replace=False))
    spoiled = x.copy()
    spoiled[where] += size * hs * rng.choice([-1, 1], 6)
    record = Record(spoiled, dt=dt)
    assert np.flatnonzero(spike_samples(record)).tolist() == where.tolist()
    assert flags(record)["spike"] == "suspect"
    assert check_quality(record).verdict == "suspect"
    assert f"6 sample(s) jump against their neighbours, at {where[0] * dt:.8g} s" in detail(
        record, "spike"
    )
    mended = without_spikes(record)
    assert np.flatnonzero(np.isnan(mended.elevation)).tolist() == where.tolist()
    assert mended.history[0].startswith("6 spike sample(s) taken out as gaps")
    bridged = bridge_gaps(mended, longest=tp / 4)
    np.testing.assert_allclose(bridged.elevation, x, atol=0.35 * hs if rate == 8 else 0.06 * hs)


def test_a_spike_lasts_less_than_a_tenth_of_a_period():
    # by hand: Tp/10 is 4 samples here
    x = sea(np.random.default_rng(6), tp=8.0, dt=0.2, n=6000)
    for width, found in ((3, True), (4, True), (5, False), (30, False)):
        spoiled = x.copy()
        spoiled[3000 : 3000 + width] += 30.0
        samples = spike_samples(Record(spoiled, dt=0.2))
        assert (samples[3000 : 3000 + width].all() and samples.sum() == width) == found
        assert samples.any() == found
    longer = x.copy()
    longer[3000:] += 4.0  # a step is a shift of the level, no spike
    assert not spike_samples(Record(longer, dt=0.2)).any()


def test_many_spikes_fail():
    rng = np.random.default_rng(7)
    x = sea(rng)
    x[rng.choice(np.arange(10, x.size - 10, 8), 150, replace=False)] += 40.0
    assert flags(Record(x, dt=0.5))["spike"] == "fail"


def test_noise_is_no_spike():
    rng = np.random.default_rng(8)
    x = sea(rng, dt=0.1, n=18000) + 0.1 * rng.normal(size=18000)
    assert not spike_samples(Record(x, dt=0.1)).any()


def test_spikes_at_the_ends_and_flat_records_raise_nothing():
    x = sea(np.random.default_rng(9))
    x[-1] += 50
    x[0] += 50
    spike_samples(Record(x, dt=0.5))
    for values in (np.zeros(500), np.full(500, np.nan), np.array([1.0, -1.0])):
        report = check_quality(Record(values, dt=0.5))
        assert report.verdict == "fail"
        assert {t.flag for t in report.tests if t.examined == 0} <= {"not evaluated"}


def test_forty_percent_gaps_fail():
    # published: percent good >= 90 % (IOOS manual 2019)
    x = sea(np.random.default_rng(10))
    for start in range(0, 3600, 100):
        x[start : start + 40] = np.nan
    record = Record(x, dt=0.5)
    assert flags(record)["percent_good"] == "fail"
    assert flags(record)["gap"] == "suspect"
    assert "60 % of the samples are good, at least 90 % are needed" in detail(
        record, "percent_good"
    )
    assert "1440 of 3600 samples missing, the longest gap 20 s" in detail(record, "gap")


@pytest.mark.parametrize(("missing", "flag"), [(359, "pass"), (361, "fail")])
def test_percent_good_at_its_limit(missing, flag):
    x = sea(np.random.default_rng(11))
    x[100 : 100 + missing] = np.nan
    assert flags(Record(x, dt=0.5))["percent_good"] == flag


def test_flat_lines():
    x = sea(np.random.default_rng(12))
    for samples, flag in ((6, "pass"), (12, "suspect"), (60, "fail")):  # Tp is 16 samples
        stuck = x.copy()
        stuck[1000 : 1000 + samples] = stuck[1000]
        assert flags(Record(stuck, dt=0.5))["flat_line"] == flag
    assert flags(Record(np.full(3600, 0.3), dt=0.5))["flat_line"] == "fail"
    assert check_quality(Record(np.full(3600, 0.3), dt=0.5)).verdict == "fail"


def test_a_stuck_sensor_is_found_although_the_drift_was_taken_out():
    # exact: 60 samples of one value; the polynomial that the stuck part itself tilts hides them
    x = sea(np.random.default_rng(12))
    x[1000:1060] = 1.5 * x.std()
    as_read = Record(x + 1e-3 * np.arange(x.size) * np.ones(x.size), dt=0.5)
    as_read = as_read.step("stuck", elevation=np.where(
        (np.arange(x.size) >= 1000) & (np.arange(x.size) < 1060), 3.0, as_read.elevation
    ))  # fmt: skip
    level = remove_drift(as_read)
    assert {t.name: t.flag for t in check_quality(level).tests}["flat_line"] == "pass"
    tests = check_quality(level, as_read=as_read).tests
    assert {t.name: t.flag for t in tests}["flat_line"] == "fail"


def test_a_fill_value_is_told_as_it_stands_in_the_file():
    # by hand: six samples of -9999 pull the mean of 3600 down by 17 m, the median by nothing
    x = sea(np.random.default_rng(13))
    x[500:506] = -9999.0
    as_read = Record(x - x.mean(), dt=0.5)
    tests = check_quality(remove_drift(as_read), as_read=as_read).tests
    (told,) = [t for t in tests if t.name == "range"]
    assert told.flag == "fail"
    assert told.detail.startswith("6 value(s) beyond 40 m, the first -9999 m at 250 s")


def test_a_step_that_no_waves_are_sampled_with_names_the_unit_of_time():
    assert "check the unit of time" in detail(Record([0.0, 1.0, 0.0, 2.0], dt=500.0),
                                              "record_length")  # fmt: skip


def test_wrong_units_fail_with_the_remedy():
    x = sea(np.random.default_rng(13))
    millimetres = Record(1000 * x, dt=0.5)
    assert check_quality(millimetres).verdict == "fail"
    assert flags(millimetres)["steepness"] == "fail"
    assert "was another unit (mm, cm, ft) read as metres? give the true unit" in detail(
        millimetres, "steepness"
    )
    assert flags(millimetres)["acceleration"] == flags(millimetres)["range"] == "fail"
    small = Record(x / 1000, dt=0.5)
    assert flags(small)["steepness"] == "fail"
    assert "were metres read as mm or cm? give the true unit" in detail(small, "steepness")
    hinted = check_quality(millimetres, unit_hint="m").tests
    assert all(
        t.detail.endswith("(it was read as m)")
        for t in hinted
        if t.name in ("range", "bulk_range", "steepness")
    )


def test_undeclared_fill_values_fail_with_the_remedy():
    x = sea(np.random.default_rng(14))
    x[500:530] = 9999.0
    record = Record(x, dt=0.5)
    assert flags(record)["range"] == "fail"
    assert "30 value(s) beyond 40 m, the first 9999 m at 250 s" in detail(record, "range")
    assert "declare the fill value" in detail(record, "range")
    x[500:530] = 0.1
    x[500] = 9999.0  # one alone is a spike, and goes
    assert flags(Record(x, dt=0.5))["range"] == "suspect"


@pytest.mark.parametrize(
    ("seconds", "tp", "flag"), [(180, 10, "fail"), (180, 7, "suspect"), (600, 10, "pass")]
)
def test_length_counts_in_peak_periods(seconds, tp, flag):
    x = sea(np.random.default_rng(15), hs=0.02 * tp**2, tp=tp, n=2 * seconds)
    record = Record(x, dt=0.5)
    assert flags(record)["record_length"] == flag
    if flag != "pass":
        assert "record at least" in detail(record, "record_length")


def test_half_a_hertz_is_too_slow_for_a_sea_of_four_seconds():
    x = sea(np.random.default_rng(16), hs=0.8, tp=4.0, dt=0.25, n=8 * 1800)[::8]
    record = Record(x, dt=2.0)
    assert check_quality(record).verdict == "fail"
    assert flags(record)["sampling"] == "fail"
    assert "samples per peak period, at least 4 are needed: sample at" in detail(record, "sampling")


def test_accelerations_above_half_of_gravity():
    # published: limit M g, M <= 1/2 (IOOS manual 2019).  exact: a sine of amplitude a has
    # accelerations up to omega^2 a, beyond the limit for the share 1 - (2/pi) asin(limit/peak)
    t = 0.05 * np.arange(40000)
    omega = 2 * np.pi / 8
    for ratio in (0.9, 1.5):
        a = ratio * 0.5 * 9.81 / omega**2
        test = quality.acceleration(Record(a * np.sin(omega * t), dt=0.05))
        share = 0.0 if ratio < 1 else 1 - 2 / np.pi * np.arcsin(1 / ratio)
        assert test.failed / test.examined == pytest.approx(share, abs=0.02)
        assert test.flag == ("pass" if ratio < 1 else "fail")


def test_shift_of_the_level():
    # by hand: sigma is Hs/4 = 0.5 m
    x = sea(np.random.default_rng(17), hs=2.0)
    for shift, flag in ((0.05, "pass"), (0.4, "suspect"), (1.0, "fail")):
        moved = x.copy()
        moved[1800:] += shift
        assert flags(Record(moved, dt=0.5))["segment_shift"] == flag


def test_energy_at_low_and_at_high_frequencies():
    rng = np.random.default_rng(18)
    x = sea(rng, hs=2.0)
    t = 0.5 * np.arange(x.size)
    # by hand: variance of the sine a^2/2 against 0.25 m2 of the sea
    slow = Record(x + 0.3 * np.sin(2 * np.pi * t / 60), dt=0.5)
    assert flags(slow)["low_frequency_energy"] == "suspect"
    assert flags(Record(x, dt=0.5))["low_frequency_energy"] == "pass"
    noisy = Record(x + 0.5 * rng.normal(size=x.size), dt=0.5)
    assert flags(noisy)["operational_frequency"] == "pass"  # a fifth of half: 10 %
    rattling = Record(x + 0.3 * (-1.0) ** np.arange(x.size), dt=0.5)
    assert flags(rattling)["operational_frequency"] == "suspect"


def test_a_rising_sea_is_suspect():
    x = sea(np.random.default_rng(19)) * np.linspace(0.5, 1.5, 3600)
    assert flags(Record(x, dt=0.5))["hs_trend"] == "suspect"
    assert "use a shorter window" in detail(Record(x, dt=0.5), "hs_trend")


@pytest.mark.parametrize("hours", [0.5, 6])
def test_tide_is_removed_and_waves_are_not(hours):
    # exact: a lunar tide (12.42 h) of 3 m range under a known sea
    n = int(hours * 7200)
    t = 0.5 * np.arange(n)
    x = sea(np.random.default_rng(20), hs=2.0, n=n)
    tide = 1.5 * np.sin(2 * np.pi * t / (12.42 * 3600) + 0.4)
    record = remove_drift(Record(x + tide - tide.mean(), dt=0.5))
    assert np.abs(record.elevation - x).max() < 0.04 * 2.0
    assert "level, tide and drift removed: polynomial of order" in record.history[0]


def test_the_last_waves_are_not_attenuated():
    # exact: a sine plus a straight line; a plain cubic moves the last waves by over 3 %
    tp, dt = 10.0, 0.5
    t = dt * np.arange(1200)
    wave = np.sin(2 * np.pi * t / tp)
    record = remove_drift(Record(wave + 0.002 * t, dt=dt))
    last = slice(-int(2 * tp / dt), None)
    assert np.abs(record.elevation - wave)[last].max() < 0.01
    plain = np.polynomial.legendre.Legendre.fit(t, wave + 0.002 * t, 3)(t)
    assert np.abs(wave + 0.002 * t - plain - wave)[last].max() > 0.03


def test_a_spike_moves_neither_level_nor_drift():
    # exact: the sea without the spike, about its own mean
    x = sea(np.random.default_rng(23))
    spoiled = x.copy()
    spoiled[700] = 9999.0
    record = without_spikes(remove_drift(Record(spoiled - spoiled.mean(), dt=0.5)))
    np.testing.assert_allclose(np.delete(record.elevation, 700), np.delete(x, 700), atol=0.02)
    assert check_quality(record).verdict == "pass"


def test_drift_removal_leaves_a_level_sea_byte_for_byte():
    x = sea(np.random.default_rng(21))
    x[100:120] = np.nan
    record = remove_drift(Record(x, dt=0.5))
    assert record.elevation.tobytes() == x.tobytes()
    assert "no drift removed" in record.history[0]


@given(st.integers(400, 1000), st.lists(st.floats(-50, 50), min_size=1, max_size=50))
@settings(max_examples=20)
def test_the_chain_after_the_cut_knows_nothing_of_later_samples(n, later):
    x = sea(np.random.default_rng(22), n=1000)[:n]
    at = 0.5 * (n - 1)
    results = []
    for values in (x, np.concatenate((x, later))):
        # cut() removes the mean once, from the cut record: start from one that needs cutting
        record = remove_drift(cut(Record(np.append(values, 9.0), dt=0.5), at=at))
        results.append((check_quality(record), without_spikes(record).elevation.tobytes()))
    assert results[0] == results[1]


@given(st.data())
@settings(max_examples=200)
def test_any_record_can_be_judged(data):
    n = data.draw(st.integers(2, 400))
    rng = np.random.default_rng(data.draw(st.integers(0, 10**6)))
    x = data.draw(st.sampled_from([0.0, 1e-9, 1.0, 1e6])) * rng.normal(size=n)
    x += np.cumsum(x) * data.draw(st.sampled_from([0.0, 1.0]))
    x = np.round(x, data.draw(st.sampled_from([-6, 0, 12])))
    x[rng.random(n) < data.draw(st.sampled_from([0.0, 0.1, 0.9, 1.0]))] = np.nan
    record = Record(x, dt=data.draw(st.sampled_from([0.01, 0.5, 60.0])))
    for step in (remove_drift, without_spikes, lambda r: bridge_gaps(r, longest=1.0)):
        record = step(record)
        report = check_quality(record)
        assert len(report.tests) == len(TESTS)
        assert all(t.detail and "nan" not in t.detail for t in report.tests)
    assert not np.isnan(record.elevation).any()
