"""A wave from a CSV text."""

import pytest
from sumwright.errors import InvalidQuantity
from sumwright.files.waves import read_wave


def test_separators_headers_and_notation():
    for text in ("t,v\n0,1\n1m,2\n", "0;1\n0,001;2\n", "time\tvolts\n0\t1\n1e-3\t2\n", "\ufeff0,1\n\n1 ms,2 V\n"):
        w = read_wave(text)
        assert w.times == pytest.approx((0.0, 1e-3)) and w.volts == pytest.approx((1.0, 2.0))


@pytest.mark.parametrize(
    ("text", "says"),
    [
        ("", "no points"),
        ("t,v\n", "no points"),
        ("0,1\nx,2\n", "line 2"),
        ("0,1,2\n", "line 1 has 3"),
        ("0,1\n-1,2\n", "line 2.*before"),
    ],
)
def test_a_bad_wave_names_its_line(text, says):
    with pytest.raises(InvalidQuantity, match=says):
        read_wave(text)
