import gzip
import io
import resource
import subprocess
import sys
from dataclasses import fields

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from forecaster.datatypes import Record
from forecaster.errors import InputError, RecordFormatError
from forecaster.records import read as module
from forecaster.records.read import bridge_gaps, cut, read_record, record_from_arrays

# exact: SI prefixes; international yard and pound agreement 1959
METRES = {"m": 1.0, "cm": 0.01, "mm": 0.001, "ft": 0.3048}


def read_text(text, **options):
    return read_record(io.BytesIO(text if isinstance(text, bytes) else text.encode()), **options)


def same(first: Record, second: Record) -> bool:
    """Equal in every field, arrays byte for byte."""
    return all(
        a.tobytes() == b.tobytes() if isinstance(a, np.ndarray) else a == b
        for a, b in ((getattr(first, f.name), getattr(second, f.name)) for f in fields(Record))
    )


@st.composite
def dialects(draw):
    """A table written in some dialect, and what it says: (bytes, options, metres, dt, start)."""
    n = draw(st.integers(8, 60))
    counts = draw(st.lists(st.integers(-5000, 5000), min_size=n, max_size=n))
    gaps = draw(st.sets(st.integers(1, n - 2), max_size=3))
    unit = draw(st.sampled_from(sorted(METRES)))
    delimiter = draw(st.sampled_from([",", ";", "\t", " ", "   "]))
    comma = delimiter != "," and draw(st.booleans())
    style = draw(st.sampled_from(["seconds", "ms", "iso", "naive", "split", "rate"]))
    by_option = draw(st.booleans())
    dt = draw(st.sampled_from([0.25, 0.5, 1.0]))
    start = {"seconds": 40.0, "ms": 40.0, "rate": 0.0}.get(style, 951868800.0)
    missing = draw(st.sampled_from(["nan", "NA", "-"] + ([""] if delimiter in ",;\t" else [])))
    if style == "rate" and missing == "":
        missing = "nan"  # a blank line is no row
    mark = "," if comma else "."
    unit_text = "" if by_option else draw(st.sampled_from(["_{u}", "[{u}]"])).format(u=unit)
    names, rows = [f"eta{unit_text}"], []
    names[:0] = {"seconds": ["time_s"], "ms": ["t_ms"], "split": ["date", "clock"], "rate": []}.get(
        style, ["time"]
    )
    for i, count in enumerate(counts):
        t = start + i * dt
        iso = str(np.datetime64(round(t * 1000), "ms"))
        stamp = {
            "seconds": [f"{t:.2f}".replace(".", mark)], "ms": [f"{t * 1000:.0f}"], "rate": [],
            "iso": [iso + draw(st.sampled_from(["Z", "+00:00"]))], "naive": [iso],
            "split": iso.split("T"),
        }[style]  # fmt: skip
        value = missing if i in gaps else f"{count / 1000:.3f}".replace(".", mark)
        rows.append(delimiter.join([*stamp, value]))
    lines = [draw(st.sampled_from(["#", "%", "!", "//"])) + " a remark"] * draw(st.integers(0, 2))
    lines += [delimiter.join(names), *rows]
    end = draw(st.sampled_from(["\n", "\r\n"]))
    data = end.join(lines).encode() + draw(st.sampled_from([b"", end.encode()]))
    data = draw(st.sampled_from([b"", b"\xef\xbb\xbf"])) + data
    if draw(st.booleans()):
        data = gzip.compress(data, 1)
    metres = np.array(counts) / 1000 * METRES[unit]
    metres[sorted(gaps)] = np.nan
    options = {"unit": unit} if by_option else {}
    if style == "rate":
        options["sampling_hz"] = 1 / dt
    return data, options, metres, dt, start, style


@given(dialects())
@settings(max_examples=200)
def test_every_dialect_gives_the_same_record(dialect):
    data, options, metres, dt, start, style = dialect
    record = read_text(data, **options)
    assert record.dt == pytest.approx(dt, rel=1e-9)
    assert record.start == pytest.approx(start)
    assert record.calendar == (style in ("iso", "naive", "split"))
    np.testing.assert_allclose(
        record.elevation, metres - np.nanmean(metres), rtol=0, atol=1e-9, equal_nan=True
    )
    assert any("taken as UTC" in w for w in record.warnings) == (style in ("naive", "split"))
    assert record.history[-1].startswith("mean level")


LATER = st.lists(
    st.one_of(
        st.text(alphabet="abc;,.# -\t0123456789", max_size=20).map(str.encode),
        st.binary(max_size=20).map(lambda b: b.replace(b"\n", b"")),
        st.sampled_from([b"5.0,1.0", b"-3,9", b"1e9,inf", b"nan,nan", b"7,8,9", b"12.0", b"#x"]),
    ),
    max_size=8,
)


