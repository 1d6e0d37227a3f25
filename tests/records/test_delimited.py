import numpy as np
import pytest

from forecaster.errors import RecordFormatError
from forecaster.records import delimited


def read(text, **options):
    data = text if isinstance(text, bytes) else text.encode()
    return delimited.read(iter([data]), path="demo.csv", **options)


def table(header, rows=5, row="{t},{v}"):
    body = "".join(row.format(t=i * 0.5, v=i) + "\n" for i in range(rows))
    return f"{header}\n{body}" if header else body


@pytest.mark.parametrize(
    ("head", "answer"),
    [
        (b"time_s,eta_m\n0,1\n", True),
        (b"0 1\n1 2\n", True),
        ("höhe;zeit\n".encode("latin-1"), True),
        (b"", False),
        (b" \r\n ", False),
        (b"\x89PNG\r\n\x1a\n\x00\x00", False),
        (b"a\x00b\x00", False),
    ],
)
def test_sniff_knows_text(head, answer):
    assert delimited.sniff(head, "x") is answer


@pytest.mark.parametrize(
    ("text", "unit"),
    [
        (table("time_s,elevation_m"), "m"),
        (table("t [s],eta [cm]"), "cm"),
        (table("t [s]  eta [cm]", row="{t}  {v}"), "cm"),
        (table("t [s] eta [cm]", row="{t} {v}"), "cm"),
        (table("time / s;surface elevation / ft", row="{t};{v}"), "ft"),
        (table("time / s  surface elevation / ft", row="{t}   {v}"), "ft"),
        (table("time_s\theave (mm)", row="{t}\t{v}"), "mm"),
        (table("# time_s elevation_m", row="{t} {v}"), "m"),
        (table("% comment\n! another\n// third\ntime_s,eta_mm"), "mm"),
        (table("# time_s elevation_mm"), "mm"),
        (table("# wave record", row="{t} {v}"), "m"),  # two words, but no heading
        (table("time,eta\ns,cm"), "cm"),
        (table("time;eta\n[s];[cm]", row="{t};{v}"), "cm"),
        (table("Station A\nsome words: here\ntime_s,eta_m"), "m"),
        (table('"time_s","eta_m"', row='"{t}","{v}"'), "m"),
        (table("time_s,eta_m", row="{t},{v},"), "m"),  # rows that end with a delimiter
        (table("station,time_s,flag,eta_m", row="A7,{t},good,{v}"), "m"),
        ("\ufeff" + table("time_s,elevation_m"), "m"),
        (table("time_s,elevation_m").replace("\n", "\r\n"), "m"),
        (table("time_s,elevation_m").replace("\n", "\n\n# remark\n"), "m"),
        (table("time_s,elevation_m").rstrip("\n"), "m"),
        (table(""), "m"),
    ],
)
def test_header_delimiter_and_unit_are_found(text, unit):
    samples = read(text)
    assert samples.unit == unit
    np.testing.assert_array_equal(samples.times, np.arange(5) * 0.5)
    np.testing.assert_array_equal(samples.values, np.arange(5))


def test_latin_1_heading_is_read():
    text = table("time_s,höhe_m").encode("latin-1")
    assert read(text).values.tolist() == [0, 1, 2, 3, 4]


@pytest.mark.parametrize("delimiter", [";", "\t", " "])
def test_decimal_comma(delimiter):
    rows = "".join(f"{i * 0.5:.1f}{delimiter}{i / 8:.3f}\n".replace(".", ",") for i in range(5))
    samples = read(f"time_s{delimiter}eta_m\n{rows}")
    np.testing.assert_array_equal(samples.times, np.arange(5) * 0.5)
    np.testing.assert_array_equal(samples.values, np.arange(5) / 8)


def test_mixed_decimal_marks_are_refused_at_their_row():
    with pytest.raises(RecordFormatError, match=r"line 4: elevation '1,234' has a decimal comma"):
        read("t_s;eta_mm\n0;0.5\n1;0.25\n2;1,234\n")
    with pytest.raises(RecordFormatError, match=r"line 3: elevation '1.234,5' is not a number"):
        read("t_s;eta_mm\n0;0,5\n1;1.234,5\n")


@pytest.mark.parametrize(
    ("header", "row", "seconds"),
    [
        ("time_ms,eta_m", "{t},{v}", 1e-3),
        ("t [min],eta_m", "{t},{v}", 60.0),
        ("time (h),eta_m", "{t},{v}", 3600.0),
        ("elapsed,eta_m", "{t},{v}", 1.0),
    ],
)
def test_time_units(header, row, seconds):
    samples = read(table(header, row=row), window=np.inf)
    np.testing.assert_allclose(samples.times, np.arange(5) * 0.5 * seconds)
    assert not samples.calendar
    assert bool(samples.warnings) == ("elapsed" in header)


def test_time_since_an_epoch_is_calendar_time():
    samples = read(table("time [seconds since 2000-03-01 00:00:00],eta_m"))
    assert samples.calendar
    assert samples.times[0] == 951868800.0  # exact: 11017 days after 1970-01-01
    assert read(table("unix_s,eta_m")).calendar


