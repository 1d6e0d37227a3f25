"""Answers in words: for a tired person at three in the morning, and as a page for the file.

The first line is the answer.  Every text carries the caveats of its forecast, and no text ever
calls a sea harmless: a low probability is not permission.

>>> percent(0.0423), one_in(0.0423), compared(5.6)
('4.2 %', '1 in 24', 'much more likely than')
"""

from __future__ import annotations

import textwrap
from html import escape
from math import exp, floor, inf, isinf, log10

from forecaster.datatypes import (
    Forecast,
    IntervalForecast,
    QualityReport,
    Record,
    SeaState,
    WaveStatistics,
)
from forecaster.serialize import utc_text
from forecaster.waves.scattering_spectrum import LocatedEigenvalue, ScatteringSpectrum

WIDTH = 92
FIGURE_LINE, FIGURE_FOOT = 125, 215  # columns of the notes in a figure
LONGEST_TABLE = 12  # intervals; all of them are in the JSON document
LARGEST_GROUPS = 4
LARGEST_EIGENVALUES = 6
STANDS_OUT = 2.0  # times the base rate
LOW = 0.1  # below it a reader may take the answer for a permission

# Lowest probability for each word.  No word below says that nothing will happen.
LIKELIHOOD = (
    (0.9, "almost certain"),
    (0.5, "more likely than not"),
    (0.1, "a serious possibility"),
    (0.01, "possible"),
    (0.0, "rare, not excluded"),
)
# Lowest odds ratio for each phrase, "... than/as in an ordinary sea".
COMPARISON = (
    (10.0, "very much more likely than"),
    (3.0, "much more likely than"),
    (1.5, "more likely than"),
    (1 / 1.5, "about as likely as"),
    (1 / 3.0, "less likely than"),
    (0.0, "much less likely than"),
)


def percent(probability: float) -> str:
    """A probability in percent, two digits, never "0 %" and never "100 %".

    >>> [percent(p) for p in (0.42, 0.00042, 0.0, 0.9996)]
    ['42 %', '0.042 %', 'below 0.0001 %', 'above 99.9 %']
    """
    if probability < 1e-6:
        return "below 0.0001 %"
    if probability > 0.999:
        return "above 99.9 %"
    if probability > 0.99:
        return f"{100 * probability:.1f} %"
    return f"{_two_digits(100 * probability)} %"


def one_in(probability: float) -> str:
    """A probability as a natural frequency.

    >>> [one_in(p) for p in (0.7, 0.3, 0.042, 0.00031, 0.0, 0.98)]
    ['7 in 10', '1 in 3.3', '1 in 24', '1 in 3200', 'fewer than 1 in a million', 'over 9 in 10']
    """
    if probability < 1e-6:
        return "fewer than 1 in a million"
    if probability > 0.95:
        return "over 9 in 10"
    if probability >= 0.5:
        return f"{10 * probability:.0f} in 10"
    return f"1 in {_two_digits(1 / probability)}"


def likelihood(probability: float) -> str:
    """The word of `LIKELIHOOD` for a probability.

    >>> likelihood(0.3)
    'a serious possibility'
    """
    return next(word for lowest, word in LIKELIHOOD if probability >= lowest)


def compared(odds_ratio: float) -> str:
    """The phrase of `COMPARISON` for the odds against those of an ordinary sea.

    >>> compared(1.0)
    'about as likely as'
    """
    return next(phrase for lowest, phrase in COMPARISON if odds_ratio >= lowest)


def off_axis_caveat(off_axis_deg: float, distance: float) -> str:
    """What to say about a target that does not lie straight downwave.

    >>> off_axis_caveat(12.0, 1467.2)
    'The target lies 12 deg off the direction of the waves: 1467 m along the waves are used.'
    """
    return (
        f"The target lies {abs(off_axis_deg):.0f} deg off the direction of the waves: "
        f"{distance:.0f} m along the waves are used."
    )