@given(
    st.integers(1, 30),
    st.sampled_from(["0.5", "inf", "abc", "", "1,5", "999"]),
    LATER,
    st.booleans(),
)
@settings(max_examples=200)
def test_later_rows_change_no_byte(n, first_value, later, calendar):
    def stamp(i):
        return f"2000-03-01T00:{i // 60:02d}:{i % 60:02d}Z" if calendar else f"{i}.0"

    text = "time,eta_m\n" + "".join(f"{stamp(i)},{i % 7}\n" for i in range(n + 1))
    at = stamp(n)
    longer = text.encode() + f"{stamp(n + 1)},{first_value}\n".encode() + b"\n".join(later)
    assert same(read_text(text, at=at), read_text(longer, at=at))


@given(st.sampled_from(["abc", "inf", "1_0"]), LATER)
@settings(max_examples=50)
def test_later_rows_change_no_error(bad, later):
    text = f"time,eta_m\n0.0,1\n1.0,{bad}\n2.0,2\n".encode()
    messages = []
    for data in (text, text + b"3.0,what\n" + b"\n".join(later)):
        with pytest.raises(RecordFormatError) as caught:
            read_text(data, at=2.0)
        messages.append(str(caught.value))
    assert messages[0] == messages[1]


def test_window_and_issue_time_agree_with_cut():
    times = np.arange(2000) * 0.5
    text = "time_s,eta_m\n" + "".join(f"{t},{np.sin(t):.4f}\n" for t in times)
    whole = read_text(text, window=np.inf)
    part = read_text(text, at=700.2, window=300.0)
    from_whole = cut(whole, at=700.2, window=300.0)
    assert (part.n, part.start, part.end) == (600, 400.5, 700.0)
    assert (part.dt, part.start, part.n) == (from_whole.dt, from_whole.start, from_whole.n)
    np.testing.assert_allclose(part.elevation, from_whole.elevation, atol=1e-12)
    assert "1401 rows up to the issue time read, 601 kept" in part.history[1]


def test_iso_issue_time_and_a_late_one():
    text = "time,eta_m\n" + "".join(f"2000-03-01T00:00:{i:02d}Z,{i % 5}\n" for i in range(40))
    record = read_text(text, at="2000-03-01T00:00:20")
    assert record.calendar and record.end == 951868820.0 and record.n == 21
    late = read_text(text, at="2000-03-01T00:10:00Z")
    assert "561 s before the issue time" in late.warnings[-1]
    with pytest.raises(InputError, match="the record has none"):
        read_text("time_s,eta_m\n0,1\n1,2\n", at="2000-03-01T00:00:20")


def test_amplitude_is_kept_and_the_mean_removed():
    record = read_text("time_s,eta_mm\n0,1500\n1,2500\n2,500\n", sensor="radar", depth=30.0)
    np.testing.assert_allclose(record.elevation, [0, 1, -1], atol=1e-15)  # by hand
    assert record.history[-1] == "mean level 1.5 m removed"
    assert (record.sensor, record.depth) == ("radar", 30.0)


def test_files_paths_and_standard_input(tmp_path, monkeypatch):
    data = b"time_s,eta_m\n0,1\n1,2\n2,4\n"
    plain, packed = tmp_path / "a.csv", tmp_path / "a.csv.gz"
    plain.write_bytes(data)
    packed.write_bytes(gzip.compress(data[:20]) + gzip.compress(data[20:]))  # two members
    first = read_record(plain)
    assert first.source == str(plain)
    np.testing.assert_array_equal(first.elevation, read_record(str(packed)).elevation)
    with open(plain, "rb") as stream:
        np.testing.assert_array_equal(first.elevation, read_record(stream).elevation)
        assert not stream.closed
    monkeypatch.setattr(sys, "stdin", io.TextIOWrapper(io.BytesIO(data)))
    np.testing.assert_array_equal(first.elevation, read_record("-").elevation)
    with pytest.raises(InputError, match="binary mode"):
        read_record(io.StringIO("a"))


