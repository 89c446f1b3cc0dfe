"""Records of scopes and loggers: any preamble, bounded, and refused with the line."""

import tracemalloc

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from sumwright.errors import InvalidReadings
from sumwright.files import capture
from sumwright.files.capture import read_capture

ROWS = "0.0,1.5,-2.0\n1e-3,1.6,-2.1\n2e-3,1.7,-2.2\n3e-3,1.8,-2.3\n4e-3,1.9,-2.4\n"
TIME, A, B = [0, 1e-3, 2e-3, 3e-3, 4e-3], [1.5, 1.6, 1.7, 1.8, 1.9], [-2, -2.1, -2.2, -2.3, -2.4]


@pytest.mark.parametrize(
    ("text", "names"),
    [
        (ROWS, ["channel 1", "channel 2"]),
        ("time,north,out\n" + ROWS, ["north", "out"]),
        ("\ufefftime,north,out\n" + ROWS, ["north", "out"]),
        ("Recorder 7\nSerial,00012\nStart,12:00:03\n\nt,north,out\ns,V,V\n" + ROWS, ["north", "out"]),
        ("Sample Interval,0.001\nRecord Length,5\nt [s],north [V],out (V)\n" + ROWS, ["north", "out"]),
        ("t;north;out\n" + ROWS.replace(",", ";").replace(".", ","), ["north", "out"]),
        ("t\tnorth\tout\r\n" + ROWS.replace(",", "\t").replace("\n", "\r\n"), ["north", "out"]),
        ("t  north out\n" + ROWS.replace(",", "   "), ["north", "out"]),
        ("time,north,out,\n" + ROWS.replace("\n", ",\n"), ["north", "out"]),
        ('"time","north","out"\n' + ROWS.replace("1.5", '"1.5"'), ["north", "out"]),
        ("t,a\xb0,a\xb0\n" + ROWS, ["a\xb0", "a\xb0 '"]),
        (ROWS.rstrip("\n"), ["channel 1", "channel 2"]),
        (ROWS + "\n\n", ["channel 1", "channel 2"]),
    ],
)
def test_the_same_record_however_it_is_written(text, names):
    data = text.encode("utf-8" if text.startswith("\ufeff") else "latin-1")
    got = read_capture(data)
    assert list(got.channels) == names
    np.testing.assert_allclose(got.time, TIME)
    np.testing.assert_allclose(list(got.channels.values()), [A, B])
    assert got.interval == pytest.approx(1e-3)


def test_units_in_the_heading_are_taken_into_account():
    got = read_capture(b"time (ms),north [mV],out\n" + ROWS.encode())
    np.testing.assert_allclose(got.time, np.array(TIME) * 1e-3)
    np.testing.assert_allclose(got.channels["north"], np.array(A) * 1e-3)


@pytest.mark.parametrize(
    ("head", "unit", "scale"),
    [
        ("t [µs],north,out", "µs", 1e-6), ("t [\u03bcs],north,out", "µs", 1e-6), ("Time (ms),north,out", "ms", 1e-3), ("Time/ms,north,out", "ms", 1e-3),
        ("time_ms,north,out", "ms", 1e-3), ("time us,north,out", "µs", 1e-6), ("TIME [S],north,out", "s", 1), ("ms,north,out", "ms", 1e-3),
        ("t (min),north/mV,out", "min", 60), ("t,north,out\nms,V,V", "ms", 1e-3),
    ],
)  # fmt: skip
def test_time_is_taken_in_the_unit_of_its_heading(head, unit, scale):
    for coding in ("utf-8", "utf-8-sig", *(["latin-1"] if "\u03bc" not in head else [])):
        got = read_capture(f"{head}\n{ROWS}".encode(coding))
        assert (got.time_unit, got.time_stated) == (unit, True)
        np.testing.assert_allclose(got.time, np.array(TIME) * scale)
        assert list(got.channels) == ["north", "out"]
        np.testing.assert_allclose(got.channels["north"], np.array(A) * (1e-3 if "mV" in head else 1))
    assert not read_capture(b"time,north,out\n" + ROWS.encode()).time_stated


def test_time_in_a_unit_that_is_none_is_refused():
    with pytest.raises(InvalidReadings, match=r"line 1: time is in .parsec.; it must be in s, ms"):
        read_capture(b"time (parsec),north,out\n" + ROWS.encode())


