"""Forecasts made by hand, to test what is shown of them without computing one."""

from dataclasses import replace
from math import exp, inf

import numpy as np

from forecaster.datatypes import (
    Domain,
    Exceedance,
    Forecast,
    GroupForecast,
    IntervalForecast,
    ModelIdentity,
    QualityReport,
    QualityTest,
    Reason,
    Record,
    SeaState,
    Target,
)

END = 1935371050.0  # 2031-05-01T03:04:10Z
HS, TP, DT = 4.2, 10.0, 0.5

GOOD = QualityReport(
    "pass",
    (
        QualityTest("gap", "pass", 3600, 0, "no sample is missing"),
        QualityTest("spike", "pass", 3600, 0, "no sample jumps against its neighbours"),
        QualityTest("hs_trend", "not evaluated", 0, 0, "too short"),
    ),
)
BAD = QualityReport(
    "fail",
    (
        QualityTest("gap", "pass", 3600, 0, "no sample is missing"),
        QualityTest("spike", "fail", 3600, 190, "190 samples jump: check sensor and telemetry"),
    ),
)
SEA = SeaState(
    hs=HS, tp=TP, tm01=8.3, tm02=7.8, kp=0.0402, steepness=0.0845, bandwidth=0.39, qp=3.1,
    bfi=0.33, bfi_depth=0.33, kph=inf, depth=inf, spread=None, hs_error=0.06,
)  # fmt: skip
CAVEATS = (
    "It supports and does not replace marine-operations guidance, weather-routing advice and the "
    "judgement of the responsible person.",
    "The probability is at a point, about the mean level of the record.",
)


def record(*, calendar=True, source="skerry-upwave.csv", end=END):
    """Half an hour of random waves, the largest of them late."""
    generator = np.random.default_rng(7)
    n = 3600
    t = DT * np.arange(n)
    frequency = np.linspace(0.07, 0.2, 160)
    amplitude = (frequency / 0.1) ** -2.5 * np.exp(-0.6 * (frequency / 0.1) ** -4)
    phase = generator.uniform(0, 2 * np.pi, frequency.size)
    eta = (amplitude * np.cos(2 * np.pi * np.outer(t, frequency) + phase)).sum(axis=1)
    eta *= HS / 4 / eta.std()
    start = (end if calendar else n * DT) - (n - 1) * DT
    return Record(eta, dt=DT, start=start, calendar=calendar, source=source, sensor="fixed")


def exceedance(scale):
    """Rows over 0.6 .. 2.8 Hs."""
    return tuple(
        Exceedance(k, k * HS, 1 - exp(-scale * exp(-2 * k * k)), 1 - exp(-50 * exp(-2.2 * k * k)))
        for k in np.arange(0.6, 2.81, 0.1)
    )


def forecast(*, calendar=True, issued_after=130.0, source="skerry-upwave.csv", **changes):
    """An answered forecast 1500 m downwave: 4.2 % against a base rate of 0.76 %."""
    made = record(calendar=calendar, source=source)
    end = made.end
    chances = (0.0004, 0.0002, 0.0011, 0.0031, 0.021, 0.016, 0.0012, 0.0004, 0.0005, 0.0006)
    coverage = (0.99, 0.99, 0.98, 0.97, 0.95, 0.9, 0.82, 0.74, 0.62, 0.52)
    intervals = tuple(
        IntervalForecast(end + 40 * j, end + 40 * j + 40, 40.0 * j, p, 0.00076, c, 4.6 + 30 * p)
        for j, (p, c) in enumerate(zip(chances, coverage, strict=True))
    )
    answer = Forecast(
        issued_at=END + issued_after,
        record=made,
        quality=GOOD,
        sea_state=SEA,
        target=Target(1500.0, 192.0, end, end + 400, "height", 2.0, 2 * HS),
        probability=0.042,
        probability_90=(0.021, 0.079),
        base_rate=0.0076,
        base_rate_known_hs=0.0031,
        odds_ratio=5.7,
        intervals=intervals,
        exceedance=exceedance(140),
        groups=(
            GroupForecast(end - 20, end + 172, 60.0, 6.9, (0.4j, 0.1 + 0.2j), 900.0, 1.6),
            GroupForecast(end - 300, end - 108, 45.0, 5.1, (), None, None),
        ),
        reasons=(Reason("wave group of the run", 2.1), Reason("steepness of the sea", -0.3)),
        domain=Domain("edge", ("directional spread is not known",)),
        caveats=CAVEATS,
        model=ModelIdentity("open-sea", "1", "ab" * 32),
        program_version="0.1.0",
        answered=True,
    )
    return replace(answer, **changes)


def unanswered(*, quality=GOOD, **changes):
    """No forecast: outside the model, or, with `quality` failed, without a sea state."""
    answer = forecast(**changes)
    failed = quality.verdict == "fail"
    return replace(
        answer,
        quality=quality,
        sea_state=None if failed else SEA,
        target=None if failed else answer.target,
        probability=None,
        probability_90=None,
        base_rate=None if failed else 0.0076,
        base_rate_known_hs=None if failed else 0.0031,
        odds_ratio=None,
        intervals=()
        if failed
        else tuple(replace(item, probability=None) for item in answer.intervals),
        exceedance=()
        if failed
        else tuple(replace(item, probability=None) for item in answer.exceedance),
        groups=(),
        reasons=(),
        domain=Domain("inside") if failed else Domain("outside", ("steepness 0.21 above 0.14",)),
        model=None,
        answered=False,
    )
