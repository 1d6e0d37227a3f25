from math import inf

import numpy as np
import pytest

from forecaster.datatypes import Record, SeaState
from forecaster.learning.domain import BOUNDING, assess
from forecaster.learning.events import interval_edges
from forecaster.learning.features import Scene, feature_table, first_look

TAUGHT = {
    "steepness": (0.02, 0.12),
    "bandwidth": (0.2, 0.4),
    "peakedness": (1.5, 5.5),
    "noise_share": (0.0, 0.1),
    "distance_wavelengths": (0.0, 50.0),
    "record_periods": (40.0, 128.0),
    "samples_per_period": (5.0, 16.0),
    "coverage": (0.0, 1.0),
}
USUAL = {
    "steepness": 0.07, "bandwidth": 0.3, "peakedness": 3.0, "noise_share": 0.01,
    "distance_wavelengths": 10.0, "record_periods": 100.0, "samples_per_period": 16.0,
    "coverage": 1.0,
}  # fmt: skip


def judged(*, spread=0.0, kph=inf, criterion="height", sensor="fixed", beyond=False, **values):
    """Domain of a usual sea with some values changed."""
    sea = SeaState(
        hs=3.0, tp=10.0, tm01=8.3, tm02=7.8, kp=0.04, steepness=0.06, bandwidth=0.3, qp=3.0,
        bfi=0.3, bfi_depth=0.3, kph=kph, depth=kph / 0.04, spread=spread, hs_error=0.06,
    )  # fmt: skip
    row = [{**USUAL, **values}[name] for name in BOUNDING]
    return assess(
        sea, np.array([row, row]), BOUNDING, TAUGHT,
        criterion=criterion, sensor=sensor, beyond=beyond,
    )  # fmt: skip


def test_every_bounding_feature_is_examined_here():
    assert set(BOUNDING) == set(TAUGHT) == set(USUAL)


def test_a_usual_sea_is_inside_and_has_no_reasons():
    domain = judged()
    assert (domain.status, domain.reasons) == ("inside", ())


@pytest.mark.parametrize(
    ("spread", "status", "words"),
    [
        (0.0, "inside", None),
        (5.0, "inside", None),
        (7.0, "edge", "spread 7 deg"),
        (10.0, "edge", "spread 10 deg"),
        (12.0, "outside", "spread 12 deg"),
        (None, "edge", "spread unknown"),
    ],
)
def test_directional_spread(spread, status, words):
    domain = judged(spread=spread)
    assert domain.status == status
    assert (domain.reasons == ()) if words is None else (words in domain.reasons[0])


def test_unknown_spread_says_what_would_help():
    assert "given as 0" in judged(spread=None).reasons[0]


@pytest.mark.parametrize(
    ("kph", "status"),
    [(inf, "inside"), (20.0, "inside"), (8.0, "edge"), (5.0, "edge"), (3.0, "outside")],
)
def test_relative_depth(kph, status):
    # The cubic coefficient that makes groups focus is 0.95, 0.79 and 0.64 of its deep-water value
    # at kp h = 20, 5, 3 (published: Hasimoto & Ono 1972): "deep" for it is not lambda/2.
    domain = judged(kph=kph)
    assert domain.status == status
    if status != "inside":
        assert f"kp h = {kph:g}" in domain.reasons[0]


@pytest.mark.parametrize(
    ("name", "value", "status"),
    [
        # by hand: edge is a tenth of the range 0.10 beyond it
        ("steepness", 0.12, "inside"),
        ("steepness", 0.125, "edge"),
        ("steepness", 0.135, "outside"),
        ("steepness", 0.015, "edge"),
        ("steepness", 0.005, "outside"),
        # a twentieth of 0.2, a half
        ("bandwidth", 0.405, "inside"),
        ("bandwidth", 0.44, "edge"),
        ("bandwidth", 0.51, "outside"),
        # a quarter of 4
        ("peakedness", 6.4, "edge"),
        ("peakedness", 6.6, "outside"),
        # half of 0.1, one and a half
        ("noise_share", 0.14, "inside"),
        ("noise_share", 0.24, "edge"),
        ("noise_share", 0.26, "outside"),
        # a fiftieth of 50 wavelengths
        ("distance_wavelengths", 50.0, "inside"),
        ("distance_wavelengths", 50.9, "edge"),
        ("distance_wavelengths", 51.1, "outside"),
        # too short by up to 35 % of 40 Tp, too coarse by up to 30 % of 5; more is never wrong
        ("record_periods", 30.0, "edge"),
        ("record_periods", 25.0, "outside"),
        ("record_periods", 1e4, "inside"),
        ("samples_per_period", 4.0, "edge"),
        ("samples_per_period", 100.0, "inside"),
    ],
)
def test_ranges(name, value, status):
    domain = judged(**{name: value})
    assert domain.status == status
    assert len(domain.reasons) == (status != "inside")