def forecast_text(forecast: Forecast) -> str:
    """The whole answer as plain ASCII text, the most important first.

    Parameters
    ----------
    forecast : Forecast

    Returns
    -------
    str
        Lines of at most 100 columns, ending with a line break.
    """
    facts = [
        ("Record", _record_line(forecast.record)),
        ("Quality", _quality_line(forecast.quality)),
    ]
    if forecast.sea_state is not None:
        facts.append(("Sea", _sea_line(forecast.sea_state)))
    if groups := _groups_line(forecast):
        facts.append(("Groups", groups))
    if forecast.reasons:
        facts.append(("Why", _reasons_line(forecast)))
    if forecast.model is not None:
        facts.append(("Model", _model_line(forecast)))
    facts.append(("Issued", f"{_stamp(forecast.issued_at)} by trikymia {forecast.program_version}"))
    parts = [
        _outdated(forecast),
        _rows(_answer(forecast) if forecast.answered else _no_forecast(forecast)),
        _interval_table(forecast),
        _rows(facts),
        [_CAVEATS_HEAD, *_bullets(forecast.caveats)],
    ]
    return _joined(parts)


def figure_notes(forecast: Forecast) -> tuple[str, str]:
    """What a figure must say besides the answer: below its title, and at its foot.

    Parameters
    ----------
    forecast : Forecast

    Returns
    -------
    head : str
        Period, and what limits the answer: expired, suspect, edge, or why there is none.
    foot : str
        The caveats, and by what and when the figure was made.
    """
    lines = [" ".join(_outdated(forecast))]
    if forecast.target is not None:
        target = forecast.target
        lines.append(f"Period {_between(target.valid_from, target.valid_to, forecast.record)}")
    if not forecast.answered:
        lines.append(dict(_no_forecast(forecast))["NO FORECAST"])
    elif forecast.domain.status != "inside":
        lines.append(_domain(forecast))
    if forecast.quality.verdict == "suspect":
        lines.append(f"SUSPECT record: {_flagged(forecast.quality, 'suspect')}")
    issued = f"Issued {_stamp(forecast.issued_at)} by trikymia {forecast.program_version}"
    if forecast.model is not None:
        issued += f", model {_model_line(forecast)}"
    foot = " ".join(forecast.caveats)
    head = [
        row for line in lines
        for row in textwrap.wrap(line, FIGURE_LINE, max_lines=2, placeholder=" ...")
    ]  # fmt: skip
    return (
        _ascii("\n".join(head)),
        _ascii("\n".join([*textwrap.wrap(foot, FIGURE_FOOT), f"{issued}."])),
    )


def check_text(
    record: Record,
    quality: QualityReport,
    sea_state: SeaState | None,
    waves: WaveStatistics | None,
    scattering: ScatteringSpectrum | None = None,
) -> str:
    """Quality, sea state and waves of a record as plain ASCII text, ending with a line break.

    The scattering spectrum follows where it is given.
    """
    meaning = {
        "pass": "the record can be scored",
        "suspect": "the record can be scored, with the reservations below",
        "fail": "the record is not scored",
    }
    parts = [[f"QUALITY: {quality.verdict.upper()}: {meaning[quality.verdict]}"]]
    facts = [("Record", _record_line(record))]
    if sea_state is not None:
        facts.append(("Sea", _sea_line(sea_state)))
        facts.append(("Shape", _shape_line(sea_state)))
    if waves is not None:
        facts.append(("Waves", _waves_line(waves, record)))
    facts += [("Assumed", text) for text in record.warnings]
    parts.append(_rows(facts))
    width = max(len(test.name) for test in quality.tests) if quality.tests else 0
    rows = []
    for test in sorted(quality.tests, key=lambda test: _FLAG_ORDER.index(test.flag)):
        label = f"{test.flag:<13}  {test.name:<{width}}  "
        rows += textwrap.wrap(
            test.detail, WIDTH, initial_indent=label, subsequent_indent=" " * len(label)
        ) or [label.rstrip()]
    parts.append(rows)
    if scattering is not None:
        parts += _scattering_parts(scattering, record)
    return _joined(parts)


