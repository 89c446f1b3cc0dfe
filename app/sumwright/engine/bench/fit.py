"""Weights and offset by weighted least squares, and whether they are within limits.

Solved by Householder QR on columns scaled to unit length, with the residual refined
once in extended precision, so that the certified problems of the NIST Statistical
Reference Datasets come out to nine digits and better. Which coefficients the
readings do not determine is read from the null space.

Source: JCGM 100:2008, annex H.3 (fit with covariance) and G.3 (the t-factor);
JCGM 106:2012, 8.3 and ILAC-G8:09/2019 (guard bands).
"""

from __future__ import annotations

from collections.abc import Sequence
from typing import NamedTuple

import numpy as np
from scipy.linalg import solve_triangular
from scipy.stats import chi2, norm, t

RANK_TOLERANCE = 1e-10  # of the largest singular value, columns at unit length
COVERAGE = 0.9545  # the coverage a factor of 2 has when nothing is estimated
IN, OUT, UNDECIDED = "in", "out", "undecided"
MOST_MORE = 10_000


class Fit(NamedTuple):
    """A linear fit; arrays over the p coefficients unless said otherwise."""

    value: np.ndarray  # (p,) NaN where not determined
    standard_uncertainty: np.ndarray  # (p,) NaN where not determined or nothing tells the scatter
    covariance: np.ndarray  # (p, p) NaN where not determined
    determined: np.ndarray  # (p,) bool
    residuals: np.ndarray  # (R,) read minus fitted
    chi_squared: float | None  # None where no uncertainty was stated
    degrees_of_freedom: int
    p_value: float | None  # probability of a chi-squared this large by chance
    scatter: float | None  # standard deviation estimated from the residuals; None where stated
    coverage_factor: float | None  # for 95.45 %: 2, or the t-factor where the scatter is estimated

    @property
    def expanded(self) -> np.ndarray:
        """(p,) coverage factor times standard uncertainty."""
        return (np.nan if self.coverage_factor is None else self.coverage_factor) * self.standard_uncertainty


def t_factor(degrees_of_freedom: int, coverage: float = COVERAGE) -> float:
    """Two-sided Student t for a coverage probability; infinite for no degrees of freedom.

    Source: JCGM 100:2008, table G.2 = NIST TN 1297, table B.1.
    """
    if degrees_of_freedom < 1:
        return float("inf")
    return float(t.ppf(0.5 + 0.5 * coverage, degrees_of_freedom))


def least_squares(matrix, observed, uncertainty=None) -> Fit:
    """Fit `observed` = `matrix` · coefficients.

    Parameters
    ----------
    matrix : (R, p) array_like
    observed : (R,) array_like
    uncertainty : (R,) array_like, optional
        Standard uncertainties, taken as they are. Without them all observations
        weigh the same and the scatter is estimated from the residuals.

    Returns
    -------
    Fit
    """
    a = np.asarray(matrix, dtype=float)
    y = np.asarray(observed, dtype=float)
    w = np.ones(len(y)) if uncertainty is None else 1.0 / np.asarray(uncertainty, dtype=float)
    rows, p = a.shape
    aw, yw = a * w[:, None], y * w
    length = np.sqrt(np.square(aw).sum(axis=0))
    scale = np.where(length > 0, length, 1.0)
    scaled = aw / scale
    determined, rank = _determined(scaled)
    value, inverse = np.full(p, np.nan), np.full((p, p), np.nan)
    if rank == p:
        value, inverse = _by_qr(scaled, yw)
        fitted_value = value
    elif rows:
        pseudo = np.linalg.pinv(scaled, rcond=RANK_TOLERANCE)
        fitted_value = pseudo @ yw
        square = pseudo @ pseudo.T
        value = np.where(determined, fitted_value, np.nan)
        inverse = np.where(np.outer(determined, determined), square, np.nan)
    else:
        fitted_value = np.zeros(p)
    value = value / scale
    covariance = inverse / np.outer(scale, scale)
    residuals = (y.astype(np.longdouble) - a.astype(np.longdouble) @ (fitted_value / scale)).astype(float)
    freedom = rows - rank
    square_sum = float(np.square(residuals * w).sum())
    if uncertainty is not None:
        p_value = float(chi2.sf(square_sum, freedom)) if freedom > 0 else None
        u = np.sqrt(np.diagonal(covariance))
        return Fit(value, u, covariance, determined, residuals, square_sum, freedom, p_value, None, 2.0)
    if freedom <= 0:
        nothing = np.full(p, np.nan)
        return Fit(value, nothing, covariance * np.nan, determined, residuals, None, max(freedom, 0), None, None, None)
    scatter = float(np.sqrt(square_sum / freedom))
    covariance = covariance * scatter**2
    u = np.sqrt(np.diagonal(covariance))
    return Fit(value, u, covariance, determined, residuals, None, freedom, None, scatter, t_factor(freedom))


