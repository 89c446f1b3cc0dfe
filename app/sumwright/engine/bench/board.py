"""Thousands of boards, each wired its own way, and what the meter would read on them.

`nodes.solve` answers for one topology with any values. A fault changes the
topology: a leg lands on the other node, the op amp's inputs are exchanged, an
output is stuck. Here every board of a batch carries its own wiring in index
arrays, so one pass of plain array arithmetic covers all faults, all readings and
all the small changes of parts that give each prediction its spread. The tests hold
it against `operating_point`.

Two shortcuts, both far under a meter's resolution: what a later cell's leg draws
from an earlier output is taken with that leg's far end at 0 V, and zero ohms is
`LEAST_OHM`.

Source: Kirchhoff's current law at each node; moments of a normal variable clipped
at both ends by integration of the normal density.
"""

from __future__ import annotations

from dataclasses import dataclass, fields, replace
from typing import NamedTuple

import numpy as np
from scipy.special import log_ndtr, ndtr

from ..stage import REFERENCE, Design, cell_name

LEAST_OHM = 1e-3
MINUS, PLUS = 0, 1
# How far a real output limit is from the data sheet's, beside the rails' tolerance: a
# share of the dropout, and of the current limit (typical figures, common practice).
DROPOUT_SPREAD = 0.3
CURRENT_SPREAD = 0.25
LIMIT_FLOOR = 0.005  # V
# What the model itself leaves out (CMRR, drift of the room, lead resistance).
FLOOR_VOLTS = 1e-4
FLOOR_SHARE = 3e-5
TORN = 0.3  # below this chance of a reading between the limits the output is one or the other
BEYOND = 100.0  # V: a limit that far off is none
EITHER = 2.0
SLACK, CLIP_SHARE = (
    3.0,
    1e-3,
)  # standard deviations, and share of a reading, before one counts as beyond the unlimited output
NORMAL = np.nan  # `stuck` of an amplifier that works


@dataclass
class Boards:
    """A batch of boards: structure of arrays, first axis the board.

    Shapes: B boards, L legs, K cells, n signals. Sources are numbered signals
    first, then the reference, then the cells' outputs.
    """

    leg_cell: np.ndarray  # (L,) int, the same on every board
    leg_source: np.ndarray  # (B, L) int
    leg_node: np.ndarray  # (B, L) int, MINUS or PLUS
    leg_ohm: np.ndarray  # (B, L)
    series_ohm: np.ndarray  # (B, n + 1) of each signal's source, then the reference's
    ground_ohm: np.ndarray  # (B, K, 2) inf = not fitted
    feedback_ohm: np.ndarray  # (B, K) inf = open
    swapped: np.ndarray  # (B, K) bool: the op amp's inputs exchanged
    latch: np.ndarray  # (B,) with inputs exchanged: where the output came from, -1, 0 or +1, or EITHER way each time
    stuck: np.ndarray  # (B, K) V, NORMAL where the amplifier works
    stuck_spread: np.ndarray  # (B, K) V
    stuck_ohm: np.ndarray  # (B, K) in series with what a stuck output holds
    undriven: np.ndarray  # (B, K) bool: the output pin is connected to nothing inside
    drift: np.ndarray  # (B, K) A pushed into the + node, to say which way a floating node goes
    nudge: np.ndarray  # (B, K) V of offset beyond the ordinary, to say which way a comparator tips
    unrest: np.ndarray  # (B,) share of the op amps' offset and bias current that is there
    reference_volts: np.ndarray  # (B,)
    rail_high: np.ndarray  # (B,) V
    rail_low: np.ndarray  # (B,) V
    rail_spread: np.ndarray  # (B, 2) V beyond the ordinary one: high, low; below zero: instead of it
    load_ohm: np.ndarray  # (B,) inf = none

    @property
    def count(self) -> int:
        return self.leg_ohm.shape[0]

    def take(self, index) -> Boards:
        """The boards at `index`, as a new batch that can be edited."""
        index = np.asarray(index)
        return replace(self, **{f.name: getattr(self, f.name)[index] for f in fields(self) if f.name != "leg_cell"})


