"""Readings files as people and spreadsheets write them."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from sumwright.engine.stage import replace
from sumwright.errors import InvalidReadings
from sumwright.files.readings import MOST_BYTES, read_readings
from support.bench_stages import stage

DESIGN = stage()


def read(text, design=DESIGN):
    return read_readings(text.encode() if isinstance(text, str) else text, design)


PLAIN = "north,east,output\n10,0,1.4\n0,2.5,0.75\n"


@pytest.mark.parametrize(
    "text",
    [
        PLAIN,
        "\ufeff" + PLAIN,
        PLAIN.replace(",", ";"),
        PLAIN.replace(",", "\t"),
        PLAIN.replace(",", ";").replace(".", ","),
        PLAIN.replace(",", "\t").replace(".", ","),
        PLAIN.replace("\n", "\r\n"),
        "east,output,north\n0,1.4,10\n2.5,0.75,0\n",
        "\n\nnorth,east,output\n\n10,0,1.4\n\n0,2.5,0.75\n\n",
        '"north [V]",east (mV),output [V]\n10,0,1.4\n0,2500,0.75\n',
        "north / V,East,OUTPUT\n10,0,1400m\n0,2.5,0.75 V\n",
        "north,east,output\n+10.00,0.0,1.4e0\n0,2V5,7.5e-1\n".replace("2V5", "2.5 V"),
        'north;east;output\n"10";0;"1,4"\n0;2,5;0,75',
        "north,east,output,,\n10,0,1.4,,\n0,2.5,0.75,,\n",
    ],
)
def test_the_same_readings_however_they_are_written(text):
    got = read(text)
    assert got.names == DESIGN.signal_names
    np.testing.assert_allclose(got.volts, [[10, 0, 0, 0, 0], [0, 2.5, 0, 0, 0]])
    np.testing.assert_allclose(got.output, [1.4, 0.75])
    assert got.uncertainty is None
    assert got.unnamed == ("south", "west", "tare")


def test_uncertainty_takes_its_unit_too():
    got = read("north,output,uncertainty [mV]\n1,0.5,0.2\n2,0.6,0.3\n")
    np.testing.assert_allclose(got.uncertainty, [2e-4, 3e-4])
    assert got.lines == (2, 3)


def test_a_signal_whose_name_holds_brackets_is_not_taken_for_a_unit():
    signals = (replace(DESIGN.signals[0], name="level (m)"), *DESIGN.signals[1:])
    got = read("level (m),output\n1,2\n", replace(DESIGN, signals=signals))
    assert got.volts[0, 0] == 1


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "empty"),
        ("\n \n", "empty"),
        ("north,output\n", "no readings"),
        ("north,east\n1,2\n", "no column output"),
        ("north,outputs\n1,2\n", 'line 1, column 2 is named "outputs"'),
        ("north,north,output\n1,2,3\n", "twice"),
        ("north,North,output\n1,2,3\n", "twice"),
        ("north [A],output\n1,2\n", 'line 1, column 1 is in "A"'),
        ("north [MV],output\n1,2\n", "MV"),
        ("north,output\n1,2\n1,two\n", "line 3, column 2 \\(output\\)"),
        ("north,output\n1,\n", "line 2, column 2"),
        ("north,output\n1\n", "line 2 has 1 cells"),
        ("north,output\n1,2,3\n", "decimal comma"),
        ("north,output\n1,nan\n", "line 2"),
        ("north,output\n1,inf\n", "line 2"),
        ("north,output\n1,1e999\n", "line 2"),
        ("north,output\n1,1_0\n", "line 2"),
        ("north,output\n1,4k7Ω\n", "line 2"),
        ("north,output\n1,1e6\n", "over"),
        ("north,output,uncertainty\n1,2,0\n", "above 0"),
        ("north,output,uncertainty\n1,2,-1m\n", "above 0"),
        ('north,output\n"1,2\n', "line"),
        ("north,output\n1,2\x00\n", "zero bytes"),
        ("=cmd|' /C calc'!A0,output\n1,2\n", "column 1 is named"),
    ],
)
def test_what_cannot_be_meant_is_refused_with_its_place(text, says):
    with pytest.raises(InvalidReadings, match=says):
        read(text)


def test_an_error_is_one_line_whatever_the_cell_holds():
    with pytest.raises(InvalidReadings) as problem:
        read("north,output\n1,\u202e\x1b[31mred\n")
    assert "\x1b" not in str(problem.value)
    assert "\n" not in str(problem.value)


def test_a_huge_file_is_refused_before_it_is_read(tmp_path, monkeypatch):
    path = tmp_path / "huge.csv"
    with path.open("wb") as stream:
        stream.truncate(2**30)  # sparse: a gigabyte that takes no room
    monkeypatch.setattr("sumwright.files.readings.read_text", lambda *a: pytest.fail("it was read"))
    with pytest.raises(InvalidReadings, match="1024 MB; at most 16 MB"):
        read_readings(path, DESIGN)


def test_a_large_paste_is_refused():
    with pytest.raises(InvalidReadings, match="larger"):
        read(b"north,output\n" + b"1,2\n" * (MOST_BYTES // 4 + 1))


def test_other_encodings_are_refused_by_name():
    with pytest.raises(InvalidReadings, match="UTF-16"):
        read(PLAIN.encode("utf-16"))
    with pytest.raises(InvalidReadings, match="not UTF-8"):
        read(b"north,output\n1,2\xff\n")


def test_a_missing_file_and_a_folder_say_so(tmp_path):
    with pytest.raises(InvalidReadings, match="does not exist"):
        read_readings(tmp_path / "none.csv", DESIGN)
    with pytest.raises(InvalidReadings, match="folder"):
        read_readings(tmp_path, DESIGN)


@given(st.binary(max_size=300))
def test_no_bytes_do_anything_but_read_or_be_refused(data):
    for head in (b"", b"north,output\n", b"north;output\n1;2\n"):
        try:
            got = read(head + data)
        except InvalidReadings:
            continue
        assert np.isfinite(got.volts).all()
        assert np.isfinite(got.output).all()
