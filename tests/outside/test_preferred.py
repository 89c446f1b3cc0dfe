"""Preferred values are those of IEC 60063:2015.

E24 and E96 as its tables print them (from memory), every series by the rule, which E24 departs from in eight places
and E192 in one, and every series from a library that knows nothing of this one.
"""

import eseries
import numpy as np
import pytest
from sumwright.engine.realise.preferred import SERIES, preferred_values, values_within
from sumwright.errors import CannotRealise, InvalidQuantity

E24 = [
    1.0,
    1.1,
    1.2,
    1.3,
    1.5,
    1.6,
    1.8,
    2.0,
    2.2,
    2.4,
    2.7,
    3.0,
    3.3,
    3.6,
    3.9,
    4.3,
    4.7,
    5.1,
    5.6,
    6.2,
    6.8,
    7.5,
    8.2,
    9.1,
]
E12 = [1.0, 1.2, 1.5, 1.8, 2.2, 2.7, 3.3, 3.9, 4.7, 5.6, 6.8, 8.2]
E6 = [1.0, 1.5, 2.2, 3.3, 4.7, 6.8]
E3 = [1.0, 2.2, 4.7]
E96 = """100 102 105 107 110 113 115 118 121 124 127 130 133 137 140 143 147 150 154 158 162 165 169 174 178 182 187 191 196 200 205
210 215 221 226 232 237 243 249 255 261 267 274 280 287 294 301 309 316 324 332 340 348 357 365 374 383 392 402 412 422 432 442 453
464 475 487 499 511 523 536 549 562 576 590 604 619 634 649 665 681 698 715 732 750 768 787 806 825 845 866 887 909 931 953 976"""


def test_the_printed_rows():
    np.testing.assert_array_equal(preferred_values("E24"), E24)
    np.testing.assert_array_equal(preferred_values("E12"), E12)
    np.testing.assert_array_equal(preferred_values("E6"), E6)
    np.testing.assert_array_equal(preferred_values("E3"), E3)
    np.testing.assert_array_equal(preferred_values("E96"), np.array([int(x) for x in E96.split()]) / 100)


@pytest.mark.parametrize(
    ("series", "places", "exceptions"),
    [
        ("E3", 1, {4.7: 4.6}),
        ("E6", 1, {3.3: 3.2, 4.7: 4.6}),
        ("E12", 1, {2.7: 2.6, 3.3: 3.2, 3.9: 3.8, 4.7: 4.6, 8.2: 8.3}),
        ("E24", 1, {2.7: 2.6, 3.0: 2.9, 3.3: 3.2, 3.6: 3.5, 3.9: 3.8, 4.3: 4.2, 4.7: 4.6, 8.2: 8.3}),
        ("E48", 2, {}),
        ("E96", 2, {}),
        ("E192", 2, {9.20: 9.19}),
    ],
)
def test_the_rule_and_its_exceptions(series, places, exceptions):
    """round(10^(k/n)) but for the values that IEC 60063 keeps from before the rule, and 9.20 in E192."""
    n = int(series[1:])
    rule = [round(10 ** (k / n), places) for k in range(n)]
    values = preferred_values(series)
    assert len(values) == n
    assert {v: r for v, r in zip(values, rule, strict=True) if v != r} == exceptions


@pytest.mark.parametrize("name", SERIES)
def test_another_library_has_the_same_values(name):
    """The package `eseries` (R. Smallshire), which lists them in whole numbers."""
    theirs = np.array(eseries.series(getattr(eseries.ESeries, name)))
    ours = preferred_values(name)
    np.testing.assert_array_equal(np.round(ours * theirs[0]), theirs)


def test_series_within_series():
    e24, e48, e96, e192 = (set(preferred_values(s)) for s in ("E24", "E48", "E96", "E192"))
    assert e48 < e96 < e192
    assert sorted(e24 - e192) == [2.2, 2.7, 3.0, 3.3, 3.6, 3.9, 4.3, 5.1, 5.6, 6.2, 6.8, 8.2, 9.1]


def test_values_within_a_range_are_exact_and_both_ends_count():
    np.testing.assert_array_equal(values_within("E6", 1000, 10000), [1000, 1500, 2200, 3300, 4700, 6800, 10000])
    np.testing.assert_array_equal(values_within("E96", 9.9, 10.3), [10.0, 10.2])
    assert values_within("E192", 0.1, 1e7).size == 8 * 192 + 1
    assert 4700.0 in values_within("E24", 1e3, 1e6) and 0.47 in values_within("E24", 0.1, 1)


def test_bad_ranges_and_names_are_refused():
    with pytest.raises(InvalidQuantity, match="series is 'E5'"):
        values_within("E5", 1, 10)
    with pytest.raises(InvalidQuantity, match="positive, finite and rising"):
        values_within("E6", 10, 1)
    with pytest.raises(CannotRealise, match="No E6 value"):
        values_within("E6", 1600, 2000)
