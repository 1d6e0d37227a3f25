"""Words: what stands first, what is always said, what is never said."""

import re
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from forecaster import wording
from forecaster.datatypes import Domain, QualityReport, QualityTest, Target, WaveStatistics
from forecaster.waves.scattering_spectrum import scattering_spectrum
from tests.hand_built import BAD, CAVEATS, END, GOOD, HS, SEA, forecast, record, unanswered

FORBIDDEN = ("safe", "all clear", "no risk", "harmless", "no danger", "calm")
SUSPECT = QualityReport("suspect", (QualityTest("gap", "suspect", 10, 3, "3 samples missing"),))
WAVES = WaveStatistics(
    count=210, highest=6.3, highest_ratio=1.5, highest_time=END - 100, highest_crest=3.5,
    crest_ratio=0.833, expected_ratio=1.563, run_length=1.42, total_run=9.17,
)  # fmt: skip
FIGURE = '<svg xmlns="http://www.w3.org/2000/svg"><path d="M0 0"/></svg>'
ANSWERS = {
    "answered": forecast(),
    "own clock": forecast(calendar=False),
    "expired": forecast(issued_after=7200.0),
    "suspect": forecast(quality=SUSPECT),
    "likely": forecast(probability=0.7, probability_90=(0.5, 0.8), odds_ratio=300.0),
    "never": forecast(probability=0.0, probability_90=(0.0, 1e-9), odds_ratio=0.0),
    "crest": forecast(target=Target(0.0, 0.0, END, END + 1800, "crest", 1.25, 1.25 * HS)),
    "inside": forecast(domain=Domain("inside")),
    "outside": unanswered(),
    "failed": unanswered(quality=BAD),
    "failed, own clock": unanswered(quality=BAD, calendar=False),
}


def said(text):
    """The text without its line breaks and runs of spaces."""
    return " ".join(text.split())


@pytest.mark.parametrize("name", ANSWERS)
def test_every_answer_carries_its_caveats(name):
    text = said(wording.forecast_text(ANSWERS[name]))
    page = said(wording.report_page(ANSWERS[name], FIGURE))
    for caveat in CAVEATS:
        assert caveat in text
        assert caveat in page


@pytest.mark.parametrize("name", ANSWERS)
def test_nothing_is_ever_called_harmless(name):
    text = wording.forecast_text(ANSWERS[name]) + wording.report_page(ANSWERS[name], FIGURE)
    assert not [word for word in FORBIDDEN if re.search(rf"\b{word}\b", text.lower())]


def test_the_forbidden_words_are_not_in_the_source_of_the_texts():
    # a word of the docstring would show that the search works; only whole words count there
    source = Path(wording.__file__).read_text(encoding="utf-8").lower()
    code = source.split('"""', 2)[2]  # what the module says about itself is not printed
    assert not [word for word in FORBIDDEN if re.search(rf"\b{word}\b", code)]
    assert re.search(r"\bharmless\b", source)


@pytest.mark.parametrize("name", ANSWERS)
def test_text_is_plain_and_narrow(name):
    text = wording.forecast_text(ANSWERS[name])
    assert text.isascii()
    assert text.endswith("\n") and not text.endswith("\n\n")
    assert max(map(len, text.splitlines())) <= 100
    assert not re.search(r"[^\x20-\x7e\n]|nan|None|\binf\b", text)


def test_the_answer_comes_first():
    lines = wording.forecast_text(forecast()).splitlines()
    assert lines[0].startswith("PROBABILITY")
    for part in ("4.2 %", "1 in 24", "2.1 % to 7.9 %"):
        assert part in lines[0]
    head = said("\n".join(lines[:14]))
    for part in (
        "8.4 m",
        "1500 m downwave",
        "03:04:10 to 03:10:50 UTC",
        "base rate 0.76 % (1 in 130)",
        "5.7 times higher",
        "03:06:50 to 03:08:10 UTC",  # the two intervals that stand out
        "EDGE, with reserve: directional spread is not known",
        "ended 2 min before this was issued; the first 2 min of the period have passed",
        "not permission",
    ):
        assert part in head


def test_a_low_probability_is_not_permission_and_a_high_one_needs_no_such_line():
    assert "not permission" in said(wording.forecast_text(ANSWERS["never"]))
    assert "not permission" not in said(wording.forecast_text(ANSWERS["likely"]))
    assert "below 0.0001 %" in wording.forecast_text(ANSWERS["never"]).splitlines()[0]


def test_an_expired_forecast_says_so_before_all_else():
    first = said(wording.forecast_text(ANSWERS["expired"]))[:120]
    # by hand: valid for 400 s after the record's end, issued 7200 s after it: 6800 s = 1.9 h
    assert first.startswith("EXPIRED: the period that this answers for ended 1.9 h before")
    assert "EXPIRED" not in wording.forecast_text(forecast(issued_after=399.0))
    assert "EXPIRED" in wording.forecast_text(forecast(issued_after=400.0))
    assert "EXPIRED" not in wording.forecast_text(forecast(calendar=False, issued_after=1e6))


