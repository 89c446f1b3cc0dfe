"""A waveform record laid over the prediction: weights, offset, delay and bandwidth from it, and what else is in it.

The model is y(t) = b + Σ w_i (h * x_i)(t - d): one delay and one pole for all signals.
For each delay and pole the weights follow by linear least squares (variable
projection, Golub and Pereyra 1973), so only two numbers are searched for. Samples
that clip or slew are kept out. Clipping, slewing, ringing and mains pick-up are named
when they stand clear of the noise.
"""

from __future__ import annotations

from typing import NamedTuple

import numpy as np
from scipy.optimize import minimize
from scipy.signal import lfilter

from sumwright.engine.operating_point import operating_point
from sumwright.engine.stage import Design
from sumwright.errors import InvalidReadings

from .fit import Fit, least_squares

SEARCHED = 10_000  # samples for the search of delay and pole
FITTED = 200_000  # samples for the final fit
DRAWN = 1_500  # points of the overlay
MAINS = (50.0, 60.0)  # Hz
SLEWING = 0.6  # of the data sheet's rate (a typical figure) from which a steep edge is suspected
RINGS = 0.03  # of the edge, from which an oscillation behind it is called ringing
CLEAR = 5.0  # times its own uncertainty from which a finding is named


class Finding(NamedTuple):
    """Something in the record that the linear model does not hold."""

    key: str  # clipping, slewing, ringing, mains
    amount: float  # V, V/s, Hz, V
    text: str


class CaptureFit(NamedTuple):
    """What a record says of the board; (n,) over the mapped signals, in the design's order."""

    names: tuple[str, ...]
    fit: Fit  # weights of `names`, then the offset [V]
    predicted_weights: np.ndarray
    predicted_offset: float
    delay: float  # s
    bandwidth: float | None  # Hz; None where the sampling does not show it
    noise: float  # V RMS, of what is left over
    used: float  # share of the samples in the fit
    findings: tuple[Finding, ...]
    time: np.ndarray  # (D,) s, for drawing
    measured: np.ndarray  # (D, 2) V, least and greatest in each stretch
    predicted: np.ndarray  # (D,) V, by the drawing
    fitted: np.ndarray  # (D,) V, by the fit


def fit_capture(design: Design, time, output, signals: dict) -> CaptureFit:
    """Fit a record.

    Parameters
    ----------
    design : Design
        Realised.
    time : (N,) array_like
        Rising [s].
    output : (N,) array_like
        Of the stage [V].
    signals : dict of str to (N,) array_like
        Recorded signals [V]; one not recorded is taken to rest at its value in the design.

    Raises
    ------
    InvalidReadings
        If there are under 16 samples, no signals, or nothing moves.
    """
    t = np.asarray(time, dtype=float)
    y = np.asarray(output, dtype=float)
    names = tuple(n for n in design.signal_names if n in signals)
    if not names:
        raise InvalidReadings("No channel is mapped to a signal; map at least one, and one to the output.")
    if len(t) < 16:
        raise InvalidReadings(f"The record has {len(t)} samples; at least 16 are wanted.")
    x = np.column_stack([np.asarray(signals[n], dtype=float) for n in names])
    if np.ptp(y) == 0 and not np.ptp(x, axis=0).any():
        raise InvalidReadings("Nothing moves in the record: the output and every signal are constant.")
    t, x, y = _even(t, x, y)
    dt = (t[-1] - t[0]) / (len(t) - 1)
    rest, slope = _drawing(design, names)
    clipped = _clipped(design, x, y, rest + x @ slope)
    steep = _steep(design, y, dt)
    good = ~(clipped | _widened(steep, 8))
    delay, tau = _search(t, x, y, good, dt)
    fit, used, model, noise = _final(x, y, good, delay, tau, dt)
    tau = tau if tau > 0.3 * dt else 0.0
    left = y - model
    findings = [*_say_clipping(y, model, clipped, noise), *_say_slewing(design, y, model, steep, dt, noise)]
    quiet = ~(_widened(clipped, 8) | _widened(steep, 40))
    findings += [
        *_say_ringing(left, x @ np.nan_to_num(fit.value[:-1]), quiet, dt, noise, tau),
        *_say_mains(t, left, quiet, noise),
    ]
    predicted = rest + _delayed(x, 0.0, 0.0, dt) @ slope
    return CaptureFit(
        names, fit, slope, rest, delay, 1 / (2 * np.pi * tau) if tau else None, noise, used, tuple(findings),
        *_for_drawing(t, y, predicted, model),
    )  # fmt: skip