def _scattering_parts(spectrum: ScatteringSpectrum, record: Record) -> list[list[str]]:
    """Paragraphs: what it is, the largest eigenvalues, groups and energy, how far it holds."""
    found, periodic = spectrum.eigenvalues, spectrum.periodic
    head = _wrapped(
        f"SCATTERING SPECTRUM: {_counted(len(found), 'eigenvalue')}. Each stands for a wave group "
        "that would keep its height and speed (an envelope soliton), were it alone on the water."
    )
    table = [
        "  height   over Hs   group speed, against the carrier      where in the record",
        *(_eigenvalue_row(item, record) for item in found[:LARGEST_EIGENVALUES]),
    ]
    if len(found) > LARGEST_EIGENVALUES:
        table.append(f"  and {len(found) - LARGEST_EIGENVALUES} smaller ones (all with --json)")
    rest = max(0.0, 1 - spectrum.discrete_share - spectrum.continuous_share)
    facts = [
        ("Groups", _recorded_groups(spectrum, record)),
        (
            "Energy",
            f"{_whole_percent(spectrum.discrete_share)} in these eigenvalues, "
            f"{_whole_percent(spectrum.continuous_share)} in waves that disperse, "
            f"{_whole_percent(rest)} in eigenvalues too small to be looked for",
        ),
        (
            "Repeated",
            "the record taken as periodic has "
            f"{_counted(periodic.unstable_modes, 'unstable mode')}, "
            f"{periodic.open_bands} with an open band, the widest {periodic.widest_band:.2g} Hs",
        ),
    ]
    remarks = ["How far this holds:", *_bullets(spectrum.remarks)]
    return [head, table if found else [], _rows(facts), remarks]


def _counted(number: int, noun: str) -> str:
    return f"{number or 'no'} {noun}{'s' * (number != 1)}"


def _whole_percent(share: float) -> str:
    return f"{100 * share:.0f} %"


def _eigenvalue_row(item: LocatedEigenvalue, record: Record) -> str:
    offset = (
        f"{abs(100 * item.speed_offset):.1f} % {'faster' if item.speed_offset > 0 else 'slower'}"
    )
    return (
        f"  {_metres(item.height):>6} {item.height_ratio:>9.2f}   {item.speed:>5.1f} m/s, "
        f"{offset:<15}          {_clock(item.time, record)}"
    )


def _recorded_groups(spectrum: ScatteringSpectrum, record: Record) -> str:
    groups = spectrum.groups
    highest = sorted(groups, key=lambda group: -group.height)[:LARGEST_GROUPS]
    told = "; ".join(
        f"{_metres(group.height)} at {_clock(group.peak_time, record)} "
        f"with {_counted(len(group.eigenvalues), 'eigenvalue')}"
        for group in sorted(highest, key=lambda group: group.peak_time)
    )
    return f"{len(groups)}, the highest by their envelope: {told}" if told else "none"


def card_text(card: dict, measured: dict) -> str:
    """A model's card: what it is, what it was taught on, what was measured of it."""
    lines = [f"{card['name']} {card['version']}: {card['summary']}"]
    lines += [
        f"  {key.replace('_', ' ')}: {', '.join(value) if isinstance(value, list) else value}"
        for key, value in card.get("taught_on", {}).items()
    ]
    lines.append(f"  SHA-256 of model.npz: {card['files']['model.npz']}")
    if not measured:
        return _joined([lines, ["Nothing was measured of it yet: trikymia verify --record."]])
    return _joined([lines]) + "\n" + verification_text(measured)


def verification_text(measured: dict) -> str:
    """What `forecaster.learning.verify.verify` measured, as tables of plain ASCII text."""
    model = measured["model"]
    parts = [[f"Model {model['name']} {model['version']}", *_wrapped(measured["rows"])]]
    for ratio, entry in measured["ratios"].items():
        for kind in ("intervals", "horizons"):
            parts.append([f"Largest wave >= {ratio} Hs, {kind}", *_score_lines(entry[kind])])
        if "baselines" in entry:
            title = f"Largest wave >= {ratio} Hs, against simpler forecasts of the same intervals"
            parts.append([title, *_baseline_lines(entry["baselines"])])
    for place, tables in measured.get("elsewhere", {}).items():
        for ratio, rows in tables.items():
            parts.append([f"{place}: largest wave >= {ratio} Hs, intervals", *_score_lines(rows)])
    for place, table in measured.get("ablation", {}).items():
        parts.append(_ablation_lines(place, table))
    return _joined(parts)


