// What a figure shows, in words with its numbers, for those who hear the sheet. Bokeh draws on a canvas, which is
// silent; the words come from the same frame as the curves. A fold not listed here may send them itself as `spoken`.

import {setAttr} from './dom.js'
import {THIN, engineering, fixed, signed} from './format.js'

const percent = x => `${fixed(x * 100, 2)}${THIN}%`

const SAYS = {
  curves(s) {
    const at = s.clips.map(c => c.out ? `${c.name}: cable out` : c.at === null ? `${c.name} ${s.clipped === 'no' ? 'does not clip in its range' : 'is clipped all through its range'}` : `${c.name} clips ${c.side ?? ''} at ${fixed(c.at)}${THIN}V`)
    return {transfer: `Output against each signal, the others where they are; now ${fixed(s.output)}${THIN}V. ${at.join('; ')}.`}
  },
  choices(s) {
    const best = s.rows.slice(0, 4).map(r => `${r.arrangement}, ${r.resistors} resistors, worst weight error ${percent(r.error)}, noise gain ${fixed(r.noise_gain, 2)}`)
    const now = s.now ? ` Now: ${s.now.arrangement}, worst weight error ${percent(s.now.error)}.` : ''
    return {map: `${s.rows.length} sets of values, worst weight error against ${s.axis}.${now}${best.length ? ` Best: ${best.join('; ')}.` : ''} All of them are rows of the table.`}
  },
  budget(s) {
    const b = s.boards
    if (!b) return {boards: 'Histogram of drawn boards: none drawn yet.'}
    return {boards: `Histogram of ${b.draws} drawn boards: mean error ${engineering(b.mean, 'V')}, 95${THIN}% from ${engineering(b.low, 'V')} to ${engineering(b.high, 'V')}` +
      `${s.accuracy === null ? '' : `, allowed ±${engineering(s.accuracy, 'V')}, yield ${percent(b.yield ?? b.yield_)}`}.`}
  },
  response(s, state) {
    const cells = s.cells.map((c, k) => `cell ${k + 1}: loop gain 1 at ${engineering(c.crossover, 'Hz')}, phase margin ${fixed(c.phase_margin, 1)}°`)
    const names = state.signals.order.join(', ')
    const r = s.scope ?? {}
    const scope = s.kind === 'step' && r.signal
      ? `Output after a step of ${signed(r.size)}${THIN}V on ${r.signal}: overshoot ${percent(r.overshoot)}, rise ${engineering(r.rise, 's')}, ` +
        `${Object.entries(r.settled ?? {}).map(([band, t]) => `within ${percent(+band)} ${t === null ? 'not in this record' : `after ${engineering(t, 's')}`}`).join(', ')}.`
      : `Output over time with the waves given; slewing ${percent(r.slewing ?? 0)} and clipping ${percent(r.clipping ?? 0)} of the time.`
    return {
      gain: `Gain of ${names}, open-loop gain and noise gain over frequency. ${cells.join('; ')}.`,
      phase: `Phase of ${names} against DC, and of the loop gain. ${cells.join('; ')}.`,
      scope,
    }
  },
  bench(s) {
    const fit = s.capture?.fit
    if (!fit) return {}
    const weights = fit.names.map((n, i) => `${n} ${signed(fit.value[i], 4)}, predicted ${signed(fit.predicted[i], 4)}`)
    return {capture: `Captured output with the prediction and the fit laid over it: ${weights.join('; ')}; noise ${engineering(fit.noise, 'V')} RMS.`}
  },
}

export function speak(key, shown, state) {
  const said = SAYS[key]?.(shown, state) ?? shown.spoken ?? {}
  for (const [slot, words] of Object.entries(said)) {
    const node = document.querySelector(`[data-slot="${key}_${slot}"]`)
    if (!node) continue
    setAttr(node, 'role', 'img')
    setAttr(node, 'aria-label', words)
  }
}