def test_a_forecast_whose_likeliest_part_is_over_says_so_before_all_else():
    # by hand: the intervals that stand out end 240 s after the record; the period after 400 s
    assert not wording.forecast_text(forecast(issued_after=239.0)).startswith("PARTLY PAST")
    text = wording.forecast_text(forecast(issued_after=250.0))
    assert said(text).startswith(
        "PARTLY PAST: the likeliest part of the period was over 10 s before"
    )
    assert "the likeliest has 0.12 %" in said(text)[:250]
    assert not wording.forecast_text(forecast(calendar=False, issued_after=250.0)).startswith("PAR")


def test_rows_of_the_table_that_are_over_are_marked():
    text = wording.forecast_text(forecast(issued_after=130.0))
    marks = re.findall(r"^([x* ]) +03:[01]", text, flags=re.M)
    # by hand: intervals of 40 s: three are over after 130 s; the fifth and sixth stand out
    assert marks == list("xxx **    ")
    assert "x was over" in text
    assert "x was over" not in wording.forecast_text(forecast(issued_after=30.0))


def test_a_table_without_a_peak_shows_the_next_intervals():
    base = forecast().intervals[0]
    alike = tuple(
        replace(base, start=END + 40 * j, end=END + 40 * j + 40, probability=0.001 + 1e-6 * j)
        for j in range(45)
    )
    text = wording.forecast_text(forecast(intervals=alike, issued_after=1.0))
    rows = re.findall(r"^  (\d\d:\d\d:\d\d)", text, flags=re.M)
    assert rows[0] == "03:04:10" and len(rows) == wording.LONGEST_TABLE
    assert "and 33 more of at most 0.10 % each" in text


def test_the_reasons_say_what_the_run_is():
    assert "The run: the recorded waves" in said(wording.forecast_text(forecast()))


@pytest.mark.parametrize("name", ANSWERS)
def test_notes_of_a_figure_hold_the_caveats_and_why_there_is_no_forecast(name):
    head, foot = wording.figure_notes(ANSWERS[name])
    assert all(caveat in said(foot) for caveat in CAVEATS)
    assert ("190 samples jump" in head) == (ANSWERS[name].quality is BAD)
    assert max(map(len, head.splitlines()), default=0) <= wording.FIGURE_LINE


def test_age_of_the_record():
    assert "30 s before" in said(wording.forecast_text(forecast(issued_after=30.0)))
    late = said(wording.forecast_text(forecast(issued_after=-3 * 3600.0)))
    assert "3.0 h AFTER the clock of this computer" in late
    assert "no calendar time" in said(wording.forecast_text(ANSWERS["own clock"]))


def test_suspect_record_is_said_near_the_top():
    lines = wording.forecast_text(ANSWERS["suspect"]).splitlines()
    assert any(line.startswith("SUSPECT") and "3 samples missing" in line for line in lines[:13])


def test_no_forecast_outside_the_model_gives_the_base_rate_on_its_own_line():
    text = wording.forecast_text(ANSWERS["outside"])
    assert text.startswith("NO FORECAST")
    assert "steepness 0.21 above 0.14" in said(text)
    (line,) = [line for line in text.splitlines() if line.startswith("Base rate")]
    assert "0.76 % (1 in 130)" in line
    assert "PROBABILITY" not in text


def test_no_forecast_for_a_failed_record_gives_no_base_rate():
    text = wording.forecast_text(ANSWERS["failed"])
    assert text.startswith("NO FORECAST")
    assert "190 samples jump" in said(text)
    (line,) = [line for line in text.splitlines() if line.startswith("Base rate")]
    assert "none" in line and "%" not in line


def test_crest_and_sensor_in_words():
    text = said(wording.forecast_text(ANSWERS["crest"]))
    assert "crest that rises 5.2 m or more (1.25 Hs) above the mean level" in text
    assert "At the sensor" in text


def test_long_tables_are_cut_to_the_most_likely_rows_in_order_of_time():
    base = forecast().intervals[0]
    many = tuple(
        replace(base, start=END + 40 * j, end=END + 40 * j + 40, lead=40.0 * j, probability=p)
        for j, p in enumerate(np.linspace(0.0001, 0.03, 45))
    )
    text = wording.forecast_text(forecast(intervals=many))
    rows = re.findall(r"^[* ] (\d\d:\d\d:\d\d)", text, flags=re.M)
    assert len(rows) == wording.LONGEST_TABLE
    assert rows == sorted(rows)
    assert f"and {45 - wording.LONGEST_TABLE} more of at most 2.2 % each" in text