class Prediction(NamedTuple):
    """What the meter would read on each board, before the meter's own error.

    `mean` (B, R) [V]; `columns` (B, P, R) [V], one standard deviation of each
    independent quantity, so that the covariance is columnsᵀ·columns + diag(`own`);
    `own` (B, R) [V²]; `share_high` and `share_low` (B, R) the probability that the
    output sits at a limit; `log_odds` (B,) of the sides taken where an output could
    have gone to either limit and the reading says which.
    """

    mean: np.ndarray
    columns: np.ndarray
    own: np.ndarray
    share_high: np.ndarray
    share_low: np.ndarray
    log_odds: np.ndarray


class Leg(NamedTuple):
    """A leg of the design in the order of `Boards`' leg axis."""

    source: str
    cell: int
    node: int
    resistance: float


class Bench:
    """A design made ready for the bench: its healthy board and the spread of its parts.

    Parameters
    ----------
    design : Design
        Realised: it has cells.
    """

    def __init__(self, design: Design):
        self.design = design
        self.names = design.signal_names
        n, k = len(self.names), len(design.cells)
        self.signal_count, self.cell_count = n, k
        index = {name: i for i, name in enumerate(self.names)}
        index[REFERENCE] = n
        index.update({cell_name(j): n + 1 + j for j in range(k)})
        legs = []
        for j, cell in enumerate(design.cells):
            legs += [Leg(leg.source, j, MINUS, float(leg.resistance)) for leg in cell.minus]
            legs += [Leg(leg.source, j, PLUS, float(leg.resistance)) for leg in cell.plus]
        self.legs = tuple(legs)
        inf = np.inf
        reference = design.reference
        self.healthy = Boards(
            leg_cell=np.array([leg.cell for leg in legs], dtype=int),
            leg_source=np.array([[index[leg.source] for leg in legs]], dtype=int),
            leg_node=np.array([[leg.node for leg in legs]], dtype=int),
            leg_ohm=np.array([[leg.resistance for leg in legs]]),
            series_ohm=np.array(
                [[s.source_resistance for s in design.signals] + [reference.source_resistance if reference else 0.0]]
            ),
            ground_ohm=np.array(
                [
                    [
                        [inf if g is None else float(g) for g in (cell.minus_ground, cell.plus_ground)]
                        for cell in design.cells
                    ]
                ]
            ),
            feedback_ohm=np.array([[inf if c.feedback is None else float(c.feedback) for c in design.cells]]),
            swapped=np.zeros((1, k), dtype=bool),
            latch=np.zeros(1),
            stuck=np.full((1, k), NORMAL),
            undriven=np.zeros((1, k), dtype=bool),
            stuck_spread=np.zeros((1, k)),
            stuck_ohm=np.zeros((1, k)),
            drift=np.zeros((1, k)),
            nudge=np.zeros((1, k)),
            unrest=np.ones(1),
            reference_volts=np.array([reference.voltage if reference else 0.0]),
            rail_high=np.array([design.supply.high]),
            rail_low=np.array([design.supply.low]),
            rail_spread=np.zeros((1, 2)),
            load_ohm=np.array([design.load.resistance or inf]),
        )
        self._lay_out_spread()

    def _lay_out_spread(self):
        """One row a quantity that varies from board to board, its standard uncertainty in place."""
        design = self.design
        kind, amp, k = design.resistor, design.op_amp, self.cell_count
        room = max(abs(design.ambient.high - design.ambient.nominal), abs(design.ambient.low - design.ambient.nominal))
        u_r = np.hypot(kind.tolerance, kind.temperature_coefficient * room) / np.sqrt(3)
        grounds = [
            (j, side)
            for j, cell in enumerate(design.cells)
            for side, g in enumerate((cell.minus_ground, cell.plus_ground))
            if g
        ]
        legs = len(self.legs)
        rows = [("leg", i) for i in range(legs)] + [("ground", g) for g in grounds]
        rows += [("feedback", j) for j in range(k)]
        rows += [(what, j) for what in ("offset", "bias", "difference", "stuck") for j in range(k)]
        rows += [("reference", 0)] if design.reference else []
        rows += [("reach", 0), ("reach", 1), ("current", 0)]
        p = len(rows) + 1  # the first is the nominal board
        self.quantities = tuple(rows)
        self.d_leg, self.d_ground = np.zeros((p, legs)), np.zeros((p, k, 2))
        self.d_feedback, self.d_reference = np.zeros((p, k)), np.zeros(p)
        self.offset, self.bias = np.zeros((p, k)), np.zeros((p, k))
        self.difference, self.d_stuck = np.zeros((p, k)), np.zeros((p, k))
        self.d_reach, self.d_current = np.zeros((p, 2)), np.zeros(p)
        third = np.sqrt(3)
        u_vos = np.hypot(amp.offset_voltage, amp.offset_drift * room) / third
        for i, (what, at) in enumerate(rows, start=1):
            if what == "leg":
                self.d_leg[i, at] = u_r
            elif what == "ground":
                self.d_ground[(i, *at)] = u_r
            elif what == "feedback":
                self.d_feedback[i, at] = u_r
            elif what == "offset":
                self.offset[i, at] = u_vos
            elif what == "bias":
                self.bias[i, at] = amp.bias_current / third
            elif what == "difference":
                self.difference[i, at] = amp.offset_current / third
            elif what == "stuck":
                self.d_stuck[i, at] = 1.0
            elif what == "reach":
                self.d_reach[i, at] = 1.0
            elif what == "current":
                self.d_current[i] = CURRENT_SPREAD
            else:
                self.d_reference[i] = design.reference.tolerance / third
        # columns that can never move anything are not carried along
        moving = np.ones(p, dtype=bool)
        for i, (what, _) in enumerate(rows, start=1):
            if what in ("bias", "difference") and not (self.bias[i].any() or self.difference[i].any()):
                moving[i] = False
            if what == "reference" and not self.d_reference[i]:
                moving[i] = False
        keep = np.flatnonzero(moving)
        for name in ("d_leg", "d_ground", "d_feedback", "d_reference", "offset", "bias", "difference", "d_stuck",
                     "d_reach", "d_current"):  # fmt: skip
            setattr(self, name, getattr(self, name)[keep])
        self.quantities = tuple(rows[i - 1] for i in keep if i)

    # -- the solution ------------------------------------------------------------

    def _walk(self, boards: Boards, volts, spread=True):
        """Unclipped last output (B, P, R) and its limits (B, R), cell by cell."""
        n, k_all = self.signal_count, self.cell_count
        amp = self.design.op_amp
        b = boards.count
        p = self.d_leg.shape[0] if spread else 1
        ar = np.arange(b)
        x = np.asarray(volts, dtype=float)  # (R, n)
        rs = np.concatenate([boards.series_ohm, np.zeros((b, k_all))], axis=1)
        ohm = boards.leg_ohm[:, None, :] * (1.0 + self.d_leg[None, :p]) + rs[ar[:, None], boards.leg_source][:, None, :]
        g_leg = 1.0 / np.maximum(ohm, LEAST_OHM)
        v_ref = boards.reference_volts[:, None] * (1.0 + self.d_reference[None, :p])
        y_in = 1.0 / amp.input_resistance
        r_o = amp.output_resistance
        outs: list = []
        unclipped = high = low = None
        for k in range(k_all):
            into = np.zeros((b, p, 2, n + 1 + k_all))
            for i in np.flatnonzero(boards.leg_cell == k):
                into[ar, :, boards.leg_node[:, i], boards.leg_source[:, i]] += g_leg[:, :, i]
            ground = 1.0 / np.maximum(boards.ground_ohm[:, None, k] * (1.0 + self.d_ground[None, :p, k]), LEAST_OHM)
            total = into.sum(axis=-1) + ground
            drive = into[..., :n] @ x.T + (into[..., n] * v_ref[..., None])[..., None]  # (B, P, 2, R)
            for j in range(k):
                drive += into[..., n + 1 + j, None] * outs[j][:, :, None, :]
            y_f = 1.0 / np.maximum(boards.feedback_ohm[:, None, k] * (1.0 + self.d_feedback[None, :p, k]), LEAST_OHM)
            # a leg that was exchanged may bring the cell its own output: one more feedback
            own = into[:, :, MINUS, n + 1 + k]
            total[..., MINUS] -= own
            y_f = y_f + own
            i_m, i_p = drive[:, :, MINUS], drive[:, :, PLUS]
            unrest = boards.unrest[:, None]
            i_m = i_m - (unrest * (self.bias[:p, k] - 0.5 * self.difference[:p, k]))[..., None]
            i_p = i_p - (unrest * (self.bias[:p, k] + 0.5 * self.difference[:p, k]))[..., None]
            i_p = i_p + boards.drift[:, k, None, None]
            g_m, g_p = total[..., MINUS], total[..., PLUS]
            # The exchanged op amp has its feedback on the + pin; the two pins trade places
            # in the network, so only the sign of what it amplifies changes.
            t_m, t_p = g_m + y_f + y_in, g_p + y_in
            det = t_m * t_p - y_in * y_in
            inv = (1.0 / det)[..., None]
            a0 = (t_p[..., None] * i_m + y_in * i_p) * inv  # node with the feedback: a0 + a1 o
            b0 = (t_m[..., None] * i_p + y_in * i_m) * inv
            a1, b1 = t_p * y_f / det, y_in * y_f / det
            sign = np.where(boards.swapped[:, k], -1.0, 1.0)[:, None]
            gain = amp.open_loop_gain
            d0 = sign[..., None] * (b0 - a0) + (unrest * self.offset[:p, k] + boards.nudge[:, k, None])[..., None]
            d1 = sign * (b1 - a1)
            y_out = np.zeros((b, 1))
            if k == k_all - 1:
                y_out = y_out + (1.0 / np.maximum(boards.load_ohm, LEAST_OHM))[:, None]
            later = (boards.leg_source == n + 1 + k) & (boards.leg_cell > k)
            y_out = y_out + np.where(later[:, None, :], g_leg, 0.0).sum(axis=-1)
            y_t = y_out + y_f - y_f * a1  # current out of the amplifier: y_t o - y_f a0
            u = (gain * d0 + (r_o * y_f)[..., None] * a0) / (1.0 + r_o * y_t - gain * d1)[..., None]
            loose = boards.undriven[:, k]
            if loose.any():
                u[loose] = ((y_f / (y_t + 1e-12))[..., None] * a0)[loose]
            high, low = self._limits(boards, y_f[..., None] * a0, y_t[..., None], p)
            flipped = boards.swapped[:, k]
            if flipped.any():
                came = boards.latch[flipped][:, None, None]
                start = np.where(came > 0, high[flipped, :1], np.where(came < 0, low[flipped, :1], 0.0))
                u[flipped] = gain * (d0[flipped] + d1[flipped][..., None] * start)
            held = ~np.isnan(boards.stuck[:, k])
            if held.any():
                at = boards.stuck[held, k, None] + boards.stuck_spread[held, k, None] * self.d_stuck[None, :p, k]
                y_s = 1.0 / np.maximum(boards.stuck_ohm[held, k, None], LEAST_OHM)
                u[held] = ((y_s * at)[..., None] + y_f[held, :, None] * a0[held]) / (y_s + y_t[held])[..., None]
                # no swing limit holds an output that is not driven by its inputs
                high[held], low[held] = (
                    np.maximum(u[held] + BEYOND, high[held]),
                    np.minimum(u[held] - BEYOND, low[held]),
                )
            unclipped = u
            if k < k_all - 1:
                outs.append(np.clip(u, low, high))
        return unclipped, high, low

    def _limits(self, boards, back, y_t, p):
        """Output limits (B, P, R): swing with its dropout, or the current limit, whichever is nearer."""
        amp, supply = self.design.op_amp, self.design.supply
        rail = supply.tolerance / np.sqrt(3)
        reach = []
        for side, (volts, dropout) in enumerate(
            ((boards.rail_high, amp.dropout_high), (boards.rail_low, -amp.dropout_low))
        ):
            more = boards.rail_spread[:, side]
            u = np.sqrt((rail * volts) ** 2 + (DROPOUT_SPREAD * dropout) ** 2 + more**2)
            u = np.where(more < 0, -more, u)
            reach.append(((volts - dropout)[:, None] + u[:, None] * self.d_reach[None, :p, side])[..., None])
        top, bottom = reach
        most = (amp.output_current * (1.0 + self.d_current[:p]))[None, :, None]
        y = np.maximum(y_t, 1e-12)
        slope = 1.0 + amp.dropout_resistance * y
        high = np.where(top * y - back > 0, (top + amp.dropout_resistance * back) / slope, top)
        low = np.where(bottom * y - back < 0, (bottom + amp.dropout_resistance * back) / slope, bottom)
        high = np.minimum(high, (most + back) / y)
        low = np.maximum(low, (-most + back) / y)
        middle = 0.5 * (high + low)
        crossed = low > high
        return np.where(crossed, middle, high), np.where(crossed, middle, low)

    def outputs(self, boards: Boards, volts) -> np.ndarray:
        """Clipped output of each board without spread, shape (B, R) [V]; `volts` is (R, n)."""
        u, high, low = self._walk(boards, volts, spread=False)
        return np.clip(u[:, 0], low[:, 0], high[:, 0])

    def predict(self, boards: Boards, volts, readings=None) -> Prediction:
        """Mean and spread of the output of each board under each row of `volts` (R, n) [V].

        An output that offset alone may tip to either limit has no mean worth the name:
        given `readings` (R,) [V], with NaN where there is none yet, the limit nearer to
        the reading is taken and its probability counted in `log_odds`.
        """
        u, highs, lows = self._walk(boards, volts)
        high, low = highs[:, 0], lows[:, 0]
        mid, half = 0.5 * (high + low), 0.5 * (high - low)
        step = u[:, 1:] - u[:, :1]
        s = np.sqrt(np.einsum("bpr,bpr->br", step, step)) + 1e-9
        # measured from the middle of the window, for the sake of the squares below
        m = np.clip(u[:, 0] - mid, -half - 30 * s - 1.0, half + 30 * s + 1.0)
        lo, hi = (-half - m) / s, (half - m) / s
        p_low, p_high = ndtr(lo), ndtr(-hi)
        p_in = np.clip(1.0 - p_low - p_high, 0.0, 1.0)
        f_lo, f_hi = (np.exp(-0.5 * np.square(z)) / np.sqrt(2 * np.pi) for z in (lo, hi))
        mean = half * (p_high - p_low) + m * p_in + s * (f_lo - f_hi)
        square = half**2 * (p_high + p_low) + m * m * p_in + 2 * m * s * (f_lo - f_hi)
        square = square + s * s * (p_in + lo * f_lo - hi * f_hi)
        own = np.maximum(square - mean * mean - (p_in * s) ** 2, 0.0)
        mean = mean + mid
        floor = FLOOR_VOLTS**2 + (FLOOR_SHARE * np.abs(mean)) ** 2
        own = own + floor + (p_high + p_low) * LIMIT_FLOOR**2
        # so does an output that is dead but not firmly at zero
        loose = (np.nan_to_num(np.abs(boards.stuck[:, -1:])) > 0) | (boards.stuck_spread[:, -1:] >= 0.1)
        own = own + np.where(loose, LIMIT_FLOOR**2, 0.0)
        columns = step * p_in[:, None, :]
        columns += (highs[:, 1:] - highs[:, :1]) * p_high[:, None, :]
        columns += (lows[:, 1:] - lows[:, :1]) * p_low[:, None, :]
        log_odds = np.zeros(boards.count)
        if readings is not None:
            y = np.asarray(readings, dtype=float)
            torn = (p_in < TORN) & (np.minimum(p_high, p_low) > 1e-6) & ~np.isnan(y)
            if torn.any():
                up = torn & (y > mid)
                down = torn & ~up
                mean = np.where(up, high, np.where(down, low, mean))
                own = np.where(torn, FLOOR_VOLTS**2 + LIMIT_FLOOR**2, own)
                columns = np.where(up[:, None], highs[:, 1:] - highs[:, :1], columns)
                columns = np.where(down[:, None], lows[:, 1:] - lows[:, :1], columns)
                odds = np.where(up, p_high, np.where(down, p_low, 1.0))
                log_odds = np.log(odds).sum(axis=1)
            # No limit pushes an output beyond where it would stand without one: a reading out there
            # says that the limit, known only roughly, is farther off than was thought.
            slack = SLACK * (s + LIMIT_FLOOR + CLIP_SHARE * np.abs(y))
            for share, edge, sign in ((p_high, highs, 1.0), (p_low, lows, -1.0)):
                free = (share > 0.5) & (sign * (y - u[:, 0]) > slack)
                if free.any():
                    reach = np.sqrt(np.square(edge[:, 1:] - edge[:, :1]).sum(axis=1)) + LIMIT_FLOOR
                    log_odds = log_odds + np.where(free, log_ndtr(sign * (edge[:, 0] - u[:, 0]) / reach), 0.0).sum(
                        axis=1
                    )
                    mean = np.where(free, u[:, 0], mean)
                    own = np.where(free, floor, own)
                    columns = np.where(free[:, None], step, columns)
        told = Prediction(mean, columns, own, p_high, p_low, log_odds)
        if readings is not None and (either := np.flatnonzero(boards.latch == EITHER)).size:
            self._unlatch(told, boards.take(either), either, volts, np.asarray(readings, dtype=float))
        return told

    def _unlatch(self, told: Prediction, boards: Boards, at, volts, readings):
        """Write into `told`, at boards `at`, the rail of an output with exchanged inputs that each reading is nearer to."""
        boards.latch[:] = -1.0
        low = self.predict(boards, volts, readings)
        boards.latch[:] = 1.0
        high = self.predict(boards, volts, readings)
        up = np.abs(readings - high.mean) < np.abs(readings - low.mean)
        for name in ("mean", "own", "share_high", "share_low"):
            getattr(told, name)[at] = np.where(up, getattr(high, name), getattr(low, name))
        told.columns[at] = np.where(up[:, None], high.columns, low.columns)
        free = (np.abs(high.mean - low.mean) > LIMIT_FLOOR) & ~np.isnan(readings)
        told.log_odds[at] = np.minimum(high.log_odds, low.log_odds) - np.log(2.0) * free.sum(axis=1)