@pytest.mark.parametrize(
    ("tail", "noise", "rate"), [(4, 0.0, 1.0), (4, 0.0, 1.28), (4, 0.03, 4.0), (5, 0.03, 1.0)]
)
def test_an_ordinary_wind_sea_is_never_outside_the_shipped_domain(tail, noise, rate):
    # published: f^-4 (Donelan, Hamilton & Hui 1985) and f^-5 (Pierson & Moskowitz 1964) tails;
    # ranges as a model taught on computed seas has them (bandwidth to 0.34, noise to 0.117)
    rng = np.random.default_rng(int(10 * rate) + tail)
    tp, n = 10.0, int(1500 * rate)
    frequency = np.fft.rfftfreq(16 * n, 1 / rate / 8)
    density = np.zeros(frequency.size)
    waves = frequency > 0.3 / tp
    density[waves] = frequency[waves] ** -tail * np.exp(
        -(tail / 4) * (frequency[waves] * tp) ** -4.0
    )
    parts = rng.standard_normal((2, frequency.size))
    sea = np.fft.irfft(np.sqrt(density) * (parts[0] + 1j * parts[1]))[::8][:n]
    sea *= 3.0 / (4 * sea.std())
    record = Record(sea + noise * sea.std() * rng.standard_normal(n), dt=1 / rate)
    first = first_look(record, [0.0])
    scene = Scene(first, 0, interval_edges(record.end, first.sea.tp, 1))
    taught = {**TAUGHT, "bandwidth": (0.19, 0.34), "noise_share": (0.0, 0.117)}
    domain = assess(
        first.sea, feature_table(scene, BOUNDING), BOUNDING, taught,
        criterion="height", sensor="fixed", beyond=False,
    )  # fmt: skip
    assert domain.status != "outside", domain.reasons


def test_fewer_samples_than_an_envelope_needs_are_outside():
    # exact: a complex envelope in the band 0 to 2 fp takes four samples per peak period
    domain = judged(samples_per_period=3.9)
    assert domain.status == "outside"
    assert any("at least 4 are needed" in reason for reason in domain.reasons)


@pytest.mark.parametrize(
    ("coverage", "status"), [([1.0, 0.0], "inside"), ([0.4, 0.0], "edge"), ([0.0], "edge")]
)
def test_a_period_that_the_record_hardly_tells_of_is_edge(coverage, status):
    rows = np.array([[{**USUAL, "coverage": c}[name] for name in BOUNDING] for c in coverage])
    sea = SeaState(
        hs=3.0, tp=10.0, tm01=8.3, tm02=7.8, kp=0.04, steepness=0.06, bandwidth=0.3, qp=3.0,
        bfi=0.3, bfi_depth=0.3, kph=inf, depth=inf, spread=0.0, hs_error=0.06,
    )  # fmt: skip
    domain = assess(sea, rows, BOUNDING, TAUGHT, criterion="height", sensor="fixed", beyond=False)
    assert domain.status == status


def test_a_reason_names_quantity_value_unit_and_range():
    (reason,) = judged(record_periods=25.0).reasons
    assert "length of the record 25 (Tp)" in reason
    assert "between 40 and 128" in reason


def test_crests_from_a_following_buoy_are_edge():
    # published: a buoy that follows the water cancels the sum-frequency part (Longuet-Higgins 1986)
    assert judged(criterion="crest", sensor="buoy").status == "edge"
    assert judged(criterion="height", sensor="buoy").status == "inside"
    assert judged(criterion="crest", sensor="radar").status == "inside"


def test_a_threshold_beyond_the_taught_ones_is_edge_and_an_upper_bound():
    domain = judged(beyond=True)
    assert domain.status == "edge"
    assert "upper bound" in domain.reasons[0]


def test_the_worst_finding_decides_and_all_are_told():
    domain = judged(spread=7.0, kph=3.0, steepness=0.125, beyond=True)
    assert domain.status == "outside"
    assert len(domain.reasons) == 4


def test_the_worst_reason_is_told_first():
    domain = judged(spread=None, kph=3.0)
    assert domain.status == "outside"
    assert "kp h = 3" in domain.reasons[0] and "spread unknown" in domain.reasons[1]