@pytest.mark.parametrize(
    "stamp", ["2000-03-01T00:00:0{i}", "2000-03-01 00:00:0{i}", "2000/03/01 00:00:0{i}.0"]
)
@pytest.mark.parametrize("zone", ["Z", "", "+00:00"])
def test_calendar_time_and_the_warning_for_naive_stamps(stamp, zone):
    rows = "".join(f"{stamp.format(i=i)}{zone},{i}\n" for i in range(5))
    samples = read("time,eta_m\n" + rows)
    np.testing.assert_array_equal(samples.times, 951868800.0 + np.arange(5))
    assert any("taken as UTC" in w for w in samples.warnings) == (zone == "")


@pytest.mark.parametrize("delimiter", [",", " ", ";", "\t"])
@pytest.mark.parametrize("header", [True, False])
def test_date_and_time_of_day_in_two_columns(delimiter, header):
    d = delimiter
    rows = "".join(f"2000-03-01{d}00:00:0{i}.5{d}{i}\n" for i in range(5))
    samples = read((f"date{d}time{d}eta_m\n" if header else "") + rows)
    np.testing.assert_array_equal(samples.times, 951868800.5 + np.arange(5))
    np.testing.assert_array_equal(samples.values, np.arange(5))


@pytest.mark.parametrize("token", ["", "nan", "NaN", "NA", "-", "n/a", "null"])
def test_missing_values_are_gaps(token):
    samples = read(f"time_s,eta_m\n0,1\n1,{token}\n2,3\n")
    np.testing.assert_array_equal(samples.values, [1, np.nan, 3])


def test_fill_values_are_gaps_only_when_declared():
    rows = "0,1\n1,-999.99\n2,3\n"
    assert read("time_s,eta_m\n" + rows).values[1] == -999.99
    by_option = read("time_s,eta_m\n" + rows, fill_value=-999.99)
    by_comment = read("# fill value = -999.99\ntime_s,eta_m\n" + rows)
    by_name = read("# missing_value: -999.99\ntime_s,eta_m\n" + rows)
    in_heading = read("time_s,eta_m (missing = -999.99)\n" + rows, unit="m")
    for samples in (by_option, by_comment, by_name, in_heading):
        np.testing.assert_array_equal(samples.values, [1, np.nan, 3])
        assert any("read as missing" in line for line in samples.history)


def test_columns_are_chosen_by_name_number_or_heading():
    text = "time_s,heave_north_m,heave_up_m\n0,9,1\n1,9,2\n"
    for wanted in ("heave_up_m", "Heave_Up", "3"):
        assert read(text, elevation_column=wanted).values.tolist() == [1, 2]
    with pytest.raises(RecordFormatError, match=r"several columns.*3 'heave_up_m'"):
        read(text)
    with pytest.raises(RecordFormatError, match=r"names no single column.*1 'time_s'"):
        read(text, elevation_column="surge")
    with pytest.raises(RecordFormatError, match="is the column of time"):
        read(text, elevation_column="time_s")
    two_times = "time_s,elapsed_s,eta_m\n0,5,1\n1,6,2\n"
    with pytest.raises(RecordFormatError, match="several columns of time; choose one"):
        read(two_times)
    assert read(two_times, time_column="elapsed_s", elevation_column="eta_m").times[0] == 5


def test_rate_instead_of_a_time_column():
    samples = read("eta_m\n1\n2\n3\n", sampling_hz=2.0)
    assert samples.times.tolist() == [0, 0.5, 1.0]
    assert not samples.stamped
    with pytest.raises(RecordFormatError, match=r"one column and no time.*sampling_hz"):
        read("eta_m\n1\n2\n3\n")
    with pytest.raises(RecordFormatError, match="no column that is clearly time"):
        read("heave_m,surge_m\n1,2\n2,3\n")


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("time_s,eta_m\n0,1\n1,abc\n", r"demo.csv, line 3: elevation 'abc' is not a number"),
        ("time_s,eta_m\n0,abc\n1,2\n", r"demo.csv, line 2: elevation 'abc' is not a number"),
        ("time_s,eta_m\n0,1\n1,1_0\n", r"line 3: elevation '1_0' is not a number"),
        ("time_s,eta_m\n0,1\n1,inf\n", r"line 3: elevation is 'inf': leave the field blank"),
        ("time_s,eta_m\n0,1\n1,1e999\n", r"line 3: elevation is '1e999'"),
        ("time_s,eta_m\n0,1\nnan,1\n", r"line 3: time is 'nan': every row needs a finite time"),
        ("time_s,eta_m\n0,1\n,1\n", r"line 3: time is '': every row needs"),
        ("time_s,eta_m\n0,1\nx,1\n", r"line 3: time 'x' is not a number"),
        ("time_s,eta_m\n0,1\n1,2,3\n", r"line 3: 3 field\(s\) where the first row has 2"),
        ("time_s,eta_m\n5,1\n4.5,2\n", r"line 3: time runs backwards, from 5 s to 4.5 s: sort"),
        ("time_s,eta_m\n", r"holds no row of numbers \(its first line is 'time_s,eta_m'\)"),
        ("only words\n", "holds no row of numbers"),
        ("time_s,eta_dbar\n0,1\n1,2\n", ""),  # no unit stated: taken as metres, with a warning
        ("time_s,eta [dbar]\n0,1\n1,2\n", r"column 'eta \[dbar\]': 'dbar' is not a known unit"),
        ("time [m],eta_m\n0,1\n1,2\n", r"column 'time \[m\]': 'm' is not a known unit of time"),
        ("time,eta_m\n03/04/2031 10:00,1\n", r"line 2: column 'time': .*cannot be told apart"),
        ("time,eta_m\n12:00:00,1\n12:00:01,2\n", r"'12:00:00' is not a time"),
        ("time,eta_m\n2031-01-01T00:00:00Z,1\n2031-01-01T00:00:01,2\n",
         r"line 3: '2031-01-01T00:00:01' states no offset from UTC unlike the first row"),
        ("time,eta_m\n2031-01-01T00:00:00Z,1\n2031-01-32T00:00:01Z,2\n",
         r"line 3: time '2031-01-32T00:00:01Z' is not a time that exists"),
        ("time_s,eta_m\n0,nan\n1,\n", "holds no elevation in the window"),
        ("1,2,3\n2,3,4\n", "no column that is clearly time.*the columns are 1, 2, 3"),
    ],
)  # fmt: skip
def test_bad_tables_are_refused_by_row_value_and_remedy(text, message):
    if not message:
        assert any("taken as metres" in w for w in read(text).warnings)
        return
    with pytest.raises(RecordFormatError, match=message):
        read(text)