def test_most_likely_span_is_the_peak_and_its_neighbours_of_half_its_height():
    made = forecast()
    span = wording.most_likely_span(made)
    assert [item.probability for item in span] == [0.021, 0.016]
    flat = tuple(replace(item, probability=0.001) for item in made.intervals)
    assert wording.most_likely_span(forecast(intervals=flat)) == ()
    assert "no part of the period stands out" in wording.forecast_text(forecast(intervals=flat))
    assert wording.most_likely_span(unanswered()) == ()
    # five times the base rate throughout: the sea stands out, no part of the period does
    alike = tuple(replace(item, probability=0.0038) for item in made.intervals)
    assert wording.most_likely_span(forecast(intervals=alike)) == ()


@given(st.floats(0, 1))
def test_numbers_in_words_are_the_number(p):
    text = wording.percent(p)
    if text.startswith("below"):
        assert p < 1e-6
    elif text.startswith("above"):
        assert p > 0.999
    else:
        assert float(text[:-2]) / 100 == pytest.approx(p, rel=0.051)
        assert 0 < float(text[:-2]) < 100
    words = wording.one_in(p)
    if words.startswith("1 in "):
        assert 1 / float(words[5:]) == pytest.approx(p, rel=0.051)
    else:
        assert p < 1e-6 or p >= 0.5
    assert wording.likelihood(p)


@given(st.floats(0, 1e6), st.floats(0, 1e6))
def test_words_of_comparison_rise_with_the_odds(a, b):
    order = [phrase for _, phrase in wording.COMPARISON][::-1]
    low, high = sorted((a, b))
    assert order.index(wording.compared(low)) <= order.index(wording.compared(high))


def test_file_names_can_steer_neither_terminal_nor_browser():
    name = "<script>alert(1)</script>\x1b[2J\nPROBABILITY 0 %.csv"
    made = forecast(source=name)
    text = wording.forecast_text(made)
    assert "\x1b" not in text
    assert not re.search(r"^PROBABILITY 0", text, flags=re.M)
    page = wording.report_page(made, FIGURE)
    assert "<script" not in page and "\x1b" not in page
    assert "&lt;script&gt;" in page


def test_report_is_one_page_that_loads_nothing_and_puts_the_caveats_first():
    page = wording.report_page(forecast(), FIGURE)
    assert page.startswith("<!DOCTYPE html>")
    assert FIGURE in page
    assert "<script" not in page
    assert "default-src 'none'" in page
    assert not re.search(r"""(src|href)\s*=|url\(|@import""", page.replace("default-src", ""))
    assert page.index("responsible person") < page.index("PROBABILITY")
    assert page.index("PROBABILITY") < page.index("<svg")
    assert "no sample jumps against its neighbours" in page


def test_check_text_puts_the_verdict_first_and_what_failed_before_what_passed():
    text = wording.check_text(record(), BAD, None, None)
    assert text.startswith("QUALITY: FAIL")
    assert text.index("190 samples jump") < text.index("no sample is missing")
    assert "Sea  " not in text and "Waves  " not in text
    good = wording.check_text(record(), GOOD, SEA, WAVES)
    assert good.startswith("QUALITY: PASS")
    assert "Hs 4.2 m" in good and "not evaluated" in good
    assert good.isascii() and max(map(len, good.splitlines())) <= 100


def test_check_text_tells_the_waves_of_the_record():
    # by hand; the record ends at 03:04:10
    text = said(wording.check_text(record(), GOOD, SEA, WAVES))
    assert (
        "Waves 210, the highest 6.3 m at 03:02:30 UTC (1.50 Hs; a record of so many has 1.56 Hs in "
        "the mean), highest crest 3.5 m (0.83 Hs); waves of Hs or more come 1.4 at a time, every "
        "9.2 waves"
    ) in text
    own = replace(WAVES, highest_time=1014.4)
    assert "at 1014 s (1.50 Hs" in said(wording.check_text(record(calendar=False), GOOD, SEA, own))

    def told(**changes):
        return said(wording.check_text(record(), GOOD, SEA, replace(WAVES, **changes)))

    assert "waves of Hs or more come 1.4 at a time, once" in told(total_run=np.inf)
    assert "no wave reaches Hs" in told(run_length=0.0, total_run=np.inf)
    assert "Waves none that is complete" in told(count=0, highest_time=np.nan, run_length=0.0)