def test_files_that_are_no_record_are_refused(tmp_path, monkeypatch):
    def refused(data, message, **options):
        path = tmp_path / "bad.dat"
        path.write_bytes(data)
        with pytest.raises(RecordFormatError, match=message) as caught:
            read_record(path, **options)
        assert str(path) in str(caught.value)

    good = b"time_s,eta_m\n0,1\n1,2\n2,4\n"
    refused(b"", "is empty")
    refused(gzip.compress(b""), "is empty")
    refused(b" \n\n", "not in a known format")
    refused(np.random.default_rng(1).bytes(5000), "not in a known format.*text table")
    refused("time_s,eta_m\n0,1\n".encode("utf-16"), "UTF-16 text: save it as UTF-8")
    refused(gzip.compress(good)[:-12], "damaged gzip file")
    refused(b"\x1f\x8b" + b"garbage" * 9, "damaged gzip file")
    refused(gzip.compress(gzip.compress(good)), "not in a known format")
    refused(b"time_s,eta_m\n0,1\n", "1 different time")
    refused(b"eta_m\n1\n", "fewer than 2 rows", sampling_hz=2.0)
    refused(b"time_s,eta_m\n0,1\n1,9.97e36\n2,4\n", "line 3: elevation 9.97e.36 m is no elevation")
    with pytest.raises(RecordFormatError, match="no such file"):
        read_record(tmp_path / "none.csv")
    with pytest.raises(RecordFormatError, match="is a directory"):
        read_record(tmp_path)
    with pytest.raises(RecordFormatError, match="cannot be opened"):
        read_record("a\0b")
    monkeypatch.setattr(module, "MAX_DECOMPRESSED", 3 << 20)
    rows = b"time_s,eta_m\n" + b"".join(b"%d,0.5\n" % i for i in range(500_000))
    refused(gzip.compress(rows, 1), "more than 3145728 bytes when decompressed")


@given(st.binary(max_size=300))
@settings(max_examples=300)
def test_garbage_raises_nothing_else(data):
    try:
        read_text(data)
    except InputError:
        pass


@given(st.text(alphabet="0123456789.,;-+eE:T Z\n\t#naNtimes_m[]/", max_size=120))
@settings(max_examples=200)
def test_almost_tables_raise_nothing_else(text):
    try:
        read_text("time_s,eta_m\n0,1\n" + text)
        read_text(text, sampling_hz=2.0)
    except InputError:
        pass


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ({"depth": -30.0}, "depth must lie between 0 and 12000 m.*-30"),
        ({"depth": np.nan}, "depth must lie"),
        ({"depth": 1e6}, "depth must lie.*1000000"),
        ({"window": 0.0}, "window must be a positive"),
        ({"window": np.nan}, "window must be a positive"),
        ({"sensor": "kite"}, "sensor must be one of fixed, buoy"),
        ({"unit": "fathom"}, "'fathom' is not a known unit"),
        ({"sampling_hz": 0.0}, "sampling_hz must be a positive"),
        ({"sampling_hz": np.inf}, "sampling_hz must be a positive"),
        ({"at": "soon"}, "'soon' is not a time"),
        ({"at": np.nan}, "issue time must be finite"),
        ({"sampling_hz": 9.0}, "step of 1 s but 0.111111 s was given"),
    ],
)
def test_options_are_checked(options, message):
    with pytest.raises(InputError, match=message):
        read_text("time_s,eta_m\n0,1\n1,2\n2,4\n", **options)


def test_record_from_arrays():
    record = record_from_arrays([1.0, 2.0, np.nan, 6.0], dt=0.5, start=3.0, sensor="buoy")
    np.testing.assert_array_equal(record.elevation, [-2, -1, np.nan, 3])  # by hand
    assert (record.start, record.dt, record.sensor) == (3.0, 0.5, "buoy")
    masked = np.ma.masked_array([1.0, 2.0, 99.0, 6.0], mask=[0, 0, 1, 0])
    assert record_from_arrays(masked, dt=0.5).elevation.tobytes() == record.elevation.tobytes()
    stamps = np.datetime64("2000-03-01") + np.arange(4) * np.timedelta64(500, "ms")
    dated = record_from_arrays([1.0, 2.0, np.nan, 6.0], times=stamps)
    assert dated.calendar and dated.start == 951868800.0 and dated.dt == 0.5


@given(st.integers(2, 30), st.lists(st.floats(-9, 9), min_size=1, max_size=30), st.booleans())
def test_later_samples_change_no_byte(n, later, with_times):
    early = np.sin(np.arange(n)).tolist()

    def made(values):
        clock = {"times": 0.5 * np.arange(len(values))} if with_times else {"dt": 0.5}
        return record_from_arrays(values, at=0.5 * (n - 1), window=10.0, **clock)

    assert same(made(early), made(early + later))
    plain = Record(np.array(early), dt=0.5), Record(np.array(early + later), dt=0.5)
    short = cut(plain[0], window=10.0), cut(plain[1], at=0.5 * (n - 1), window=10.0)
    if n > 20:
        assert short[0].elevation.tobytes() == short[1].elevation.tobytes()