def _ablation_lines(place: str, ablation: dict) -> list[str]:
    """What each kind of feature adds: log skill of each set, pooled and by distance."""
    parts = ("log_skill_by_distance", "log_skill_by_coverage")
    columns = {
        part: list(dict.fromkeys(p for row in ablation["sets"] for p in row[part]))
        for part in parts
    }
    places = [place for part in parts for place in columns[part]]
    lines = [
        f"{place}: largest wave >= {ablation['ratio']} Hs, by features used:",
        "  log skill pooled, ROC, and log skill by distance [wavelengths] and by coverage",
        f"  {'':<22}{'pooled':<31}{'ROC':>6} " + "".join(f"{place:>9}" for place in places),
    ]
    for row in ablation["sets"]:
        skills = (row[part].get(place) for part in parts for place in columns[part])
        cells = "".join(f"{'-' if skill is None else f'{skill:.3f}':>9}" for skill in skills)
        lines.append(
            f"  {row['features']:<22}{_interval(row['log_skill']):<31}{row['roc'][0]:>6.3f} {cells}"
        )
    lines += [
        f"  gain in log score from {row['from']!r} to {row['to']!r}: "
        f"{_interval((row['gain_in_log_score'], *row['gain_90']))}"
        for row in ablation["gains"]
    ]
    return lines


def _score_lines(rows: list[dict]) -> list[str]:
    """A table of counts and scores; calibration is a slope where it can be fitted, else a bias."""
    lines = [
        f"  {'':<22}{'seas':>6}{'cases':>9}{'events':>8}  {'log skill':<27}{'Brier':>6}{'ROC':>7}"
        "  calibration"
    ]
    for row in rows:
        counts = f"  {row['label']:<22}{row['seas']:>6}{row['cases']:>9}{row['events']:>8}  "
        scores = row["scores"]
        if not scores:
            lines.append(f"{counts}too few events to score")
            continue
        name = "line.slope" if "line.slope" in scores else "mean bias"
        lines.append(
            f"{counts}{_interval(scores['log skill']):<27}{scores['Brier skill'][0]:>6.2f}"
            f"{scores['ROC'][0]:>7.3f}  {name.removeprefix('line.')} {_interval(scores[name])}"
        )
    return lines


def _baseline_lines(rows: list[dict]) -> list[str]:
    width = max((len(row["baseline"]) for row in rows), default=0)
    return [
        f"  {row['baseline']:<{width}}  log skill {row['log_skill']:.3f}, ROC {row['roc']:.3f}; "
        f"the model's gain {_interval((row['gain_in_log_score'], *row['gain_90']))}"
        for row in rows
    ]


def _interval(values) -> str:
    value, low, high = (f"{number:.3g}" for number in values)
    return f"{value} ({low} to {high})"


_CAVEATS_HEAD = "Know before you use this:"
_FLAG_ORDER = ("fail", "missing", "suspect", "not evaluated", "pass")

_STYLE = """
body{font:16px/1.45 system-ui,sans-serif;max-width:60rem;margin:2rem auto;padding:0 1rem;color:#111}
h1{font-size:1.5rem;margin:0 0 1rem}h2{font-size:1.1rem;margin:1.6rem 0 .4rem}
ul{margin:.4rem 0;padding-left:1.2rem}
.caveats{border-left:.4rem solid #b45309;background:#fff7ed;padding:.6rem 1rem}
pre{font:14px/1.4 ui-monospace,monospace;white-space:pre-wrap;background:#f6f7f9;padding:1rem}
table{border-collapse:collapse;width:100%}td,th{border:1px solid #ccc;padding:.25rem .6rem;
text-align:left;vertical-align:top}th{background:#f6f7f9}svg{max-width:100%;height:auto}
""".strip()


def report_page(forecast: Forecast, figure: str) -> str:
    """The answer as one self-contained HTML page: no scripts, nothing loaded from elsewhere.

    Parameters
    ----------
    forecast : Forecast
    figure : str
        The figure of the forecast as an ``<svg>`` element.
    """
    tests = [(test.flag, test.name, test.detail) for test in forecast.quality.tests]
    sections = [
        "<h1>Extreme wave forecast</h1>",
        f'<div class="caveats"><strong>Know before you use this</strong>'
        f"{_html_list(forecast.caveats)}</div>",
        "<h2>Answer</h2>",
        f"<pre>{escape(_without_caveats(forecast_text(forecast)))}</pre>",
        "<h2>Figure</h2>",
        figure,
        "<h2>Quality tests</h2>",
        _html_table(("result", "test", "detail"), tests),
        "<h2>What was done to the record</h2>",
        _html_list(forecast.record.history),
    ]
    body = "\n".join(sections)
    return (
        '<!DOCTYPE html>\n<html lang="en">\n<head>\n<meta charset="utf-8">\n'
        '<meta http-equiv="Content-Security-Policy" '
        "content=\"default-src 'none'; style-src 'unsafe-inline'\">\n"
        f"<title>Extreme wave forecast: {escape(_ascii(forecast.record.source))}</title>\n"
        f"<style>{_STYLE}</style>\n</head>\n<body>\n{body}\n</body>\n</html>\n"
    )