@pytest.mark.parametrize("calendar", [True, False])
def test_check_text_tells_the_scattering_spectrum_when_it_is_given(calendar):
    made = record(calendar=calendar)
    spectrum = scattering_spectrum(made, SEA)
    text = wording.check_text(made, GOOD, SEA, WAVES, spectrum)
    assert text.startswith(wording.check_text(made, GOOD, SEA, WAVES).rstrip("\n"))
    added = said(text[text.index("SCATTERING SPECTRUM") :])
    assert f"{len(spectrum.eigenvalues)} eigenvalues" in added
    largest = spectrum.eigenvalues[0]
    assert f"{largest.height:.1f} m {largest.height_ratio:.2f} {largest.speed:.1f} m/s" in added
    assert f"{len(spectrum.eigenvalues) - 6} smaller ones" in added
    assert f"{len(spectrum.groups)}, the highest" in added
    assert f"{100 * spectrum.discrete_share:.0f} % in these eigenvalues" in added
    assert all(remark in added for remark in spectrum.remarks)
    assert ("UTC" in added) is calendar
    assert text.isascii() and max(map(len, text.splitlines())) <= 100
    assert not any(word in text.lower() for word in FORBIDDEN)


def test_check_text_of_a_record_without_eigenvalues():
    made = record()
    spectrum = replace(scattering_spectrum(made, SEA), eigenvalues=(), groups=())
    text = wording.check_text(made, GOOD, SEA, WAVES, spectrum)
    assert "SCATTERING SPECTRUM: no eigenvalues" in text and "over Hs" not in text
    assert re.search(r"^Groups +none$", text, re.M)


def test_off_axis_caveat_says_both_numbers():
    assert "12 deg" in wording.off_axis_caveat(-12.0, 1467.2)
    assert "1467 m" in wording.off_axis_caveat(-12.0, 1467.2)


def test_verification_tables_show_counts_scores_and_what_could_not_be_scored():
    scores = {
        "log skill": [0.61, 0.55, 0.66],
        "Brier skill": [0.4, 0.3, 0.5],
        "ROC": [0.98, 0.97, 0.99],
        "mean bias": [0.001, -0.002, 0.003],
    }
    counts = {"seas": 120, "seas_with_events": 60, "cases": 54321, "events": 250}
    fitted = {**scores, "line.slope": [0.97, 0.9, 1.04], "line.intercept": [0.0, -0.1, 0.1]}
    rows = [
        {"label": "pooled", **counts, "scores": fitted},
        {"label": "5 wavelengths", **counts, "scores": scores},
        {"label": "steep", **counts, "scores": {}},
    ]
    gain = {"gain_in_log_score": 0.02, "gain_90": [0.01, 0.03]}
    measured = {
        "model": {"name": "north", "version": "1"},
        "rows": "downwave intervals",
        "ratios": {
            "2": {
                "intervals": rows,
                "horizons": rows[:1],
                "baselines": [{"baseline": "climatology", "log_skill": 0.0, "roc": 0.5, **gain}],
            },
            "2.2": {"intervals": [], "horizons": []},
        },
    }
    sets = [
        {"features": "all", "log_skill": [0.65, 0.6, 0.7], "roc": [0.98, 0.97, 0.99],
         "log_skill_by_distance": {"5": 0.71}, "log_skill_by_coverage": {"0.5-0.8": 0.27}},
    ]  # fmt: skip
    table = {"ratio": 1.6, "sets": sets, "gains": [{"from": "a", "to": "b", **gain}]}
    measured |= {"ablation": {"here": table}, "elsewhere": {"noisy": {"2": rows[:1]}}}
    text = wording.verification_text(measured)
    pooled, single, steep = (
        next(line for line in text.splitlines() if line.startswith(f"  {name}"))
        for name in ("pooled", "5 wavelengths", "steep")
    )
    for part in ("120", "54321", "250", "0.61 (0.55 to 0.66)", "0.98", "slope 0.97 (0.9 to 1.04)"):
        assert part in pooled
    assert "mean bias 0.001 (-0.002 to 0.003)" in single and "slope" not in single
    assert "too few events to score" in steep
    assert "here: largest wave >= 1.6 Hs, by features used" in text
    assert "noisy: largest wave >= 2 Hs, intervals" in text
    assert "all                   0.65 (0.6 to 0.7)               0.980     0.710    0.270" in text
    assert "gain in log score from 'a' to 'b': 0.02 (0.01 to 0.03)" in text
    assert "climatology  log skill 0.000, ROC 0.500; the model's gain 0.02 (0.01 to 0.03)" in text
    assert text.isascii()


def test_a_card_tells_what_a_model_is_and_that_nothing_was_measured_yet():
    card = {
        "name": "north", "version": "2", "summary": "steep seas", "files": {"model.npz": "ab12"},
        "taught_on": {"recipes": ["a.toml", "b.toml"], "fitted_seas": 300},
    }  # fmt: skip
    text = wording.card_text(card, {})
    for part in ("north 2: steep seas", "recipes: a.toml, b.toml", "fitted seas: 300", "ab12"):
        assert part in text
    assert "Nothing was measured" in text
    measured = {"model": {"name": "north", "version": "2"}, "rows": "rows of x", "ratios": {}}
    assert "rows of x" in wording.card_text(card, measured)
