"""Which fault explains the readings: every single fault simulated, weighed, ranked.

For each suspect the joint density of all readings is evaluated: the prediction of
`Bench.predict` with the spread of the healthy parts, the meter, and a small floor
for what the model leaves out. Unknown quantities (a wrong value, a load) are
integrated out on a grid that closes in on the best value. With the odds of each
kind this gives probabilities by Bayes' rule. The meter may be worse than its
statement: a share of the odds goes to three and to ten times it.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import NamedTuple

import numpy as np
from scipy.special import logsumexp
from scipy.stats import chi2

from .board import Bench, Boards, Prediction, log_likelihood
from .faults import FAULTS, HEALTHY, HEALTHY_ODDS, Fault, Place, Values, Way

METER_SCALES = (1.0, 3.0, 10.0)
STATED_ODDS = (0.95, 0.04, 0.01)  # that the meter is this much worse than stated
GUESSED_ODDS = (0.70, 0.20, 0.10)  # where nobody stated it
COARSE_STEP = 0.4  # in ln(ohm)
CLOSER = 5  # rounds of closing in
NEW_POINTS = 8
PEAKS = 3  # places of a grid closed in on
PEAK_DEPTH = 300.0  # in ln, how far the others may lie below the first
# Two suspects are not told apart when the readings favour one over the other by less
# than ten to one: below "strong" evidence (Jeffreys, Theory of Probability, appendix B).
TELLS_APART = np.log(10.0)
CHUNK = 60_000  # array elements in one pass: they stay in the processor's cache
MOST_ROWS = 60
SCREEN_ROWS = 18  # with more readings, these many sort out first what is out of the question
SCREEN_DEPTH = 80.0  # in ln: what is this far behind on some of the readings is not weighed on the others


class Suspect(NamedTuple):
    """One entry of the ranked list."""

    fault: str
    part: str
    probability: float
    estimate: float | None  # ohm, or volts where `unit` says so
    estimate_uncertainty: float | None  # standard
    group: int
    explain: str
    tell: str  # the measurement that parts it from the rest of its group
    misfit: float  # largest |reading − prediction| in standard deviations
    unit: str  # of the estimate


@dataclass
class Case:
    """One fault at one place: every board wired for it, what each weighs."""

    fault: Fault | None
    place: Place
    log_prior: float
    ways: list[tuple[Way, float]] = field(default_factory=list)  # with log share

    @property
    def key(self):
        return (self.fault.name if self.fault else HEALTHY, self.place.part)


class Trial(NamedTuple):
    """One board tried: which case, which way, its value, its prior weight."""

    case: int
    way: int
    value: float


def list_cases(bench: Bench, faults=FAULTS) -> list[Case]:
    """The healthy case, then every fault at every place, with log prior odds that sum to one."""
    cases = [Case(None, Place("", ()), np.log(HEALTHY_ODDS), [(Way(lambda b, r, v: None), 0.0)])]
    placed = [(fault, list(fault.places(bench))) for fault in faults]
    total = sum(fault.odds for fault, places in placed if places)
    for fault, places in placed:
        for place in places:
            prior = (1 - HEALTHY_ODDS) * fault.odds / total / len(places)
            shares = np.array([w.share for w in place.ways])
            logs = np.log(shares / shares.sum())
            cases.append(Case(fault, place, float(np.log(prior)), list(zip(place.ways, logs, strict=True))))
    return cases


def coarse_values(values: Values) -> np.ndarray:
    """First grid of an unknown quantity: even steps of its logarithm in each span."""
    points = []
    for low, high, _ in values.spans:
        a, b = np.log(low), np.log(high)
        points.append(np.exp(np.linspace(a, b, max(3, int(np.ceil((b - a) / COARSE_STEP)) + 1))))
    return np.unique(np.concatenate(points))


def wire(bench: Bench, cases, trials) -> Boards:
    """A batch with one board a trial."""
    boards = bench.healthy.take(np.zeros(len(trials), dtype=int))
    for row, t in enumerate(trials):
        cases[t.case].ways[t.way][0].edit(boards, row, t.value)
    return boards


class Evidence(NamedTuple):
    """What was learned of each trial: flat lists over all boards tried."""

    trials: list[Trial]
    log_mass: np.ndarray  # (T,) log of the prior mass each stands for, of its case (case prior left out)
    log_like: np.ndarray  # (T,)


class Diagnosis:
    """All suspects weighed against the readings.

    Parameters
    ----------
    bench : Bench
    volts : (R, n) array_like
        Signal values of each reading [V].
    readings : (R,) array_like
        Output read [V].
    meter : (R,) array_like
        Standard uncertainty of each reading [V].
    stated : bool
        Whether the meter's uncertainty was stated, or guessed.
    faults : tuple of Fault, optional
        Another list.

    Attributes
    ----------
    probabilities : (cases,) ndarray
        Posterior, in the order of `cases`.
    """

    def __init__(self, bench: Bench, volts, readings, meter, stated=True, faults=FAULTS):
        self.bench = bench
        self.cases = list_cases(bench, faults)
        volts = np.asarray(volts, dtype=float).reshape(-1, bench.signal_count)
        readings = np.asarray(readings, dtype=float).reshape(-1)
        meter = np.broadcast_to(np.asarray(meter, dtype=float), readings.shape)
        self.volts, self.readings, self.meter = condense(volts, readings, meter)
        self.scale_odds = np.log(STATED_ODDS if stated else GUESSED_ODDS)
        self._screened: Diagnosis | None = None
        self._alive = np.ones(len(self.cases), dtype=bool)
        if len(self.readings) > SCREEN_ROWS + 6:
            few = condense(self.volts, self.readings, self.meter, SCREEN_ROWS)
            self._screened = Diagnosis(bench, few[0], few[1], few[2], stated, faults)
            self._alive = self._screened.log_posterior > self._screened.log_posterior.max() - SCREEN_DEPTH
        self._weigh()

    # -- weighing ----------------------------------------------------------------

    def _likelihoods(self, trials, blur=None):
        """(T,) log density of the readings, the meter's scale integrated out.

        With `blur` (grid lengths), the trials are grids in a row and a second array
        comes along: the same with each board's unknown value spread over its step,
        so that a coarse grid cannot step over a narrow peak.
        """
        if not len(self.readings) or not trials:
            nothing = np.zeros(len(trials))
            return nothing if blur is None else (nothing, nothing)
        boards = wire(self.bench, self.cases, trials)
        size = self.bench.d_leg.shape[0] * len(self.readings)
        step = max(1, CHUNK // size)
        sharp, kept = [], []
        for start in range(0, boards.count, step):
            part = boards.take(np.arange(start, min(start + step, boards.count)))
            prediction = self.bench.predict(part, self.volts, self.readings)
            sharp.append(log_likelihood(prediction, self.readings, self.meter, METER_SCALES))
            if blur is not None:
                kept.append(prediction)
        sharp = logsumexp(np.concatenate(sharp) + self.scale_odds, axis=1)
        if blur is None:
            return sharp
        mean = np.concatenate([p.mean for p in kept])
        within = np.zeros((len(mean), 2, mean.shape[1]))  # slope and bend over half a step
        for start, count in zip(np.cumsum(blur) - blur, blur, strict=True):
            m = mean[start : start + count]
            within[start : start + count, 0] = 0.5 * np.gradient(m, axis=0)
            within[start + 1 : start + count - 1, 1] = 0.25 * (m[2:] - 2 * m[1:-1] + m[:-2])
        soft, done = [], 0
        for p in kept:
            wide = p._replace(columns=np.concatenate([p.columns, within[done : done + len(p.mean)]], axis=1))
            done += len(p.mean)
            soft.append(log_likelihood(wide, self.readings, self.meter, METER_SCALES))
        return sharp, logsumexp(np.concatenate(soft) + self.scale_odds, axis=1)

    def _weigh(self):
        fixed, open_ways = [], []
        for c, case in enumerate(self.cases):
            for w, (way, _) in enumerate(case.ways if self._alive[c] else ()):
                if way.values is None:
                    fixed.append(Trial(c, w, np.nan))
                else:
                    open_ways.append((c, w, way.values))
        likely = [Trial(c, w, v) for c, w, values in open_ways for v in values.likely]
        grids = [coarse_values(values) for _, _, values in open_ways]
        first = [Trial(c, w, v) for (c, w, _), grid in zip(open_ways, grids, strict=True) for v in grid]
        tried = fixed + likely
        flat_logs = list(self._likelihoods(tried))
        lengths = np.array([len(g) for g in grids], dtype=int)
        sharp, soft = self._likelihoods(first, lengths) if first else (np.zeros(0), np.zeros(0))
        ends = np.cumsum(lengths)[:-1]
        tables, softs = (np.split(sharp, ends), np.split(soft, ends)) if grids else ([], [])
        masses = [self._share(t) for t in fixed]
        for c, w, values in open_ways:
            share = self.cases[c].ways[w][1]
            if values.likely:
                masses += [share + np.log(values.likely_share / len(values.likely))] * len(values.likely)
        grids, tables = self._close_in(open_ways, grids, tables, softs)
        for (c, w, values), grid, table in zip(open_ways, grids, tables, strict=True):
            share = self.cases[c].ways[w][1] + np.log1p(-values.likely_share if values.likely else 0.0)
            tried += [Trial(c, w, v) for v in grid]
            flat_logs += list(table)
            masses += list(share + _grid_log_masses(values, grid, table))
        self._add_screened(tried, masses, flat_logs)
        self.evidence = Evidence(tried, np.array(masses), np.array(flat_logs))
        self._sum_up()

    def _add_screened(self, tried, masses, logs):
        """What fell out at the screening keeps its distance from the likeliest there."""
        first = self._screened
        if first is None or self._alive.all():
            return
        lead = int(first.order[0])
        mine = [i for i, t in enumerate(tried) if t.case == lead]
        here = logsumexp(np.array([masses[i] + logs[i] for i in mine]))
        shift = here - first.log_evidence[lead]
        for c in np.flatnonzero(~self._alive):
            tried.append(first.evidence.trials[first.best_trial[c]])
            logs.append(first.best_like[c] + shift)
            masses.append(first.log_evidence[c] - first.best_like[c])

    def _share(self, trial):
        return self.cases[trial.case].ways[trial.way][1]

    def _close_in(self, open_ways, grids, tables, softs):
        """Put new points around the best one of every grid, a few times over."""
        if not len(self.readings) or not open_ways:
            return grids, tables
        between = []  # (way, low, high): the best places of each grid, two where there are two
        for i, (grid, soft) in enumerate(zip(grids, softs, strict=True)):
            last = len(grid) - 1
            padded = np.concatenate([[-np.inf], soft, [-np.inf]])
            peaks = np.flatnonzero((soft >= padded[:-2]) & (soft >= padded[2:]))
            peaks = peaks[np.argsort(-soft[peaks], kind="stable")][:PEAKS]
            for at in peaks[soft[peaks] > soft[peaks[0]] - PEAK_DEPTH]:
                # two steps: next to the gap of the allowed values one step ends too soon
                between.append((i, grid[max(at - 2, 0)], grid[min(at + 2, last)]))
        for _ in range(CLOSER):
            fresh, where, kept = [], [], []
            for i, low, high in between:
                c, w, values = open_ways[i]
                steps = (np.arange(NEW_POINTS) + 0.5) / NEW_POINTS
                points = np.exp(np.log(low) + np.log(high / low) * steps)
                points = points[_inside(values, points)]
                if len(points) >= 2:
                    kept.append((i, low, high, len(points)))
                    fresh += [Trial(c, w, v) for v in points]
                    where += [i] * len(points)
            if not fresh:
                break
            lengths = np.array([count for *_, count in kept])
            # blurred over its step again: a narrow peak between two points outweighs a broad, low one beside it
            logs, soft = self._likelihoods(fresh, lengths)
            where = np.array(where)
            values_now = np.array([t.value for t in fresh])
            for i in range(len(grids)):
                mine = where == i
                grid = np.concatenate([grids[i], values_now[mine]])
                table = np.concatenate([tables[i], logs[mine]])
                order = np.unique(grid, return_index=True)[1]
                grids[i], tables[i] = grid[order], table[order]
            between = []
            for (i, low, high, count), end in zip(kept, np.cumsum(lengths), strict=True):
                at = int(np.argmax(soft[end - count : end]))
                best = values_now[end - count + at]
                # at an end of its window the best may lie beyond: the next one is moved, not only narrowed
                wide = 1.0 if 0 < at < count - 1 else 2.5
                reach = (high / low) ** (wide / NEW_POINTS)
                between.append((i, max(best / reach, grids[i][0]), min(best * reach, grids[i][-1])))
        return grids, tables

    def _sum_up(self):
        e = self.evidence
        case_of = np.array([t.case for t in e.trials])
        log_evidence = np.full(len(self.cases), -np.inf)
        best_like = np.full(len(self.cases), -np.inf)
        best_trial = np.zeros(len(self.cases), dtype=int)
        terms = e.log_mass + e.log_like
        for c in range(len(self.cases)):
            mine = np.flatnonzero(case_of == c)
            log_evidence[c] = logsumexp(terms[mine])
            # of the unknown values the likeliest is the estimate; of the ways the weightiest
            top = mine[int(np.argmax(e.log_like[mine]))]
            best_like[c], best_trial[c] = e.log_like[top], top
        self.log_evidence, self.best_like, self.best_trial = log_evidence, best_like, best_trial
        prior = np.array([case.log_prior for case in self.cases])
        posterior = log_evidence + prior
        self.log_posterior = posterior - logsumexp(posterior)
        self.probabilities = np.exp(self.log_posterior)
        self.order = np.argsort(-self.probabilities, kind="stable")

    # -- what is told ------------------------------------------------------------

    def estimate(self, case: int) -> float | None:
        """The likeliest value [ohm] of the quantity the fault leaves unknown, or None."""
        best = self.evidence.trials[self.best_trial[case]]
        values = self.cases[case].ways[best.way][0].values
        return None if values is None or not values.told or not len(self.readings) else float(best.value)

    def groups(self) -> np.ndarray:
        """(cases,) group numbers, 1 for the group of the likeliest suspect.

        A suspect joins the one before it when the readings favour neither by ten to
        one, or neither is ten times as probable as the other, or when both at their best may well give these very readings: they may
        then still differ in probability, by the odds of their kinds and by how freely
        they predict, but nothing that was read contradicts either.
        """
        group = np.zeros(len(self.cases), dtype=int)
        fits = self.fits()
        valued = self._valued()
        number = 0
        for lead in self.order:
            if group[lead]:
                continue
            number += 1
            together = np.abs(self.log_evidence - self.log_evidence[lead]) < TELLS_APART
            # nor where the readings speak for one and the odds of its kind for the other
            together |= np.abs(self.log_posterior - self.log_posterior[lead]) < TELLS_APART
            if fits[lead]:
                alike = fits.copy()
                # a board just outside its tolerance always resembles a healthy one: "none"
                # shares only with faults that take no value
                if lead == 0:
                    alike &= ~valued
                elif valued[lead]:
                    alike[0] = False
                together |= alike
            group[(group == 0) & together] = number
            group[lead] = number
        return group

    def _valued(self):
        return np.array([self.estimate(c) is not None for c in range(len(self.cases))])

    def fits(self) -> np.ndarray:
        """(cases,) whether each at its best may well give these readings (chi-squared, 99 %).

        The meter counts as as much worse than its statement as the likeliest suspect
        says it is.
        """
        count = len(self.readings)
        if not count:
            return np.ones(len(self.cases), dtype=bool)
        p = self._best_prediction(range(len(self.cases)))
        lead = int(self.order[0])
        leading = Prediction(*(x[lead : lead + 1] for x in p))
        scales = log_likelihood(leading, self.readings, self.meter, METER_SCALES)[0] + self.scale_odds
        scale = METER_SCALES[int(np.argmax(scales))]
        cov = np.swapaxes(p.columns, 1, 2) @ p.columns
        at = np.arange(count)
        cov[:, at, at] += p.own + (scale * self.meter) ** 2
        residual = self.readings - p.mean
        square = (residual * np.linalg.solve(cov, residual[..., None])[..., 0]).sum(axis=1)
        return square < chi2.ppf(0.99, count)

    def estimate_uncertainty(self, case: int) -> float | None:
        """Standard uncertainty [ohm] of the estimate, from the posterior of its logarithm; None without one."""
        best = self.evidence.trials[self.best_trial[case]]
        if self.estimate(case) is None:
            return None
        e = self.evidence
        mine = [i for i, t in enumerate(e.trials) if t.case == case and t.way == best.way]
        x = np.log([e.trials[i].value for i in mine])
        w = np.exp(e.log_mass[mine] + e.log_like[mine] - np.max(e.log_mass[mine] + e.log_like[mine]))
        mean = np.average(x, weights=w)
        return float(best.value * np.sqrt(np.average((x - mean) ** 2, weights=w)))

    def misfits(self, cases) -> np.ndarray:
        """Of each case's best board, the largest |reading − prediction| in standard deviations."""
        if not len(self.readings):
            return np.zeros(len(cases))
        p = self._best_prediction(cases)
        spread = np.sqrt(p.own + np.square(p.columns).sum(axis=1) + self.meter**2)
        return np.max(np.abs(self.readings - p.mean) / spread, axis=1)

    def _best_prediction(self, cases) -> Prediction:
        trials = [self.evidence.trials[self.best_trial[c]] for c in cases]
        return self.bench.predict(wire(self.bench, self.cases, trials), self.volts, self.readings)