def _without_caveats(text: str) -> str:
    return text[: text.index(f"\n\n{_CAVEATS_HEAD}")]


def _html_list(lines) -> str:
    return f"<ul>{''.join(f'<li>{escape(_ascii(line))}</li>' for line in lines)}</ul>"


def _html_table(heads, rows) -> str:
    head = "".join(f"<th>{escape(name)}</th>" for name in heads)
    body = "".join(
        f"<tr>{''.join(f'<td>{escape(_ascii(cell))}</td>' for cell in row)}</tr>" for row in rows
    )
    return f"<table><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table>"


# --- the parts of the text ---


def _outdated(forecast: Forecast) -> list[str]:
    """What comes before everything else: the period, or its likeliest part, is over."""
    target, now = forecast.target, forecast.issued_at
    if not forecast.record.calendar or target is None:
        return []
    if now >= target.valid_to:
        return _wrapped(
            f"EXPIRED: the period that this answers for ended {_span(now - target.valid_to)} "
            f"before it was issued ({_stamp(now)}). Use a newer record."
        )
    span = most_likely_span(forecast)
    if not span or not _is_over(span[-1], forecast):
        return []
    left = max(item.probability for item in forecast.intervals if not _is_over(item, forecast))
    return _wrapped(
        f"PARTLY PAST: the likeliest part of the period was over "
        f"{_span(now - span[-1].end)} before this was issued ({_stamp(now)}). Of the intervals "
        f"left the likeliest has {percent(left)}. Use a newer record."
    )


def _is_over(item: IntervalForecast, forecast: Forecast) -> bool:
    return forecast.record.calendar and item.end <= forecast.issued_at


def _answer(forecast: Forecast) -> list[tuple[str, str]]:
    p = forecast.probability
    low, high = forecast.probability_90
    lines = [
        (
            "PROBABILITY",
            f"{percent(p)}, {one_in(p)}: {likelihood(p)} "
            f"(90 % interval {percent(low)} to {percent(high)})",
        ),
        *_question(forecast),
    ]
    if forecast.odds_ratio is not None and forecast.base_rate is not None:
        lines.append(
            (
                "Compared",
                f"{compared(forecast.odds_ratio)} in an ordinary sea of this height and period: "
                f"base rate {_chance(forecast.base_rate)}, odds {_factor(forecast.odds_ratio)}",
            )
        )
    lines += [
        ("Most likely", _most_likely(forecast)),
        ("Applies here", _domain(forecast)),
        ("Age", _age(forecast)),
    ]
    if forecast.quality.verdict == "suspect":
        lines.append(("SUSPECT", f"the record has flaws: {_flagged(forecast.quality, 'suspect')}"))
    if p < LOW:
        lines.append(
            (
                "Note",
                "a low probability is not permission: the decision, and the limits that apply, "
                "stay with the responsible person",
            )
        )
    return lines


def _no_forecast(forecast: Forecast) -> list[tuple[str, str]]:
    if forecast.quality.verdict == "fail":
        reason = f"the record failed its quality tests: {_flagged(forecast.quality, 'fail')}"
    else:
        reason = _with_reasons(_OUTSIDE, forecast.domain.reasons)
    lines = [("NO FORECAST", reason)]
    if forecast.base_rate is None:
        lines.append(("Base rate", "none: the record does not tell the sea state"))
    else:
        lines.append(
            (
                "Base rate",
                f"{_chance(forecast.base_rate)}: what a sea of this height and period gives, "
                "the waves themselves not looked at",
            )
        )
    if forecast.target is not None:
        lines += _question(forecast)
    lines += [
        ("Age", _age(forecast)),
        ("Note", "no forecast says nothing about the waves to come; it is not permission"),
    ]
    return lines


