"""Which signal values to apply next: those whose reading says most about what is wrong.

The measure is the expected information about the suspects (the mutual information
between suspect and reading), in bits. Each suspect still standing predicts the next
reading as a normal density, given the readings so far; the expectation runs over
those densities by Gauss-Hermite points. Lindley, Annals of Mathematical Statistics
27 (1956) 986, is where the measure comes from.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np

from .suspects import Diagnosis, wire

MOST_COMPONENTS = 72
MASS_KEPT = 0.9995
POINTS = 4
NEARLY_AS_GOOD = 0.97  # a simpler reading this good is preferred
CHUNK = 3_000_000


class NextReading(NamedTuple):
    """Signal values [V] by name, and what the reading is worth [bit]."""

    volts: dict[str, float]
    bits: float


def candidates(design, rng) -> np.ndarray:
    """Settings worth considering, simplest first, all inside the signals' ranges; shape (C, n) [V]."""
    low = np.array([s.low for s in design.signals])
    high = np.array([s.high for s in design.signals])
    n = len(low)
    rest = np.clip(0.0, low, high)  # as near ground as the range allows
    far = np.where(np.abs(high - rest) >= np.abs(low - rest), high, low)
    rows: list = [rest]
    for target in (far, np.where(far == high, low, high), 0.5 * (rest + far), 0.2 * far + 0.8 * rest):
        for i in range(n):
            row = rest.copy()
            row[i] = target[i]
            rows.append(row)
    rows += [high, low, 0.5 * (low + high)]
    sign = np.array([s.weight >= 0 for s in design.signals])
    for up in (sign, ~sign):
        rows.append(np.where(up, far, rest))
        rows.append(np.where(up, 0.5 * (rest + far), rest))
    # every signal at a value of its own, so that no two suspects look alike by chance
    steps = (np.arange(n) + 1) / n
    for order in (steps, steps[::-1]):
        rows.append(rest + (far - rest) * order)
        rows.append(rest + 0.4 * (far - rest) * order)
    for _ in range(16):
        rows.append(np.where(rng.random(n) < 0.5, far, rest))
    for _ in range(16):
        rows.append(low + (high - low) * np.round(rng.random(n) * 20) / 20)
    table = np.array(rows)
    _, first = np.unique(table, axis=0, return_index=True)
    return table[np.sort(first)]


def next_reading(diagnosis: Diagnosis, meter, *, settings=None, seed=0) -> NextReading:
    """The setting that best separates the suspects still standing.

    Parameters
    ----------
    diagnosis : Diagnosis
        Of the readings so far, perhaps none.
    meter : callable
        Standard uncertainty [V] of readings (...) [V].
    settings : (C, n) array_like, optional
        Choose among these instead of `candidates`.
    seed : int
        Of the random ones among the candidates.

    Returns
    -------
    NextReading
    """
    bench = diagnosis.bench
    if settings is None:
        settings = candidates(bench.design, np.random.default_rng(seed))
    settings = np.asarray(settings, dtype=float)
    bits = expected_bits(diagnosis, settings, meter)
    best = int(np.argmax(bits >= NEARLY_AS_GOOD * bits.max()))  # the first, simplest, of the good ones
    return NextReading(dict(zip(bench.names, map(float, settings[best]), strict=True)), float(bits[best]))


