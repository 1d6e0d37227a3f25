"""Whether a sea lies where a model was trained and verified: inside, edge, outside."""

from __future__ import annotations

import numpy as np

from forecaster.datatypes import Domain, SeaState
from forecaster.learning.events import HORIZON_COVERAGE
from forecaster.learning.features import FEATURES
from forecaster.records.quality import COARSEST

SPREAD_INSIDE, SPREAD_EDGE = 5.0, 10.0  # deg: a long-crested run loses the sea beyond
KPH_INSIDE, KPH_EDGE = 15.0, 5.0  # the model is taught in deep water
TANK_SENSOR_WORDS = "a flume or basin record is long-crested when its spread is given as 0"
_WORSE = {"inside": 0, "edge": 1, "outside": 2}
# Features whose taught range bounds the domain: up to which share of the range beyond it a value
# is still inside, and edge.  Width: wind seas with an f^-4 tail are wider than the taught ones,
# whose tail falls as f^-5; their forecasts keep skill, but less, and tend to be too low: edge.
# Noise: the white floor also holds the tail of a clean sea sampled at about 1 Hz.
_BOUNDED = {
    "steepness": (0.0, 0.10),
    "bandwidth": (0.05, 0.50),
    "peakedness": (0.0, 0.25),
    "noise_share": (0.50, 1.50),
    "distance_wavelengths": (0.0, 0.02),
}
_LOWER_BOUNDED = {"record_periods": (0.0, 0.35), "samples_per_period": (0.0, 0.30)}  # of the limit
BOUNDING = (*_BOUNDED, *_LOWER_BOUNDED, "coverage")  # features that `assess` looks at
_WORDS = {"noise_share": "sensor noise, or waves too short for the sampling,"}


def assess(
    sea: SeaState, features, names, ranges, *, criterion: str, sensor: str, beyond: bool
) -> Domain:
    """Compare a sea with what a model was taught.

    Parameters
    ----------
    sea : SeaState
        ``spread`` None if unknown.
    features : (n, f) array
        Of the intervals asked for.
    names : tuple of str
        Columns of `features`, `BOUNDING` among them.
    ranges : dict of str to (low, high)
        Of the model.
    criterion : str
        ``"height"`` or ``"crest"``.
    sensor : str
    beyond : bool
        Whether the threshold asked for is above what the model was taught.

    Returns
    -------
    Domain
        The worst of all findings, with a reason for each, the worst first.
    """
    findings = [
        _spread(sea.spread),
        _depth(sea.kph),
        *(_range(name, features, names, ranges) for name in (*_BOUNDED, *_LOWER_BOUNDED)),
        _sampling(np.asarray(features)[:, names.index("samples_per_period")]),
        _seen(np.asarray(features)[:, names.index("coverage")]),
    ]
    if criterion == "crest" and sensor == "buoy":
        findings.append(
            ("edge", "a following buoy hardly records the sharpening of crests: crests are judged "
                     "from what it does record")
        )  # fmt: skip
    if beyond:
        findings.append(
            ("edge", "the threshold is above what the model was taught: an upper bound is given")
        )
    told = sorted(
        (finding for finding in findings if finding[0] != "inside"),
        key=lambda finding: -_WORSE[finding[0]],
    )
    status = told[0][0] if told else "inside"
    return Domain(status, tuple(reason for _, reason in told))


def _spread(spread):
    if spread is None:
        return "edge", (
            "directional spread unknown: the forecast takes the sea as long-crested, and a spread "
            f"of more than {SPREAD_INSIDE:g} deg would make it too sure; {TANK_SENSOR_WORDS}"
        )
    if spread <= SPREAD_INSIDE:
        return "inside", ""
    if spread <= SPREAD_EDGE:
        return "edge", (
            f"spread {spread:g} deg: beyond {SPREAD_INSIDE:g} deg a long-crested run loses the "
            "waves within a few wavelengths"
        )
    return "outside", (
        f"spread {spread:g} deg: the model is taught on long-crested seas, up to "
        f"{SPREAD_EDGE:g} deg"
    )


def _depth(kph):
    if kph >= KPH_INSIDE:
        return "inside", ""
    status = "edge" if kph >= KPH_EDGE else "outside"
    return status, (
        f"relative depth kp h = {kph:.3g}: the model is taught in deep water (kp h of "
        f"{KPH_INSIDE:g} and more), where wave groups are more nonlinear"
    )


def _sampling(samples_per_period):
    value = float(samples_per_period.min())
    if value >= COARSEST:
        return "inside", ""
    return "outside", (
        f"{value:.3g} samples per peak period: at least {COARSEST:g} are needed to follow the waves"
    )


def _seen(coverage):
    """A period that the record hardly tells of is answered for by the taught seas as a whole."""
    unseen = int(np.count_nonzero(coverage < HORIZON_COVERAGE))
    if 2 * unseen <= coverage.size:
        return "inside", ""
    return "edge", (
        f"less than half of the waves are known in {unseen} of {coverage.size} intervals: the "
        "answer there is that of the taught long-crested seas in general, which have several times "
        "more high waves than the base rate says"
    )


def _range(name, features, names, ranges):
    values = np.asarray(features)[:, names.index(name)]
    low, high = ranges[name]
    value_low, value_high = float(values.min()), float(values.max())
    below, above = low - value_low, value_high - high
    if name in _LOWER_BOUNDED:
        inside, edge = (share * low for share in _LOWER_BOUNDED[name])
        above = 0.0
    else:
        inside, edge = (share * (high - low) for share in _BOUNDED[name])
    excess = max(below, above)
    rounding = 1e-6 * max(abs(low), abs(high))
    if excess <= inside + rounding:
        return "inside", ""
    value = value_low if below >= above else value_high
    return ("edge" if excess <= edge + rounding else "outside"), (
        f"{_WORDS.get(name, FEATURES[name].words)} {value:.3g} ({FEATURES[name].unit}): the model "
        f"is taught between {low:.3g} and {high:.3g}"
    )