def _question(forecast: Forecast) -> list[tuple[str, str]]:
    """What the probability is of: event, place, period."""
    target, record = forecast.target, forecast.record
    height = f"{_metres(target.threshold_m)} or more ({target.threshold:.3g} Hs)"
    if target.criterion == "crest":
        event = f"at least one crest that rises {height} above the mean level"
    else:
        event = f"at least one wave with a height of {height}, crest to trough"
    where = f"{target.distance:.0f} m downwave of the sensor" if target.distance else "the sensor"
    return [
        ("Of", event),
        ("At", where),
        ("Period", _between(target.valid_from, target.valid_to, record)),
    ]


def _between(start: float, end: float, record: Record) -> str:
    unit = "UTC" if record.calendar else "s on the clock of the record"
    return (
        f"{_short_clock(start, record)} to {_short_clock(end, record)} {unit}, "
        f"{_lead(start, record)} to {_lead(end, record)} min after the record ends"
    )


def _chance(probability: float) -> str:
    return f"{percent(probability)} ({one_in(probability)})"


def _factor(ratio: float) -> str:
    """An odds ratio as "times higher" or "times lower"."""
    if isinf(ratio) or ratio > 1e4:
        return "over 10 000 times higher"
    if ratio < 1e-4:
        return "over 10 000 times lower"
    if ratio >= 1:
        return f"{_two_digits(ratio)} times higher"
    return f"{_two_digits(1 / ratio)} times lower"


def _times_base(interval: IntervalForecast) -> float:
    """Probability over base rate; infinite against a base rate of zero."""
    return interval.probability / interval.base_rate if interval.base_rate else inf


def most_likely_span(forecast: Forecast) -> tuple[IntervalForecast, ...]:
    """The interval of the largest probability and its neighbours that have at least half of it.

    Empty if no interval has `STANDS_OUT` times its base rate, or if more than two thirds of the
    intervals would be named: then no part of the period stands out.
    """
    intervals = forecast.intervals
    scored = [i for i, item in enumerate(intervals) if item.probability is not None]
    if not scored:
        return ()
    first = last = max(scored, key=lambda i: intervals[i].probability)
    top = intervals[first]
    if _times_base(top) < STANDS_OUT:
        return ()

    def belongs(i):
        return 0 <= i < len(intervals) and (intervals[i].probability or 0) >= top.probability / 2

    while belongs(first - 1):
        first -= 1
    while belongs(last + 1):
        last += 1
    span = intervals[first : last + 1]
    return span if 3 * len(span) <= 2 * len(intervals) else ()


def _most_likely(forecast: Forecast) -> str:
    span = most_likely_span(forecast)
    if not span:
        return "no part of the period stands out"
    top = max(span, key=lambda item: item.probability)
    text = (
        f"{_between(span[0].start, span[-1].end, forecast.record)}; "
        f"up to {percent(top.probability)} in {_span(top.end - top.start)}"
    )
    if top.base_rate:
        text += f", {_two_digits(_times_base(top))} times its base rate"
    return text


_TABLE_HEAD = (
    "    from        to      lead   probability              base rate   times  waves    likely",
    "                         min                                         base   known   largest",
)


def _interval_table(forecast: Forecast) -> list[str]:
    intervals = [item for item in forecast.intervals if item.probability is not None]
    if not intervals:
        return []
    ordered = sorted(intervals, key=lambda item: -item.probability)
    marked = {id(item) for item in most_likely_span(forecast)}
    if not marked:
        ordered = intervals  # none stands out: the next ones tell more than a few like them
    shown = {id(item) for item in ordered[:LONGEST_TABLE]}

    def mark(item):
        return "x" if _is_over(item, forecast) else "*" if id(item) in marked else " "

    rows = [
        _interval_row(item, forecast.record, mark(item)) for item in intervals if id(item) in shown
    ]
    lines = [*_TABLE_HEAD, *rows]
    rest = ordered[LONGEST_TABLE:]
    if rest:
        largest = max(item.probability for item in rest)
        lines.append(
            f"  and {len(rest)} more of at most {percent(largest)} each (all of them with --json)"
        )
    if any(row.startswith("x") for row in rows):
        lines.append("  x was over when this was issued")
    lines.append("  * stands out; waves known: share of the wave energy that the record holds")
    return lines