@pytest.mark.parametrize(
    ("values", "options", "message"),
    [
        ([1.0], {"dt": 1.0}, "at least 2 values"),
        ([[1.0, 2.0]], {"dt": 1.0}, "one row"),
        (["a", "b"], {"dt": 1.0}, "must be numbers in metres"),
        ([1.0, np.inf], {"dt": 1.0}, r"elevation\[1\] is inf m"),
        ([np.nan, np.nan], {"dt": 1.0}, "holds no number"),
        ([1.0, 2.0], {}, "either dt or times"),
        ([1.0, 2.0], {"dt": 1.0, "times": [0, 1]}, "either dt or times"),
        ([1.0, 2.0], {"dt": -1.0}, "dt must be a positive"),
        ([1.0, 2.0], {"times": [0, 1, 2]}, "differ in shape"),
        ([1.0, 2.0, 3.0], {"times": [0, 2, 1]}, r"backwards, from times\[1\] = 2 to times\[2\]"),
        ([1.0, 2.0, 3.0], {"times": [0, np.nan, 1]}, r"times\[1\] is nan"),
        ([1.0, 2.0], {"dt": 1.0, "depth": 0.0}, "depth must lie"),
        ([1.0, 2.0], {"dt": 1.0, "at": 0.5}, "fewer than 2 samples"),
        ([1.0, 2.0], {"times": [0.0, 1.0], "at": 0.5}, "fewer than 2 samples"),
    ],
)
def test_arrays_are_checked(values, options, message):
    with pytest.raises(InputError, match=message):
        record_from_arrays(values, **options)


def test_cut_finds_the_sample_at_a_decimal_time():
    # by hand: 0.3 / 0.1 is 2.9999999999999996 in binary; the sample at 0.3 s is the fourth
    record = Record(np.arange(10.0), dt=0.1)
    assert cut(record, at=0.3).n == 4
    assert cut(record, at=0.29).n == 3
    assert cut(record, at=99.0) is record
    assert cut(record) is record
    with pytest.raises(InputError, match=r"fewer than 2 samples up to the issue time 0.05 s"):
        cut(record, at=0.05)
    with pytest.raises(InputError, match="nothing was measured"):
        cut(Record(np.array([np.nan, np.nan, 1.0]), dt=1.0), at=1.0)


def test_short_gaps_are_bridged_by_the_cubic_through_their_neighbours():
    x = np.arange(30.0)
    cubic = 0.001 * x**3 - 0.02 * x**2 + 0.3 * x - 1
    values = cubic.copy()
    values[10:12] = np.nan
    values[20] = np.nan
    record = bridge_gaps(Record(values, dt=0.5), longest=1.0)
    np.testing.assert_allclose(record.elevation, cubic, rtol=1e-12)  # exact: a cubic
    assert record.history == ("2 gap(s) of up to 1 s bridged by a cubic",)


def test_long_and_outer_gaps_go_to_the_mean_level():
    values = np.ones(30)
    values[:2] = values[10:14] = values[-1] = np.nan
    values[5] = values[7] = np.nan  # neighbours missing too: linear
    record = bridge_gaps(Record(values, dt=0.5), longest=1.0)
    expected = np.ones(30)
    expected[:2] = expected[10:14] = expected[-1] = 0
    np.testing.assert_array_equal(record.elevation, expected)
    assert "3 longer or outer gap(s) put at the mean level" in record.history[0]
    whole = Record(np.ones(5), dt=0.5)
    assert bridge_gaps(whole, longest=1.0) is whole
    with pytest.raises(InputError, match="longest"):
        bridge_gaps(whole, longest=np.nan)


SCORE_LAST_WINDOW = """
import resource, sys
from forecaster.records.read import read_record
before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
record = read_record(sys.argv[1])
after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
print(record.n, record.end, (after - before) / 1024)
"""


def _write_long_file(path, rows):
    with open(path, "w") as file:
        file.write("time_s,elevation_m\n")
        for first in range(0, rows, 100_000):
            times = 0.5 * np.arange(first, min(first + 100_000, rows))
            file.write("".join(f"{t:.1f},{np.sin(t):.3f}\n" for t in times.tolist()))


def _memory_of_reading(path):
    """Samples, end, and growth of the peak resident memory [MiB] in a process of its own."""
    out = subprocess.run(
        [sys.executable, "-c", SCORE_LAST_WINDOW, str(path)],
        capture_output=True, text=True, check=True,
    ).stdout.split()  # fmt: skip
    return int(out[0]), float(out[1]), float(out[2])


@pytest.mark.skipif(not hasattr(resource, "RUSAGE_SELF"), reason="needs POSIX resource usage")
@pytest.mark.parametrize("rows", [400_000, pytest.param(10_000_000, marks=pytest.mark.slow)])
def test_long_files_are_read_in_bounded_memory(tmp_path, rows):
    path = tmp_path / "long.csv"
    _write_long_file(path, rows)
    n, end, grown = _memory_of_reading(path)
    assert (n, end) == (3600, 0.5 * (rows - 1))
    assert grown < 64  # MiB; the 10 million rows alone are 160 MB as numbers