def _drawing(design, names):
    """Offset (unrecorded signals at their values) and weights by the drawing."""
    point = operating_point(design)
    at = [design.signal_names.index(n) for n in names]
    others = [i for i in range(len(design.signals)) if i not in at]
    return float(point.offset + point.contributions[others].sum()), point.weights[at]


def _even(t, x, y):
    """On an even grid of times; a record whose steps differ by under a thousandth is one already."""
    step = np.diff(t)
    mean = step.mean()
    if np.abs(step - mean).max() < 1e-3 * mean:
        return t, x, y
    even = np.linspace(t[0], t[-1], min(len(t), 5_000_000))
    return even, np.column_stack([np.interp(even, t, c) for c in x.T]), np.interp(even, t, y)


def _delayed(x, delay, tau, dt):
    """Signals through one pole, after a delay; first-order hold between samples."""
    out = x
    if tau > 1e-3 * dt:
        a = np.exp(-dt / tau)
        k = (1 - a) * tau / dt
        b = [1 - k, k - a]
        start = (1 - b[0]) * x[0]  # settled at the first sample
        out = lfilter(b, [1, -a], x, axis=0, zi=start[None, :])[0]
    if delay:
        n = np.arange(len(x)) - delay / dt
        out = np.column_stack([np.interp(n, np.arange(len(x)), c) for c in out.T])
    return out


# -- what does not belong in a linear fit -----------------------------------------


def _noise_of(y):
    """Sample-to-sample noise, from second differences: robust against waveforms (median)."""
    d = np.diff(y, 2)
    return float(np.median(np.abs(d)) / 0.6745 / np.sqrt(6)) if len(d) else 0.0


def _clipped(design, x, y, expected):
    """Samples that lie flat at an extreme of the output while the prediction goes on."""
    amp, supply = design.op_amp, design.supply
    noise = max(_noise_of(y), 1e-6 * np.ptp(y), 1e-9)
    out = np.zeros(len(y), dtype=bool)
    limits = (supply.high - amp.dropout_high, supply.low + amp.dropout_low)
    for sign, limit in ((1, limits[0]), (-1, limits[1])):
        top = np.quantile(sign * y, 0.9995)
        near = sign * y > top - max(6 * noise, 2e-3 * np.ptp(y))
        flat = near & (np.abs(np.gradient(y)) < 4 * noise + 2e-4 * np.ptp(y))
        # a plateau of the signals is no clipping: the prediction must have moved meanwhile, or the limit be near
        if flat.sum() >= 5:
            inside = sign * expected[flat]
            moved = np.ptp(inside) > 0.02 * np.ptp(expected) + 20 * noise
            beyond = np.median(inside) > top + 0.02 * np.ptp(y) + 10 * noise
            at_limit = sign * limit - top < 0.25 * abs(limit) + 0.2
            if (moved and beyond) or (at_limit and np.median(inside) > top + 10 * noise):
                out |= near
    return out


def _steep(design, y, dt):
    """Samples where the output moves at about its slew rate, over a few samples at least."""
    slope = np.abs(np.gradient(y, dt))
    noise = _noise_of(y)
    least = max(SLEWING * design.op_amp.slew_rate, 6 * noise / dt)
    steep = slope > least
    ends = np.flatnonzero(np.diff(np.concatenate([[0], steep.view(np.int8), [0]])))
    for a, b in ends.reshape(-1, 2):
        if b - a < 4:
            steep[a:b] = False
    return steep


def _widened(mask, by):
    if not mask.any():
        return mask
    return np.convolve(mask, np.ones(2 * by + 1), mode="same") > 0.5


# -- the fit -----------------------------------------------------------------------