def _interval_row(item: IntervalForecast, record: Record, mark: str) -> str:
    start, end = (_short_clock(seconds, record) for seconds in (item.start, item.end))
    base = "-" if item.base_rate is None else percent(item.base_rate)
    times = "-" if not item.base_rate else f"{_two_digits(_times_base(item))} x"
    median = "-" if item.median_height is None else _metres(item.median_height)
    probability = f"{percent(item.probability)}, {one_in(item.probability)}"
    return (
        f"{mark} {start:>8} {end:>9} {item.lead / 60:>8.1f}   "
        f"{probability:<23} {base:>10} {times:>7} {100 * item.coverage:>4.0f} %  {median:>8}"
    )


_OUTSIDE = "the sea lies outside what the model was trained and verified on"


def _domain(forecast: Forecast) -> str:
    meaning = {
        "inside": "yes: the sea is of the kind the model was trained and verified on",
        "edge": "EDGE, with reserve",
        "outside": f"OUTSIDE: {_OUTSIDE}",
    }[forecast.domain.status]
    return _with_reasons(meaning, forecast.domain.reasons)


def _flagged(quality: QualityReport, flag: str) -> str:
    reasons = [f"{test.name}: {test.detail}" for test in quality.tests if test.flag == flag]
    return "; ".join(reasons) or "no test said why"


def _quality_line(quality: QualityReport) -> str:
    examined = [test for test in quality.tests if test.flag != "not evaluated"]
    passed = sum(test.flag == "pass" for test in examined)
    line = f"{quality.verdict}, {passed} of {len(examined)} tests passed"
    skipped = [test.name for test in quality.tests if test.flag == "not evaluated"]
    if skipped:
        line += f"; not evaluated: {', '.join(skipped)}"
    return line


def _record_line(record: Record) -> str:
    depth = "deep water" if isinf(record.depth) else f"{record.depth:.4g} m of water"
    end = _stamp(record.end) if record.calendar else f"{record.end:.0f} s on its own clock"
    return (
        f"{record.source}, {_span(record.duration)} up to {end}, "
        f"{1 / record.dt:.3g} Hz, {depth}, sensor {record.sensor}"
    )


def _age(forecast: Forecast) -> str:
    record, target = forecast.record, forecast.target
    if not record.calendar:
        return "not known: the record has no calendar time, check that it is the latest"
    age = forecast.issued_at - record.end
    if age < -1:
        return f"the record ends {_span(-age)} AFTER the clock of this computer: check time zones"
    text = f"the record ended {_span(max(age, 0.0))} before this was issued"
    if target is not None and target.valid_from + 30 <= forecast.issued_at < target.valid_to:
        passed = _span(forecast.issued_at - target.valid_from)
        text += f"; the first {passed} of the period have passed"
    return text


def _sea_line(sea: SeaState) -> str:
    spread = "unknown" if sea.spread is None else f"{sea.spread:.0f} deg"
    return (
        f"Hs {_metres(sea.hs)} (+-{100 * sea.hs_error:.0f} %), peak period {sea.tp:.3g} s, "
        f"steepness {sea.steepness:.2g}, BFI {sea.bfi:.2g}, spread {spread}"
    )


def _shape_line(sea: SeaState) -> str:
    return (
        f"Tm01 {sea.tm01:.3g} s, Tm02 {sea.tm02:.3g} s, spectral width {sea.bandwidth:.2g}, "
        f"peakedness Qp {sea.qp:.2g}"
        + ("" if isinf(sea.kph) else f", kp h {sea.kph:.2g}, BFI at this depth {sea.bfi_depth:.2g}")
    )


def _waves_line(waves: WaveStatistics, record: Record) -> str:
    if not waves.count:
        return "none that is complete"
    if not waves.run_length:
        runs = "no wave reaches Hs"
    else:
        every = "once" if isinf(waves.total_run) else f"every {waves.total_run:.1f} waves"
        runs = f"waves of Hs or more come {waves.run_length:.1f} at a time, {every}"
    return (
        f"{waves.count}, the highest {_metres(waves.highest)} at "
        f"{_clock(waves.highest_time, record)} ({waves.highest_ratio:.2f} Hs; a record of so many "
        f"has {waves.expected_ratio:.2f} Hs in the mean), highest crest "
        f"{_metres(waves.highest_crest)} ({waves.crest_ratio:.2f} Hs); {runs}"
    )