def _determined(scaled):
    """Which coefficients the rows fix, and the rank."""
    rows, p = scaled.shape
    if not rows:
        return np.zeros(p, dtype=bool), 0
    square = np.zeros((p, p))
    triangle = np.linalg.qr(scaled, mode="r")  # p columns however many rows there are
    square[: len(triangle)] = triangle
    _, s, vt = np.linalg.svd(square)
    rank = int((s > RANK_TOLERANCE * s[0]).sum()) if s[0] > 0 else 0
    return (np.abs(vt[rank:]) < 1e-7).all(axis=0), rank


def _by_qr(scaled, yw):
    """Coefficients and (AᵀA)⁻¹ of a full-rank problem, refined with residuals in extended precision."""
    q, r = np.linalg.qr(scaled)
    x = solve_triangular(r, q.T @ yw)
    wide, target = scaled.astype(np.longdouble), yw.astype(np.longdouble)
    for _ in range(2):
        left = (target - wide @ x.astype(np.longdouble)).astype(float)
        x = x + solve_triangular(r, q.T @ left)
    root = solve_triangular(r, np.eye(r.shape[0]))
    return x, root @ root.T


class Verdict(NamedTuple):
    """A quantity held against its limits with a guard band."""

    word: str  # in, out, undecided
    low: float
    high: float
    guard: float  # width of the guard band
    more: int | None  # further readings like these that would decide it; None if none will, 0 if decided


def verdict(value, standard_uncertainty, low, high, *, factor=2.0, readings=1) -> Verdict:
    """In, out or undecided, with a guard band of `factor` standard uncertainties on both sides.

    In: the whole band value ± guard lies inside low..high; out: value is outside by the
    guard or more; else undecided (decision rule with guard band, ILAC-G8:09/2019, 4.2.3;
    JCGM 106:2012, 8.3.3). Uncertainty is taken to fall with the root of the number of
    readings.
    """
    if not np.isfinite(value) or not np.isfinite(standard_uncertainty):
        return Verdict(UNDECIDED, low, high, float("nan"), None)
    guard = float(factor * standard_uncertainty)
    inside = min(value - low, high - value)  # negative outside
    if inside >= guard:
        return Verdict(IN, low, high, guard, 0)
    if -inside >= guard:
        return Verdict(OUT, low, high, guard, 0)
    if inside == 0:
        return Verdict(UNDECIDED, low, high, guard, None)
    need = readings * ((guard / abs(inside)) ** 2 - 1.0)
    return Verdict(UNDECIDED, low, high, guard, int(np.ceil(need)) if need <= MOST_MORE else None)


def false_acceptance(value, standard_uncertainty, low, high) -> float:
    """Probability that the true value lies outside low..high, normal about `value` (JCGM 106:2012, 7.2)."""
    u = standard_uncertainty
    return float(norm.cdf((low - value) / u) + norm.sf((high - value) / u))


def guarded_risks(nominal, process, low, high, meter, guard) -> tuple[float, float]:
    """Consumer's and producer's risk of a two-sided guarded acceptance (JCGM 106:2012, 9.5).

    Parameters
    ----------
    nominal, process : float
        Mean and standard deviation of what is produced.
    low, high : float
        Tolerance limits.
    meter : float
        Standard uncertainty of the measurement.
    guard : float
        Acceptance is from low + guard to high - guard.

    Returns
    -------
    consumer, producer : float
        Accepted though outside; rejected though inside; of all items.
    """

    # outside and accepted: integrate over the true value, Gauss-Legendre in each region
    def accepted(x):
        return norm.cdf((high - guard - x) / meter) - norm.cdf((low + guard - x) / meter)

    def integral(a, b, of):
        nodes, weights = np.polynomial.legendre.leggauss(400)
        x = 0.5 * (b - a) * nodes + 0.5 * (a + b)
        return float(0.5 * (b - a) * (weights * of(x) * norm.pdf(x, nominal, process)).sum())

    reach = 9.0 * max(process, meter)
    consumer = integral(low - reach, low, accepted) + integral(high, high + reach, accepted)
    producer = integral(low, high, lambda x: 1.0 - accepted(x))
    return consumer, producer


def counted(weights: Sequence[str], offset: str, word: str) -> str:
    """How many verdicts are `word`, said: `4 weights and the offset out`; empty if none is."""
    many = sum(w == word for w in weights)
    said = [f"{many} weight{'' if many == 1 else 's'}"] if many else []
    said += ["the offset"] if offset == word else []
    return f"{' and '.join(said)} {word}" if said else ""


def headline(weights: Sequence[str], offset: str) -> str:
    """The verdicts in one line: what is out, else what is undecided, else that all are in."""
    return counted(weights, offset, "out") or counted(weights, offset, "undecided") or "all in"
