// Response: gain over phase, the scope, and the numbers that they lead to.

import {el, setAttr, setText} from '../dom.js'
import {THIN, engineering, fixed} from '../format.js'
import {style, swatch} from '../marks.js'
import {Figure, column, saveText, table, takers, words} from './figures.js'

export const styles = true

const percent = (x, d = 1) => `${fixed(x * 100, d)}${THIN}%`
const none = text => [text, 'r soft']

export function mount(node, sheet) {
  node.className = 'response'
  const gain = new Figure(sheet, 'response', 'gain'), phase = new Figure(sheet, 'response', 'phase'), scope = new Figure(sheet, 'response', 'scope')
  const say = message => sheet.fold(message)
  const old = el('span', {}, el('i', {class: 'keyline dotted'}), 'held')
  const key = el('span', {class: 'soft n'}, el('i', {class: 'keyline'}), 'open loop ', el('i', {class: 'keyline dashed'}), 'noise gain ', old)
  const held = el('button', {class: 'act', text: 'Hold this stage', onclick: () => say({do: held.getAttribute('aria-pressed') === 'true' ? 'let go' : 'hold'}), 'aria-pressed': 'false'})
  const left = el('div', {},
    el('div', {class: 'heads'}, el('span', {class: 'cap', text: 'Gain, dB, over Hz'}), key, held, takers(sheet, () => gain, 'gain', 'Gain')),
    el('div', {class: 'figure', role: 'img', 'aria-label': 'Gain over frequency: open loop, noise gain and each signal; the numbers are under Signals and Loop'}, gain.slot),
    el('div', {class: 'heads'}, el('span', {class: 'cap', text: 'Phase, degrees, over Hz: each signal against DC; loop gain dashed'}), takers(sheet, () => phase, 'gain', 'Phase')),
    el('div', {class: 'figure', role: 'img', 'aria-label': 'Phase over frequency of each signal and of the loop gain'}, phase.slot))

  const blank = (label, send, cls = '') => {
    const input = el('input', {class: `blank ${cls}`, 'aria-label': label, autocomplete: 'off'})
    const commit = () => { if (input.dataset.dirty) { input.dataset.dirty = ''; send(input.value) } }
    input.addEventListener('input', () => { input.dataset.dirty = 'yes' })
    input.addEventListener('change', commit)
    input.addEventListener('keydown', e => { if (e.key === 'Enter') commit(); if (e.key === 'Escape') { input.dataset.dirty = ''; input.blur() } })
    return {node: input, set(text) { if (document.activeElement !== input && input.value !== text) input.value = text }}
  }
  const kinds = words('What the scope shows', [['step', 'Step'], ['waves', 'Waves']], kind => say({do: 'kind', kind}))
  const caption = el('span', {class: 'cap'})
  const length = blank('length of the record', text => say({do: 'duration', text}))
  setAttr(length.node, 'placeholder', 'by itself')
  const told = el('p', {class: 'told', role: 'status'})
  const pages = words('Numbers', [['noise', 'Noise'], ['signals', 'Signals'], ['loop', 'Loop'], ['waves', 'Waves']], page => say({do: 'page', page}))
  const page = el('div', {class: 'page', tabindex: 0, role: 'region', 'aria-label': 'Response, numbers'})
  const right = el('div', {},
    el('div', {class: 'heads'}, kinds.node, caption, takers(sheet, () => scope, 'scope', 'Record')),
    el('div', {class: 'figure', role: 'img', 'aria-label': 'Output over time; the line under it says how it settles'}, scope.slot),
    el('div', {class: 'heads'}, told, el('label', {class: 'soft n'}, 'length ', length.node)),
    el('div', {class: 'heads'}, pages.node), page)
  node.append(left, right)

  // ---------------------------------------------------------------- pages

  const built = {}
  const bars = () => { const all = []; return (i, width) => { all[i] ??= el('div', {class: 'bar'}); const w = `${width.toFixed(1)}%`; if (all[i].style.width !== w) all[i].style.width = w; return all[i] } }

  const noise = () => {
    const sum = el('p', {class: 'told'}), bar = bars()
    const t = table([{text: 'noise'}, {text: 'nV/√Hz, 1 kHz', class: 'r'}, {text: 'µV RMS', class: 'r'}, {text: ''}], 'Noise by term')
    t.node.querySelectorAll('th')[3].style.width = '30%'
    const csv = el('button', {class: 'act', text: 'CSV', 'aria-label': 'Noise as CSV', onclick: () => say({do: 'csv', what: 'noise'})})
    return {node: el('div', {}, sum, t.node, el('p', {}, csv)), update(s) {
      const m = s.more, most = m.terms[0]?.rms || 1
      const over = m.to_noise ? `; a sine that fills ${engineering(m.span, 'V')} stands ${fixed(m.to_noise.decibels, 1)}${THIN}dB over it, ${fixed(m.to_noise.bits, 1)} bits` : ''
      setText(sum, `${engineering(m.rms, 'V')} RMS from ${engineering(m.band[0], 'Hz')} to ${engineering(m.band[1], 'Hz')}, ${engineering(m.density, 'V/√Hz')} at 1${THIN}kHz${over}`)
      const d = column(m.terms.map(r => r.density_1khz), 'V/√Hz', {most: 2}), v = column(m.terms.map(r => r.rms), 'V', {most: 2})
      t.heads(['noise', d.head(`1${THIN}kHz`), v.head('RMS'), ''])
      t.set(m.terms.map((r, i) => [r.name, [d.write(r.density_1khz), 'r'], [v.write(r.rms), 'r'], [bar(i, r.rms / most * 100), '']]))
    }}
  }

  const signals = () => {
    const t = table([{text: 'signal'}, {text: '−3 dB', class: 'r'}, {text: 'peak', class: 'r'}, {text: 'at', class: 'r'}, {text: 'error', class: 'r'}, {text: 'phase', class: 'r'}], 'Signals over frequency')
    const cable = blank('capacitance of every cable', text => say({do: 'cable', text}))
    const at = blank('frequency for crosstalk', text => say({do: 'frequency', text}))
    const cross = el('span')
    const own = el('p', {class: 'soft', text: 'Error and phase at the signal’s own frequency, against DC.'})
    return {node: el('div', {}, t.node, own,
      el('p', {class: 'heads'}, el('label', {}, 'a cable of ', cable.node, ' on every input')),
      el('p', {class: 'heads'}, el('label', {}, 'crosstalk at ', at.node), cross)), update(s) {
      const m = s.more
      cable.set(s.cable ? engineering(s.cable, 'F') : `0${THIN}F`)
      at.set(engineering(s.frequency, 'Hz'))
      const [size, to, from] = m.crosstalk
      setText(cross, size > 0 ? `worst: ${from} leaves ${engineering(size, 'V')} a volt on ${to}'s terminals (${fixed(20 * Math.log10(size), 0)}${THIN}dB)` : 'none: no source has a resistance')
      const f = column(m.signals.map(r => r.bandwidth_3db), 'Hz'), q = column(m.at.map(x => x.frequency), 'Hz', {most: 1})
      const a = column(m.at.map(x => x.amplitude_error * 100), '%', {least: 3}), p = column(m.at.map(x => x.phase), '°', {least: 2})
      const c = m.cabled ? column(m.cabled.bandwidths, 'Hz') : null
      t.node.classList.toggle('cabled', !!c)
      t.heads(['signal', f.head(`−3${THIN}dB`), 'peak,\u00a0dB', q.head('at'), 'error,\u00a0%', 'phase,\u00a0°', ...(c ? [c.head('with cables')] : [])])
      t.set(m.signals.map((r, i) => {
        const x = m.at[i], moves = x.frequency > 0
        return [r.name, r.bandwidth_3db === null ? none('no end') : [f.write(r.bandwidth_3db), 'r'], [fixed(m.peaking[i], 2), 'r'],
          [moves ? q.write(x.frequency) : 'DC', 'r'], [moves ? a.write(x.amplitude_error * 100) : '–', 'r'], [moves ? p.write(x.phase) : '–', 'r'],
          ...(c ? [m.cabled.bandwidths[i] === null ? none('no end') : [c.write(m.cabled.bandwidths[i]), 'r']] : [])]
      }))
    }}
  }

  const loop = () => {
    const t = table([{text: ''}, {text: 'noise gain', class: 'r'}, {text: 'crosses at', class: 'r'}, {text: 'phase margin', class: 'r'}, {text: 'gain margin', class: 'r'}], 'Loops')
    const head = el('h3', {text: 'Cures for less than 60°'}), c = table([{text: 'part'}, {text: 'value', class: 'r'}, {text: 'margin then', class: 'r'}, {text: 'bandwidth then (now)', class: 'r'}, {text: ''}], 'Cures')
    const word = el('p', {class: 'soft'})
    const fits = new Map()
    return {node: el('div', {}, t.node, head, c.node, word), update(s) {
      const m = s.more
      t.heads(['', 'noise gain', 'crosses at', 'phase margin', 'gain margin', ...(m.cabled ? ['margin with cables'] : [])])
      t.set(m.cells.map((q, k) => [m.cells.length > 1 ? `cell ${k + 1}` : 'loop', [engineering(q.noise_gain, '', 4).trimEnd(), 'r'], q.crossover === null ? none('never') : [engineering(q.crossover, 'Hz'), 'r'],
        q.phase_margin === null ? none('–') : [`${fixed(q.phase_margin, 1)}°`, q.phase_margin < 45 ? 'r bad' : 'r'], q.gain_margin_db === null ? none('no end') : [`${fixed(q.gain_margin_db, 1)}${THIN}dB`, q.gain_margin_db < 0 ? 'r bad' : 'r'],
        ...(m.cabled ? [m.cabled.phase_margins[k] === null ? none('–') : [`${fixed(m.cabled.phase_margins[k], 1)}°`, m.cabled.phase_margins[k] < 45 ? 'r bad' : 'r']] : [])]))
      c.node.hidden = !m.cures?.length
      setText(word, m.cures === null ? 'looking for parts…' : m.cures.length ? 'The smallest part that reaches 60° (or 52°, or 45°), or the two that do together, and the bandwidth it costs. The resistor sits between the output and its load, the feedback before it.' : 'Nothing to cure, or these parts do not do it: smaller resistors, or another op amp.')
      c.set((m.cures ?? []).map(q => {
        const cap = q.kind === 'feedback capacitor', id = `${q.cell}:${q.value}`
        if (cap && !fits.has(id)) fits.set(id, el('button', {class: 'act', text: 'fit it', onclick: () => say({do: 'fit', cell: q.cell, value: q.value})}))
        const band = q.bandwidth === null ? '–' : `${engineering(q.bandwidth, 'Hz')}${q.bandwidth_before === null ? '' : ` (${engineering(q.bandwidth_before, 'Hz')})`}`
        const where = m.cells.length > 1 ? `, cell ${q.cell + 1}` : ''
        const both = q.resistor > 0
        return [`${both ? 'feedback capacitor and isolating resistor' : q.kind}${where}${q.gain_loss ? `; costs ${percent(q.gain_loss, 2)} of gain` : ''}`, [both ? `${engineering(q.value, 'F', 2)}, ${engineering(q.resistor, 'Ω', 2)}` : engineering(q.value, cap ? 'F' : 'Ω'), 'r'], [`${fixed(q.phase_margin, 0)}°`, 'r'], [band, 'r'], [cap ? fits.get(id) : '', '']]
      }))
    }}
  }

  const waves = () => {
    const rows = new Map()
    const t = table([{text: 'signal'}, {text: 'wave'}, {text: 'middle,\u00a0V', class: 'r'}, {text: 'peak,\u00a0V', class: 'r'}, {text: 'frequency', class: 'r'}, {text: ''}], 'Waves on the signals')
    const row = name => {
      if (rows.has(name)) return rows.get(name)
      const select = el('select', {class: 'blank kind', 'aria-label': `wave of ${name}`, onchange: () => say({do: 'wave', name, figure: 'kind', kind: select.value})},
        ['dc', 'sine', 'square', 'triangle', 'ramp', 'csv'].map(k => el('option', {value: k, text: k === 'dc' ? 'as is' : k, hidden: k === 'csv'})))
        const figure = f => blank(`${f} of ${name}`, text => say({do: 'wave', name, figure: f, text}), 'wave')
      const file = el('input', {type: 'file', class: 'file', accept: '.csv,text/csv', 'aria-label': `CSV for ${name}`, onchange: async () => { if (file.files[0]) say({do: 'wave file', name, text: await file.files[0].text()}); file.value = '' }})
      const made = {select, offset: figure('offset'), amplitude: figure('amplitude'), frequency: figure('frequency'), file: el('label', {class: 'act'}, 'CSV', file)}
      rows.set(name, made)
      return made
    }
    return {node: el('div', {}, t.node, el('p', {class: 'soft', text: 'A CSV holds seconds and volts, straight lines between its points. Others stay where their sliders are.'})), update(s) {
      t.set(s.more.rows.map(([name, k, kind, offset, amplitude, frequency]) => {
        const r = row(name), still = kind === 'dc' || kind === 'csv'
        if (r.select.value !== kind && document.activeElement !== r.select) r.select.value = kind
        r.mark ??= el('span', {class: 'n'}, swatch(style(k)), ` ${name}`)
        r.offset.set(fixed(offset)); r.amplitude.set(fixed(amplitude)); r.frequency.set(engineering(frequency, 'Hz'))
        for (const f of [r.offset, r.amplitude, r.frequency]) f.node.hidden = still
        return [[r.mark, ''], [r.select, ''], [r.offset.node, 'r'], [r.amplitude.node, 'r'], [r.frequency.node, 'r'], [r.file, '']]
      }))
    }}
  }
  const makers = {noise, signals, loop, waves}

  function update(s) {
    const W = node.clientWidth
    if (!W) return
    const top = node.getBoundingClientRect().top + scrollY
    const H = Math.max(420, Math.min(820, innerHeight - top - 8))
    const wide = left.clientWidth, narrow = right.clientWidth
    const rest = H - [...left.querySelectorAll('.heads')].reduce((sum, h) => sum + h.offsetHeight, 4)
    gain.fit(wide, Math.round(rest * .66), {left: 46, bottom: 26, right: 16, top: 6})
    phase.fit(wide, Math.round(rest * .34), {left: 46, bottom: 26, right: 16, top: 6})
    const tall = Math.round(H * .4)
    scope.fit(narrow, tall, {left: 56, bottom: 26, right: 12, top: 6})
    kinds.set(s.kind); pages.set(s.page)
    setAttr(held, 'aria-pressed', s.held !== null ? 'true' : 'false')
    old.hidden = s.held === null
    setText(held, s.held !== null ? 'Let the held stage go' : 'Hold this stage')
    length.set(s.duration === null ? '' : engineering(s.duration, 's'))
    const q = s.scope
    if (s.problem || !q) setText(told, s.problem)
    else {
      const busy = [q.slewing > 0 ? `slews ${percent(q.slewing, 0)} of the time` : '', q.clipping > 0 ? `at a limit ${percent(q.clipping, 0)}` : '', q.complete ? '' : 'record cut short: too many changes to follow'].filter(Boolean).join(', ')
      const grey = s.held !== null ? ', held grey' : ''
      setText(caption, s.kind === 'step' ? `of ${q.size > 0 ? '+' : ''}${engineering(q.size, 'V')} on ${q.signal}; V, ${q.unit}; ideal dotted${grey}` : `V, ${q.unit}; ideal dotted${grey}`)
      const time = (band, t) => t === null ? `${band} not in this record` : `${band} in ${engineering(t, 's')}`
      const settling = () => `settles to ${[[`1${THIN}%`, '0.01'], [`0.1${THIN}%`, '0.001'], [`0.01${THIN}%`, '0.0001']].map(([band, k]) => time(band, q.settled[k])).join(', ')}`
      setText(told, q.unstable ? `unstable: it oscillates${busy ? `; ${busy}` : ''}. Gains, bandwidths and noise are those of the equations, not of a stage that works.`
        : s.kind !== 'step' ? busy || 'linear throughout'
          : q.at_limit ? 'the output is at its limit; there is no step to measure'
            : `${settling()}; overshoot ${percent(q.overshoot)}${q.rise === null ? '' : `, rise ${engineering(q.rise, 's')}`}${busy ? `; ${busy}` : ''}`)
    }
    built[s.page] ??= makers[s.page]()
    const now = built[s.page]
    if (page.firstChild !== now.node) page.replaceChildren(now.node)
    const height = `${Math.max(120, H - tall - [...right.children].filter(c => c.classList.contains('heads')).reduce((sum, h) => sum + h.offsetHeight, 6))}px`
    if (page.style.maxHeight !== height) page.style.maxHeight = height
    now.update(s)
  }

  return {update, heard(reply) { if (reply?.csv !== undefined) saveText(reply.csv, reply.name); if (reply?.said) sheet.note(reply.said) }}
}