def _groups_line(forecast: Forecast) -> str:
    """The largest groups that reach the target in the period; empty if there are none."""
    if forecast.target is None:
        return ""
    coming = [group for group in forecast.groups if group.arrival >= forecast.target.valid_from]
    largest = sorted(coming, key=lambda group: -group.height)[:LARGEST_GROUPS]
    # focusing estimates are left to the document: in broad seas they foretell little
    told = [
        f"{_metres(group.height)} arriving {_clock(group.arrival, forecast.record)}"
        for group in sorted(largest, key=lambda group: group.arrival)
    ]
    return f"on the way, height of the envelope at the sensor: {'; '.join(told)}" if told else ""


def _reasons_line(forecast: Forecast) -> str:
    ordered = sorted(forecast.reasons, key=lambda reason: -abs(reason.effect))[:5]
    told = "; ".join(
        f"{reason.feature} {'raises' if reason.effect > 0 else 'lowers'} the odds "
        f"{_two_digits(exp(min(abs(reason.effect), 20.0)))} times"
        for reason in ordered
    )
    if any("run" in reason.feature.split() for reason in ordered):
        told += ". The run: the recorded waves, computed onwards to target and period"
    return told


def _model_line(forecast: Forecast) -> str:
    model = forecast.model
    return f"{model.name} {model.version}, SHA-256 {model.sha256[:12]}"


# --- the small pieces ---


def _with_reasons(text: str, reasons: tuple[str, ...]) -> str:
    return f"{text}: {'; '.join(reasons)}" if reasons else text


def _metres(value: float) -> str:
    return f"{value:.1f} m" if value >= 1 else f"{value:.2g} m"


def _two_digits(value: float) -> str:
    """Two significant digits without an exponent.

    >>> _two_digits(3.26), _two_digits(19500.0), _two_digits(0.00996), _two_digits(0.0)
    ('3.3', '20000', '0.010', '0.0')
    """
    rounded = float(f"{value:.2g}")
    digits = 1 - floor(log10(rounded)) if rounded else 1
    return f"{rounded:.{max(digits, 0)}f}"


def _span(seconds: float) -> str:
    """A length of time in words.

    >>> _span(42), _span(540), _span(5400), _span(200000)
    ('42 s', '9 min', '1.5 h', '2.3 days')
    """
    if seconds < 119.5:
        return f"{seconds:.0f} s"
    if seconds < 5370:
        return f"{seconds / 60:.0f} min"
    if seconds < 48 * 3600:
        return f"{seconds / 3600:.1f} h"
    return f"{seconds / 86400:.1f} days"


def _lead(seconds: float, record: Record) -> str:
    return f"{(seconds - record.end) / 60:.1f}".replace("-0.0", "0.0")


def _clock(seconds: float, record: Record) -> str:
    return f"{_short_clock(seconds, record)} UTC" if record.calendar else f"{seconds:.0f} s"


def _short_clock(seconds: float, record: Record) -> str:
    return utc_text(round(seconds))[11:19] if record.calendar else f"{seconds:.0f}"


def _stamp(seconds: float) -> str:
    return f"{utc_text(round(seconds))[:19].replace('T', ' ')} UTC"


def _wrapped(text: str) -> list[str]:
    return textwrap.wrap(text, WIDTH, break_on_hyphens=False)


def _bullets(lines) -> list[str]:
    return [
        part
        for line in lines
        for part in textwrap.wrap(
            line, WIDTH, initial_indent="- ", subsequent_indent="  ", break_on_hyphens=False
        )
    ]


def _rows(facts: list[tuple[str, str]]) -> list[str]:
    """Labelled paragraphs."""
    return [
        line
        for label, text in facts
        for line in textwrap.wrap(
            text,
            WIDTH,
            initial_indent=f"{label:<14}",
            subsequent_indent=" " * 14,
            break_on_hyphens=False,
        )
    ]


def _joined(parts: list[list[str]]) -> str:
    """Paragraphs of lines as one text, an empty line between them."""
    return _ascii("\n\n".join("\n".join(part) for part in parts if part) + "\n")


def _ascii(text: str) -> str:
    """Printable ASCII and line breaks only: a file name must not steer a terminal.

    >>> _ascii("h\\x1b[2J\\u00f8y.csv")
    'h\\\\x1b[2J\\\\xf8y.csv'
    """
    plain = text.encode("ascii", "backslashreplace").decode("ascii")
    return "".join(c if c.isprintable() or c == "\n" else f"\\x{ord(c):02x}" for c in plain)