def expected_bits(diagnosis: Diagnosis, settings, meter) -> np.ndarray:
    """Expected information about the suspects of one reading under each setting, shape (C,) [bit]."""
    trials, weight, owner = _standing(diagnosis)
    mean, spread = _foresee(diagnosis, trials, settings, meter)  # (K, C)
    nodes, node_weight = np.polynomial.hermite_e.hermegauss(POINTS)
    node_weight = node_weight / node_weight.sum()
    count, cases = len(trials), owner.max() + 1
    member = np.zeros((count, cases))
    member[np.arange(count), owner] = 1.0
    case_weight = weight @ member
    bits = np.empty(settings.shape[0])
    step = max(1, CHUNK // (count * count * POINTS))
    for start in range(0, len(bits), step):
        m, s = mean[:, start : start + step].T, spread[:, start : start + step].T  # (c, K)
        y = (m[:, :, None] + s[:, :, None] * nodes).reshape(len(m), -1)  # (c, K Q)
        z = (y[:, :, None] - m[:, None, :]) / s[:, None, :]
        z *= z
        z *= -0.5
        dense = np.exp(z, out=z)
        dense *= (weight / s)[:, None, :]
        by_case = dense @ member  # (c, K Q, cases)
        everyone = by_case.sum(axis=-1)
        own = np.take_along_axis(by_case, np.repeat(owner, POINTS)[None, :, None], axis=-1)[..., 0]
        ratio = np.log(own / np.repeat(case_weight[owner], POINTS)) - np.log(everyone)
        bits[start : start + step] = (ratio * np.outer(weight, node_weight).ravel()).sum(axis=1) / np.log(2)
    return np.maximum(bits, 0.0)


def _standing(diagnosis: Diagnosis):
    """The boards that carry the probability: trials, their weights, and the case each belongs to."""
    e = diagnosis.evidence
    case_of = np.array([t.case for t in e.trials])
    prior = np.array([c.log_prior for c in diagnosis.cases])
    log_weight = e.log_mass + e.log_like + prior[case_of]
    weight = np.exp(log_weight - log_weight.max())
    # "none" holds most of the odds before anything is known; what it must be told
    # from are the faults, so they are kept by their share of the rest
    order = np.argsort(-weight, kind="stable")
    order = order[: MOST_COMPONENTS * 3]
    total = np.cumsum(weight[order]) / weight.sum()
    keep = order[: max(2, int(np.searchsorted(total, MASS_KEPT)) + 1)][:MOST_COMPONENTS]
    if len(keep) == MOST_COMPONENTS:  # spread over the cases rather than over one case's grid
        best_of_case: dict[int, int] = {}
        for t in order:
            best_of_case.setdefault(int(case_of[t]), int(t))
        firsts = list(best_of_case.values())[: MOST_COMPONENTS * 3 // 4]
        rest = [int(t) for t in order if int(t) not in set(firsts)]
        keep = np.array(firsts + rest[: MOST_COMPONENTS - len(firsts)])
        mass = np.bincount(case_of[order], weight[order], minlength=len(diagnosis.cases))
        kept = np.bincount(case_of[keep], weight[keep], minlength=len(diagnosis.cases))
        weight = weight * np.where(kept[case_of] > 0, mass[case_of] / np.maximum(kept[case_of], 1e-300), 0.0)
    keep = keep[weight[keep] > 1e-12 * weight[keep].max()]
    owner = np.unique(case_of[keep], return_inverse=True)[1].reshape(-1)
    w = weight[keep]
    return [e.trials[t] for t in keep], w / w.sum(), owner


def _foresee(diagnosis, trials, settings, meter):
    """Mean and standard deviation (K, C) of the next reading on each board, given those so far."""
    bench = diagnosis.bench
    boards = wire(bench, diagnosis.cases, trials)
    r = len(diagnosis.readings)
    known = np.concatenate([diagnosis.readings, np.full(len(settings), np.nan)])
    p = bench.predict(boards, np.concatenate([diagnosis.volts, settings]), known)
    mean, variance = p.mean[:, r:], p.own[:, r:] + np.square(p.columns[:, :, r:]).sum(axis=1)
    if r:
        past, ahead = p.columns[:, :, :r], p.columns[:, :, r:]
        cov = np.swapaxes(past, 1, 2) @ past
        at = np.arange(r)
        cov[:, at, at] += p.own[:, :r] + diagnosis.meter**2
        cross = np.swapaxes(past, 1, 2) @ ahead  # (K, R, C)
        gain = np.linalg.solve(cov, cross)
        residual = diagnosis.readings - p.mean[:, :r]
        mean = mean + np.einsum("krc,kr->kc", gain, residual)
        variance = np.maximum(variance - (gain * cross).sum(axis=1), p.own[:, r:])
    return mean, np.sqrt(variance + np.square(meter(mean)))
