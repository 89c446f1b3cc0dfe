"""A drawer file is read as people write it, and refused with its line where it cannot be meant."""

import pytest
from sumwright.engine.realise.drawer import Bin
from sumwright.errors import InvalidReadings
from sumwright.files.drawer import read_drawer


def bins(text, encoding="utf-8"):
    return read_drawer(text.encode(encoding)).bins


def test_a_plain_file():
    assert bins("value,tolerance,count,note\n4k7,1%,12,blue box\n10000,0.05,3,\n") == (
        Bin(4700.0, 0.01, 12, "blue box"),
        Bin(10000.0, 0.05, 3, ""),
    )


def test_byte_order_mark_semicolons_decimal_commas_and_other_line_ends():
    text = "\ufeffCount;Value;Tolerance\r\n5;4,7k;1 %\r\n2;0,47;±5 %\r\n;;\r\n"
    assert bins(text) == (Bin(0.47, 0.05, 2), Bin(4700.0, 0.01, 5))


def test_tabs_and_quoted_commas():
    assert bins("value\tcount\n4,7k\t5\n") == (Bin(4700.0, None, 5),)
    assert bins('value,count\n"4,7k",5\n') == (Bin(4700.0, None, 5),)


def test_equal_lines_add_up_and_other_tolerances_stay_apart():
    assert bins("value,count,tolerance\n1k,2,1%\n1000,3,1%\n1k,1,5%\n") == (Bin(1000.0, 0.01, 5), Bin(1000.0, 0.05, 1))
    assert read_drawer(b"value,count,tolerance\n1k,2,1%\n1000,3,1%\n1k,1,5%\n").counts() == {1000.0: 6}


def test_without_counts_there_are_as_many_as_wanted():
    assert bins("value\n1k\n")[0].count is None


def test_a_bare_list_and_other_headings_in_use():
    assert bins("4k7\n10k\n4R7\n") == (Bin(4.7, None, None), Bin(4700.0, None, None), Bin(10000.0, None, None))
    assert bins("Resistance;Qty\n4,7k;5\n") == (Bin(4700.0, None, 5),)


def test_a_marking_gives_value_and_tolerance():
    assert bins("value,count\n4K7J,2\n") == (Bin(4700.0, 0.05, 2),)


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "is empty"),
        ("value,count\n", "no resistors"),
        ("4k7,3\n", r"Line 1 .*column .4k7.*value, tolerance, count, note"),
        ("resistor,count\n4k7,3\n", r"Line 1 .*resistor"),
        ("count,note\n3,x\n", "no column 'value'"),
        ("value,value\n1k,1k\n", "twice"),
        ("value,count\n1k,1\n4.7 V,3\n", 'Line 3 of the drawer, value: "4.7 V"'),
        ("value,count\n100nF,3\n", "Line 2 of the drawer, value"),
        ("value,count\n-4k7,3\n", "Line 2 .*above 0"),
        ("value,count\n0,3\n", "Line 2 .*above 0"),
        ("value,count\n,3\n", "Line 2 of the drawer, value"),
        ("value,count\n1k,-3\n", 'Line 2 of the drawer, count: "-3" must be a whole number'),
        ("value,count\n1k,2.5\n", "Line 2 of the drawer, count"),
        ("value,count\n1k,\n", "Line 2 of the drawer, count"),
        ("value,count\n1k,99999999999999999999\n", "Line 2 of the drawer, count"),
        (
            "value,tolerance\n1k,1\n",
            'Line 2 of the drawer, tolerance: "1" must be from 0 to under 1; write 1 % or 0.01',
        ),
        ("value,tolerance\n1k,-1%\n", "Line 2 of the drawer, tolerance"),
        ("value,tolerance\n1k,gold\n", "Line 2 of the drawer, tolerance"),
        ("value,count\n4,7k,3\n", "Line 2 of the drawer has 3 cells"),
        ('value,count\n"1k,3\n', "cannot be read"),
        ("value,count\ninf,3\n", "Line 2"),
        ("value,count\nnan,3\n", "Line 2"),
    ],
)
def test_what_cannot_be_meant_is_refused_with_its_line(text, says):
    with pytest.raises(InvalidReadings, match=says):
        bins(text)


def test_not_text_at_all():
    with pytest.raises(InvalidReadings, match="not UTF-8"):
        read_drawer(b"value\n\xff\xfe\x00")
    with pytest.raises(InvalidReadings, match="does not exist"):
        read_drawer("no such file.csv")


def test_a_hundred_thousand_rows(tmp_path):
    path = tmp_path / "big.csv"
    path.write_text(
        "value,tolerance,count,note\n" + "".join(f"{1000 + k % 977},1%,{k % 7},shelf {k}\n" for k in range(100_000))
    )
    drawer = read_drawer(path)
    assert len(drawer.bins) == 977
    assert sum(b.count for b in drawer.bins) == sum(k % 7 for k in range(100_000))
