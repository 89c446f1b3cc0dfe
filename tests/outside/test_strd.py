"""The fit against certified values: NIST Statistical Reference Datasets, linear regression.

Data and certified values: NIST/ITL StRD, Linear Least Squares Regression (datasets Norris, NoInt1,
NoInt2, Pontius, Wampler1, Wampler3, Longley). Norris's file is read from SciPy, which carries it.
The t-table is NIST TN 1297 (1994), table B.1 (the same as JCGM 100:2008, table G.2).
"""

from pathlib import Path

import numpy as np
import pytest
import scipy.stats
from sumwright.engine.bench.fit import least_squares, t_factor

# Load in order, deflection: two runs of twenty.
PONTIUS = np.array(
    [
        ".11019",
        ".21956",
        ".32949",
        ".43899",
        ".54803",
        ".65694",
        ".76562",
        ".87487",
        ".98292",
        "1.09146",
        "1.20001",
        "1.30822",
        "1.41599",
        "1.52399",
        "1.63194",
        "1.73947",
        "1.84646",
        "1.95392",
        "2.06128",
        "2.16844",
        ".11052",
        ".22018",
        ".32939",
        ".43886",
        ".54798",
        ".65739",
        ".76596",
        ".87474",
        ".98300",
        "1.09150",
        "1.20004",
        "1.30818",
        "1.41613",
        "1.52408",
        "1.63159",
        "1.73965",
        "1.84696",
        "1.95445",
        "2.06177",
        "2.16829",
    ],
    dtype=float,
)
# Employed; GNP deflator, GNP, unemployed, armed forces, population, year.
LONGLEY = np.array(
    ["60323", "83.0", "234289", "2356", "1590", "107608", "1947", "61122", "88.5", "259426", "2325", "1456", "108632", "1948", "60171", "88.2", "258054", "3682", "1616", "109773", "1949", "61187", "89.5", "284599", "3351", "1650", "110929", "1950", "63221", "96.2", "328975", "2099", "3099", "112075", "1951", "63639", "98.1", "346999", "1932", "3594", "113270", "1952", "64989", "99.0", "365385", "1870", "3547", "115094", "1953", "63761", "100.0", "363112", "3578", "3350", "116219", "1954", "66019", "101.2", "397469", "2904", "3048", "117388", "1955", "67857", "104.6", "419180", "2822", "2857", "118734", "1956", "68169", "108.4", "442769", "2936", "2798", "120445", "1957", "66513", "110.8", "444546", "4681", "2637", "121950", "1958", "68655", "112.6", "482704", "3813", "2552", "123366", "1959", "69564", "114.2", "502601", "3931", "2514", "125368", "1960", "69331", "115.7", "518173", "4806", "2572", "127852", "1961", "70551", "116.9", "554894", "4007", "2827", "130081", "1962"],
    dtype=float,
).reshape(16, 7)  # fmt: skip


def norris():
    path = Path(scipy.stats.__file__).parent / "tests/data/nist_linregress/Norris.dat"
    rows = [line.split() for line in path.read_text().splitlines()[60:96]]
    y, x = np.array(rows, dtype=float).T
    return np.column_stack([np.ones(36), x]), y


def pontius():
    x = np.tile(np.arange(1, 21) * 150000.0, 2)
    return np.column_stack([np.ones(40), x, x * x]), PONTIUS


def wampler(noise=0.0):
    x = np.arange(21.0)
    powers = x[:, None] ** np.arange(6)
    return powers, powers.sum(axis=1) + noise


# Wampler3 adds these to Wampler1.
WAMPLER3 = np.array(
    [
        "759",
        "-2048",
        "2048",
        "-2048",
        "2523",
        "-2048",
        "2048",
        "-2048",
        "1838",
        "-2048",
        "2048",
        "-2048",
        "1838",
        "-2048",
        "2048",
        "-2048",
        "2523",
        "-2048",
        "2048",
        "-2048",
        "759",
    ],
    dtype=float,
)

CASES = {
    "Norris": (
        norris(), [-0.262323073774029, 1.00211681802045], [0.232818234301152, 0.429796848199937e-3], 0.884796396144373, 1e-9,
    ),
    "NoInt1": (
        (np.arange(60.0, 71)[:, None], np.arange(130.0, 141)), [2.07438016528926], [0.165289256198347e-1], 3.56753034006338, 1e-9,
    ),
    "NoInt2": (
        (np.array([[4.0], [5.0], [6.0]]), np.array([3.0, 4.0, 4.0])), [0.727272727272727], [0.420827318078432e-1],
        0.369274472937998, 1e-9,
    ),
    "Pontius": (
        pontius(), [0.673565789473684e-3, 0.732059160401003e-6, -0.316081871345029e-14],
        [0.107938612033077e-3, 0.157817399981659e-9, 0.486652849992036e-16], 0.205177424076185e-3, 1e-9,
    ),
    "Wampler1": (wampler(), [1.0] * 6, [0.0] * 6, 0.0, 1e-9),
    "Wampler3": (
        wampler(WAMPLER3), [1.0] * 6,
        [2152.32624678170, 2363.55173469681, 779.343524331583, 101.475507550350, 5.64566512170752, 0.112324854679312],
        2360.14502379268, 1e-8,
    ),
    "Longley": (
        (np.column_stack([np.ones(16), LONGLEY[:, 1:]]), LONGLEY[:, 0]),
        [-3482258.63459582, 15.0618722713733, -0.358191792925910e-1, -2.02022980381683, -1.03322686717359,
         -0.511041056535807e-1, 1829.15146461355],
        [890420.383607373, 84.9149257747669, 0.334910077722432e-1, 0.488399681651699, 0.214274163161675, 0.226073200069370,
         455.478499142212], 304.854073561965, 1e-7,
    ),
}  # fmt: skip


@pytest.mark.parametrize("name", CASES)
def test_fit_reproduces_the_certified_values(name):
    (matrix, observed), coefficients, deviations, residual, tolerance = CASES[name]
    fit = least_squares(matrix, observed)
    assert fit.determined.all()
    np.testing.assert_allclose(fit.value, coefficients, rtol=tolerance)
    np.testing.assert_allclose(fit.standard_uncertainty, deviations, rtol=tolerance, atol=1e-6 * (residual == 0))
    assert fit.scatter == pytest.approx(residual, rel=tolerance, abs=1e-8)
    assert fit.degrees_of_freedom == len(observed) - len(coefficients)


# Rows: degrees of freedom; columns: 68.27, 90, 95, 95.45, 99, 99.73 %.
T_TABLE = {
    1: (1.84, 6.31, 12.71, 13.97, 63.66, 235.80),
    5: (1.11, 2.02, 2.57, 2.65, 4.03, 5.51),
    10: (1.05, 1.81, 2.23, 2.28, 3.17, 3.96),
    50: (1.01, 1.68, 2.01, 2.05, 2.68, 3.16),
}


@pytest.mark.parametrize("freedom", T_TABLE)
def test_t_factor_is_the_published_table(freedom):
    for coverage, printed in zip((0.6827, 0.90, 0.95, 0.9545, 0.99, 0.9973), T_TABLE[freedom], strict=True):
        # 235.80 is printed where the exact factor for 99.73 % and one degree of freedom is 235.784
        slack = 0.02 if printed == 235.80 else 0.00501
        assert t_factor(freedom, coverage) == pytest.approx(printed, abs=slack)