def test_times_printed_too_coarsely_are_spread_evenly():
    rows = "".join(f"{k // 4 / 1000:.3f},{k}\n" for k in range(40))
    got = read_capture(rows.encode())
    assert (np.diff(got.time) > 0).all()
    assert got.interval == pytest.approx(0.25e-3, rel=0.02)


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "empty"), ("   \n\n", "empty"), ("hello\nworld\n", "no table of numbers"), ("1\n2\n3\n4\n", "no table"),
        ("0,1\n", "single row"),
        ("t,a\n0,1\n1,2\n2,3\n3,4\n2.5,5\n", "line 6: time runs backwards"),
        ("0,1\n0,2\n0,3\n0,4\n", "every time is 0"),
        ("t,a\n0,1\n1,2\n2,3\n3,4\n4,five\n", 'line 6, column 2 \\(a\\): "five"'),
        ("t,a\n0,1\n1,2\n2,3\n3,4\n4\n5,6\n", "line 6 has 1 cells"),
        ("t,a\n0,1\n1,2\n2,3\n3,4\n4,5,6\n5\n", "line 6 has 3 cells"),
        ("t,a\n0,1\n1,2\n2,3\n3,4\n4,nan\n", "line 6, column 2"),
        ("t,a\n0,1\n1,2\n2,3\n3,4\n4,1e999\n", "line 6, column 2"),
        ("t,a\n0,1\n1,2\n2,3\n3,4\n4,\n", "line 6"),
    ],
)  # fmt: skip
def test_what_is_no_record_is_refused_with_its_line(text, says):
    with pytest.raises(InvalidReadings, match=says):
        read_capture(text.encode())


def test_a_file_is_read_like_its_bytes(tmp_path):
    """The fast way by NumPy's reader, and what it must hand back to the slow way."""
    path = tmp_path / "record.csv"
    for text in (
        ROWS,
        "Model,7\nt,a,b\n" + ROWS,
        "t,a,b,\n" + ROWS.replace("\n", ",\n"),
        "t  a b\n" + ROWS.replace(",", " "),
        ROWS + "\n\n",
    ):
        path.write_text(text)
        one, other = read_capture(path), read_capture(text.encode())
        np.testing.assert_array_equal(one.time, other.time)
        np.testing.assert_array_equal(list(one.channels.values()), list(other.channels.values()))
    path.write_text("t,a\n0,1\n1,2\n2,3\n3,4\n4,nan\n")
    with pytest.raises(InvalidReadings, match="line 6, column 2"):
        read_capture(path)
    path.write_text("t,a\n0,1\n1,2\n2,3\n3,4\n4\n5,6\n")
    with pytest.raises(InvalidReadings, match="line 6 has 1 cells"):
        read_capture(path)


def test_other_refusals(tmp_path, monkeypatch):
    with pytest.raises(InvalidReadings, match="UTF-16"):
        read_capture(ROWS.encode("utf-16"))
    with pytest.raises(InvalidReadings, match="columns"):
        read_capture(("0" + ",1" * 40 + "\n").encode() * 6)
    with pytest.raises(InvalidReadings, match="does not exist"):
        read_capture(tmp_path / "none.csv")
    huge = tmp_path / "huge.csv"
    with huge.open("wb") as stream:
        stream.truncate(2**30)
    with pytest.raises(InvalidReadings, match="1024 MB; at most 700 MB"):
        read_capture(huge)
    monkeypatch.setattr(capture, "MOST_ROWS", 100)
    with pytest.raises(InvalidReadings, match="more than 100 rows"):
        read_capture("".join(f"{k},1\n" for k in range(101)).encode())


def test_an_error_deep_in_a_long_record_names_its_line(monkeypatch):
    monkeypatch.setattr(capture, "BLOCK", 4096)
    rows = [f"{k * 1e-3:.3f},{k % 7}" for k in range(5000)]
    rows[4321] = "4.321,x"
    with pytest.raises(InvalidReadings, match="line 4323, column 2"):
        read_capture(("t,a\n" + "\n".join(rows)).encode())


def test_memory_stays_near_that_of_the_numbers():
    count = 200_000
    data = b"t,a,b\n" + b"".join(b"%d,1.25,-0.5\n" % k for k in range(count))
    tracemalloc.start()
    got = read_capture(data)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert len(got.time) == count
    assert peak < 6 * (3 * 8 * count) + 6 * capture.BLOCK


@settings(max_examples=150)
@given(st.binary(max_size=200))
def test_no_bytes_do_anything_but_read_or_be_refused(data):
    for head in (b"", b"t,a\n0,1\n1,2\n2,3\n3,4\n"):
        try:
            got = read_capture(head + data)
        except InvalidReadings:
            continue
        assert np.isfinite(got.time).all()
        assert (np.diff(got.time) >= 0).all()


@pytest.mark.parametrize(
    ("rows", "line"), [("0,1,2\n1,2,3\n2,x,4\n", 4), ("0,1,2\n1,2,3\n2,4\n", 4), ("0;1,5\n1;2,5\nend;0\n", 4)]
)
def test_a_short_table_that_breaks_off_is_named_by_its_line_and_its_own_name(tmp_path, rows, line):
    path = tmp_path / "capture-1.csv"
    path.write_text("time;a;b\n" + rows if ";" in rows else "time,a,b\n" + rows)
    with pytest.raises(InvalidReadings, match=f"^“scope 7.csv”, line {line} is "):
        read_capture(path, "“scope 7.csv”")