def _busiest(x, y, most):
    """Where to look for the dynamics: a stretch of `most` samples with the most movement."""
    n = len(y)
    if n <= most:
        return slice(0, n)
    move = np.abs(np.diff(y, prepend=y[0])) / max(np.ptp(y), 1e-12)
    total = np.concatenate([[0.0], np.cumsum(move**2)])
    starts = np.arange(0, n - most + 1, max(1, most // 4))
    best = starts[int(np.argmax(total[starts + most] - total[starts]))]
    return slice(int(best), int(best) + most)


def _search(t, x, y, good, dt):
    """Delay and time constant [s] of least squares."""
    part = _busiest(x, y, SEARCHED)
    xs, ys, ok = x[part], y[part], good[part]
    if ok.sum() < 16:
        return 0.0, 0.0
    moving = np.ptp(xs, axis=0) > 0
    xs = xs[:, moving]
    if not xs.shape[1]:
        return 0.0, 0.0

    def misfit(p):
        delay, tau = p
        if delay < 0 or tau < 0:
            return 1e300
        a = np.column_stack([_delayed(xs, delay, tau, dt), np.ones(len(ys))])[ok]
        gram = a.T @ a  # well enough conditioned for a search; the final fit is by QR
        gram[np.diag_indices_from(gram)] *= 1 + 1e-12
        left = ys[ok] - a @ np.linalg.solve(gram, a.T @ ys[ok])
        return float(left @ left)

    span = (part.stop - part.start) * dt
    grid = [0.0, *(dt * np.array([0.5, 1, 2, 4, 8, 16, 32, 64, 128, 256, 512, 1024]))]
    grid = [g for g in grid if g < span / 10]
    scores = {(0.0, tau): misfit((0.0, tau)) for tau in grid}
    best_tau = min(scores, key=lambda k: scores[k])[1]
    for delay in grid[1:]:
        for tau in {0.0, best_tau, best_tau / 2}:
            scores[delay, tau] = misfit((delay, tau))
    start = min(scores, key=lambda k: scores[k])
    # nothing is gained by a delay or pole that the record does not ask for
    size = max(dt, 0.3 * max(start))
    simplex = np.array([start, (start[0] + size, start[1]), (start[0], start[1] + size)])
    found = minimize(misfit, start, method="Nelder-Mead", options={
        "initial_simplex": simplex, "xatol": 1e-3 * dt, "fatol": 1e-9 * scores[start] + 1e-300, "maxiter": 160,
    })  # fmt: skip
    return (float(found.x[0]), float(found.x[1])) if found.fun < scores[start] else start


def _final(x, y, good, delay, tau, dt):
    """Weights and offset over the whole record, and the noise that is left."""
    shaped = _delayed(x, delay, tau, dt)
    step = max(1, len(y) // FITTED)
    pick = np.flatnonzero(good)[::step]
    matrix = np.column_stack([shaped[pick], np.ones(len(pick))])
    fit = least_squares(matrix, y[pick])
    # neighbouring residuals are not independent: count only as many as are (first-order correlation)
    r = fit.residuals
    if len(r) > 8 and r @ r > 0:
        rho = float(np.clip(r[1:] @ r[:-1] / (r @ r), 0.0, 0.999))
        wider = np.sqrt((1 + rho) / (1 - rho))
        fit = fit._replace(standard_uncertainty=fit.standard_uncertainty * wider, covariance=fit.covariance * wider**2)
    value = np.nan_to_num(fit.value)
    if not fit.determined.all():  # a signal that never moved stands in the offset; the sum is right all the same
        value = np.linalg.lstsq(matrix, y[pick], rcond=None)[0]
    model = shaped @ value[:-1] + value[-1]
    return fit, float(good.mean()), model, float(fit.scatter or 0.0)


# -- findings ----------------------------------------------------------------------


def _say_clipping(y, model, clipped, noise):
    out = []
    for sign, word in ((1, "upper"), (-1, "lower")):
        here = clipped & (sign * (model - y) > CLEAR * noise)
        if here.sum() >= 5:
            level = float(np.median(y[here]))
            out.append(
                Finding(
                    "clipping",
                    level,
                    f"The output stops at {level:.3g} V, its {word} limit, in {100 * here.mean():.2g} % of the record.",
                )
            )
    return out


def _say_slewing(design, y, model, steep, dt, noise):
    if steep.sum() < 4:
        return []
    slope = np.abs(np.gradient(y, dt))[steep]
    rate = float(np.median(slope))
    even = np.subtract(*np.quantile(slope, [0.75, 0.25])) < 0.35 * rate
    behind = np.abs(y - model)[_widened(steep, 2)].max() > CLEAR * noise
    if not (even and behind):
        return []
    sheet = design.op_amp.slew_rate
    return [
        Finding(
            "slewing",
            rate,
            f"Edges run at a steady {rate / 1e6:.3g} V/µs: the output slews (data sheet {sheet / 1e6:.3g} V/µs).",
        )
    ]


def _say_ringing(left, drive, quiet, dt, noise, tau):
    """An oscillation behind the edges, dying away."""
    move = np.abs(np.diff(drive, prepend=drive[0]))
    if not move.max() > 0:
        return []
    edges = np.flatnonzero(move > 0.3 * move.max())
    starts = edges[np.diff(edges, prepend=-(10**9)) > 64][:20]
    found = []
    for a in starts:
        stop = starts[starts > a][0] if (starts > a).any() else len(left)
        piece = left[a + 1 : min(a + 4096, stop)]
        if len(piece) < 32:
            continue
        piece = piece - piece[len(piece) // 2 :].mean()
        if np.abs(piece[: len(piece) // 4]).max() < 4 * np.abs(piece[len(piece) // 2 :]).max() and len(starts) > 0:
            lively = np.abs(piece[: len(piece) // 4]).max() > 4 * max(np.std(piece[len(piece) // 2 :]), 1e-12)
            if not lively:
                continue
        sign = np.sign(piece[np.abs(piece) > 0.08 * np.abs(piece).max()])
        turns = int((np.diff(sign) != 0).sum())
        power = np.abs(np.fft.rfft(piece * np.hanning(2 * len(piece))[len(piece) :], 8 * len(piece))) ** 2
        f = np.fft.rfftfreq(8 * len(piece), dt)
        from_ = np.searchsorted(f, 2.0 / (len(piece) * dt))
        peak = from_ + int(np.argmax(power[from_:]))
        if (
            turns >= 4
            and power[peak] > 4 * power[from_]
            and np.abs(piece).max() > max(CLEAR * _noise_of(left), RINGS * move[a])
        ):
            found.append((f[peak], float(np.abs(piece).max())))
    if len(found) < max(1, len(starts) // 2):
        return []
    frequency = float(np.median([f for f, _ in found]))
    size = float(np.median([s for _, s in found]))
    return [
        Finding(
            "ringing",
            frequency,
            f"Behind the edges the output rings at {_hertz(frequency)}, up to {1e3 * size:.3g} mV.",
        )
    ]


def _hertz(f):
    return f"{f / 1e6:.3g} MHz" if f >= 1e6 else f"{f / 1e3:.3g} kHz" if f >= 1e3 else f"{f:.3g} Hz"


def _say_mains(t, left, quiet, noise):
    """50 or 60 Hz and two harmonics in what is left over."""
    span = t[-1] - t[0]
    if span < 2.5 / MAINS[0] or quiet.sum() < 64:
        return []
    step = max(1, len(t) // FITTED)
    # averages of a stretch, where one sample is skipped to: the pick-up is slow, the noise is not
    count = len(t) // step
    tt = t[: count * step].reshape(count, step).mean(axis=1) - t[0]
    yy = np.where(quiet, left, np.median(left[quiet]))[: count * step].reshape(count, step).mean(axis=1)
    best = None
    for f in MAINS:
        columns = [np.ones(count), tt / span]
        for harmonic in (1, 2, 3):
            w = 2 * np.pi * f * harmonic * tt
            columns += [np.cos(w), np.sin(w)]
        fit = least_squares(np.column_stack(columns), yy)
        size = float(np.hypot(*fit.value[2:4]))
        if best is None or size > best[1]:
            best = (f, size, float(fit.scatter or 0.0) * np.sqrt(2 / count), float(np.hypot(*fit.value[4:6])))
    assert best is not None
    f, size, u, second = best
    if max(size, second) < CLEAR * u or max(size, second) < 1e-5:
        return []
    return [
        Finding("mains", size, f"{f:.0f} Hz mains pick-up of {1e3 * max(size, second):.3g} mV peak is in the output.")
    ]


def _for_drawing(t, y, predicted, model):
    """At most `DRAWN` stretches, each with its least and greatest sample so that no peak is lost."""
    step = max(1, -(-len(t) // DRAWN))
    count = len(t) // step
    cut = count * step
    shape = (count, step)
    y, predicted, model = (c[:cut].reshape(shape) for c in (y, predicted, model))
    band = np.column_stack([y.min(axis=1), y.max(axis=1)])
    return t[step // 2 : cut : step], band, _outline(predicted), _outline(model)


def _outline(parts):
    """One point a stretch, greatest and least by turns, so that a line through waves too dense to draw fills their height."""
    return np.where(np.arange(len(parts)) % 2, parts.min(axis=1), parts.max(axis=1))