def test_option_unit_goes_before_the_header_and_says_so():
    samples = read(table("time_s,eta_cm"), unit="mm")
    assert samples.unit == "mm"
    assert "states cm but was read as mm" in samples.warnings[0]


def test_a_line_without_end_is_refused_in_bounded_memory():
    endless = (b"1 " * 2**19 for _ in range(100))
    with pytest.raises(RecordFormatError, match="a line of more than 1048576 bytes"):
        delimited.read(endless, path="x")


def test_blocks_may_break_anywhere():
    text = table("time_s,elevation_m", rows=40).encode()
    whole = read(text)
    for size in (30, 64, 101):
        blocks = (text[i : i + size] for i in range(0, len(text), size))
        pieces = delimited.read(blocks, path="demo.csv")
        np.testing.assert_array_equal(pieces.values, whole.values)
        np.testing.assert_array_equal(pieces.lines, whole.lines)
        assert pieces.history == whole.history


def test_only_the_last_window_is_kept_and_said():
    samples = read(table("time_s,elevation_m", rows=100), window=10.0)
    assert samples.times[0] == 39.5 and samples.times.size == 21
    assert samples.history[-1] == "100 rows read, 21 kept (the last 10 s)"


def test_issue_time_before_the_first_row_is_refused():
    with pytest.raises(RecordFormatError, match="no row up to the issue time -1 s: its first row"):
        read(table("time_s,elevation_m"), at=-1)


@pytest.mark.parametrize("cut", ["2.5", "2.5,1e", "2.5,", "2."])
def test_a_last_line_still_being_written_is_left_out_and_said(cut):
    whole = table("time_s,elevation_m")
    samples = read(whole + cut)
    if cut == "2.5,":  # as many fields as the others: a missing value
        assert samples.times[-1] == 2.5 and np.isnan(samples.values[-1])
        return
    assert samples.times.tolist() == read(whole).times.tolist()
    assert samples.warnings == (*read(whole).warnings, "line 7, the last, is incomplete: left out")
    # with its line end it is wrong
    with pytest.raises(RecordFormatError, match="line 7"):
        read(whole + cut + "\n")


def test_an_incomplete_line_past_the_issue_time_changes_nothing():
    whole = table("time_s,elevation_m")
    cut, plain = read(whole + "2.", at=2.0), read(whole, at=2.0)
    assert (cut.warnings, cut.history) == (plain.warnings, plain.history)
    assert cut.values.tolist() == plain.values.tolist()


def test_the_only_row_cannot_be_left_out():
    with pytest.raises(RecordFormatError):
        read("time_s,elevation_m\n0.0,1e")


def test_a_column_of_another_unit_is_no_elevation():
    row = "{t},{v},7.5,1013"
    samples = read(table("time [s],A [cm],Temp [C],P [hPa]", row=row))
    assert samples.unit == "cm" and samples.values.tolist() == [0, 1, 2, 3, 4]
    assert read(table("time [s],Elev,Temp", row="{t},{v},7.5")).values[-1] == 4
    for heading in ("time [s],A [cm],B [cm],P [hPa]", "time [s],A [cm],B,P [hPa]"):
        with pytest.raises(RecordFormatError, match="several columns"):
            read(table(heading, row=row))


def test_a_logger_that_began_anew_is_refused_with_the_remedy():
    rows = "".join(f"{t},0.1\n" for t in (0.0, 0.5, 1.0, 0.0, 0.5))
    with pytest.raises(RecordFormatError, match=r"line 5.*only those from this row on"):
        read("time_s,elevation_m\n" + rows)