def log_likelihood(prediction: Prediction, readings, meter, scales=(1.0,)) -> np.ndarray:
    """Log density of `readings` (R,) on each board, shape (B, scales).

    `meter` (R,) is the meter's standard uncertainty [V], multiplied by each scale.
    Cholesky by columns with the boards as the leading axis: for a score of readings
    this is many times faster than one LAPACK call a board.
    """
    residual = np.asarray(readings, dtype=float) - prediction.mean
    meter2 = np.square(np.asarray(meter, dtype=float))
    count = residual.shape[-1]
    base = np.swapaxes(prediction.columns, 1, 2) @ prediction.columns  # (B, R, R)
    diagonal = np.arange(count)
    out = np.empty((residual.shape[0], len(scales)))
    for i, scale in enumerate(scales):
        work = base.copy()
        work[:, diagonal, diagonal] += prediction.own + meter2 * scale**2
        r = residual.copy()
        total = np.zeros(residual.shape[0])
        for j in range(count):
            pivot = work[:, j, j]
            column = work[:, j + 1 :, j] / pivot[:, None]
            total += r[:, j] ** 2 / pivot + np.log(pivot)
            if j + 1 < count:
                work[:, j + 1 :, j + 1 :] -= column[:, :, None] * work[:, None, j, j + 1 :]
                r[:, j + 1 :] -= column * r[:, j, None]
        out[:, i] = prediction.log_odds - 0.5 * (total + count * np.log(2 * np.pi))
    return out