def _inside(values: Values, points):
    ok = np.zeros(len(points), dtype=bool)
    for low, high, _ in values.spans:
        ok |= (points >= low) & (points <= high)
    return ok


def _grid_log_masses(values: Values, grid, table):
    """Log prior mass of each grid point, shaped so that sum(mass * likelihood) integrates
    a log-likelihood taken as straight between neighbours (exact for exponentials)."""
    x = np.log(grid)
    mass = np.zeros(len(grid))
    step = np.zeros(len(grid) - 1)  # prior mass of each step between neighbours
    for low, high, share in values.spans:
        same = (grid[:-1] >= low * (1 - 1e-9)) & (grid[1:] <= high * (1 + 1e-9))
        step += np.where(same, np.diff(x) * share / np.log(high / low), 0.0)
    rise = np.diff(table)
    # ∫ exp over one step, shared between its two ends by which is higher
    small = np.abs(rise) < 1e-6
    safe = np.where(small, 1.0, rise)
    high_end = np.maximum(table[:-1], table[1:])
    area = np.where(small, 1.0, -np.expm1(-np.abs(safe)) / np.abs(safe))  # relative to the higher end
    log_area = high_end + np.log(np.maximum(step * area, 1e-300))
    for i in np.flatnonzero(step > 0):
        at = i if table[i] >= table[i + 1] else i + 1
        mass[at] += np.exp(log_area[i] - table[at])
    return np.log(np.maximum(mass, 1e-300))


def condense(volts, readings, meter, most=MOST_ROWS):
    """Few enough rows for the joint density: equal rows averaged, then an even choice.

    Returns
    -------
    volts (R, n), readings (R,), meter (R,)
        R at most `most`.
    """
    if len(readings) <= most:
        return volts, readings, meter
    keys, back = np.unique(volts, axis=0, return_inverse=True)
    back = back.reshape(-1)
    if len(keys) < len(readings):
        weight = 1.0 / np.maximum(meter, 1e-12) ** 2
        total = np.bincount(back, weight)
        readings = np.bincount(back, weight * readings) / total
        volts, meter = keys, 1.0 / np.sqrt(total)
    if len(readings) > most:
        # spread over the readings from lowest to highest, extremes included
        order = np.argsort(readings, kind="stable")
        pick = np.sort(order[np.unique(np.linspace(0, len(order) - 1, most).round().astype(int))])
        volts, readings, meter = volts[pick], readings[pick], meter[pick]
    return volts, readings, meter
