// Bench: the run step by step, readings with their verdict at once, weights fitted, suspects, the next reading, a capture.

import {Blank} from '../blanks.js'
import {el, setAttr, setClass, setText, svg} from '../dom.js'
import {THIN, engineering, fixed, signed} from '../format.js'
import {style, swatch} from '../marks.js'
import {mountCapture} from './bench_capture.js'
import {saveText, table} from './figures.js'

export const styles = true

const shownIn = (x, unit, decimals = 3) => unit === 'V' ? `${fixed(x, decimals)}${THIN}V` : engineering(x, unit, 4)
const volts = x => { const text = fixed(x, 3); return text.includes('.') ? text.replace(/\.?0+$/, '') : text }
const resistor = x => x === null ? '' : engineering(x, '', 3).replace(THIN, '').replace(/(\.\d*?)0+(?=\D|$)/, '$1').replace(/\.(?=\D|$)/, '') + (x < 1e3 ? 'R' : '')

// How far off, in words: "out, low by 38 mV".
function result(row) {
  if (row.value === null) return ''
  if (row.low === null || row.word === '') return ''
  if (row.word === 'in') return 'in'
  const low = row.value < row.low
  return `out, ${low ? 'low' : 'high'} by ${engineering(Math.abs(row.value - row.expect), row.unit, 2)}`
}

// Deviation on its own short ruler: the grey band is what is allowed, the bar is what was read.
function deviation() {
  const W = 92, band = svg('rect', {x: W * .375, y: 3, width: W * .25, height: 14, fill: 'var(--raised)'})
  const bar = svg('path', {'stroke-width': 4, fill: 'none'}), tip = svg('path', {'stroke-width': 2.5, fill: 'none'})
  const node = svg('svg', {width: W, height: 20, role: 'img'}, band, svg('path', {d: `M${W / 2} 1v18`, stroke: 'var(--line)'}), bar, tip)
  return {node, set(row) {
    const on = row.value !== null && row.low !== null
    for (const n of [bar, tip]) n.style.display = on ? '' : 'none'
    setAttr(node, 'aria-label', on ? result(row) : 'not read yet')
    if (!on) return
    const half = Math.max(row.high - row.expect, row.expect - row.low, 1e-12)
    const x = (W / 2 + Math.max(-1, Math.min(1, (row.value - row.expect) / (4 * half))) * (W / 2 - 3)).toFixed(1)
    const colour = row.word === 'out' ? 'var(--accent)' : 'var(--ink)'
    setAttr(bar, 'd', `M${W / 2} 10H${x}`); setAttr(tip, 'd', `M${x} 3v14`)
    setAttr(bar, 'stroke', colour); setAttr(tip, 'stroke', colour)
  }}
}

// A fitted weight with its uncertainty inside, or outside, the allowed band.
function position() {
  const W = 104, box = svg('rect', {y: 2, height: 14, x: W / 2 - (W / 2 - 8) / 5, width: (W / 2 - 8) / 2.5, fill: 'var(--raised)', stroke: 'var(--line)'})
  const whisker = svg('path', {fill: 'none', 'stroke-width': 1.6}), dot = svg('circle', {cy: 9, r: 3.4})
  const node = svg('svg', {width: W, height: 18, role: 'img'}, box, whisker, dot)
  return {node, set(w) {
    const on = w.value !== null
    for (const n of [whisker, dot]) n.style.display = on ? '' : 'none'
    setAttr(node, 'aria-label', on ? `${w.word}, allowed ${fixed(w.low, 4)} to ${fixed(w.high, 4)}` : 'not determined')
    if (!on) return
    const half = Math.max((w.high - w.low) / 2, 1e-12), d = (w.value - (w.high + w.low) / 2) / half
    const place = v => W / 2 + Math.max(-1, Math.min(1, v / 5)) * (W / 2 - 8)
    const x = place(d), reach = Math.max(3, Math.min(W / 2, (w.wide ?? 0) / half / 5 * (W / 2 - 8)))
    const colour = w.word === 'out' ? 'var(--accent)' : 'var(--ink)'
    setAttr(whisker, 'd', `M${x - reach} 9H${x + reach}M${x - reach} 5v8M${x + reach} 5v8`); setAttr(whisker, 'stroke', colour)
    setAttr(dot, 'cx', x); setAttr(dot, 'fill', colour)
  }}
}

export function mount(node, sheet) {
  node.className = 'bench'
  let shown = null, wanted = null
  const send = (message, field) => sheet.act({do: 'fold', fold: 'bench', message, ...(field ? {field} : {})})

  // ---------------------------------------------------------------- the step at hand

  const count = el('div', {class: 'soft'}), ask = el('div', {class: 'ask'}), setup = el('div', {class: 'soft'}), expect = el('div', {class: 'exp'})
  const result_ = el('div', {class: 'res', role: 'status'}), unit = el('span')
  const large = new Blank(sheet, {field: 'bench large', label: 'Reading', inputmode: 'text', send: text => ({do: 'fold', fold: 'bench', message: {do: 'reading', row: shown?.now ?? 0, text}})})
  large.node.addEventListener('keydown', e => { if (e.key === 'Enter' && !e.shiftKey && !large.refused) go(shown?.now + 1, true) })
  const before = el('button', {class: 'act', text: 'Step before', onclick: () => go(shown?.now - 1)})
  const after = el('button', {class: 'act', text: 'Next step', onclick: () => go(shown?.now + 1)})
  const caution = el('p', {class: 'caution', hidden: true}), miss = el('p', {class: 'miss'})
  node.append(el('div', {class: 'step'},
    el('div', {}, el('div', {class: 'turns'}, count, before, after), ask, setup, expect),
    el('div', {}, el('div', {class: 'read'}, large.node, unit), result_)), caution, miss)
  const go = (row, focus = false) => {
    if (!shown || row < 0 || row >= shown.rows.length) return
    if (focus) wanted = 'large'
    send({do: 'go', row})
  }

  // ---------------------------------------------------------------- the grid

  const head = el('tr'), body = el('tbody')
  const grid = el('div', {class: 'grid-box wide', tabindex: 0, role: 'region', 'aria-label': 'Readings'},
    el('table', {'aria-label': 'Run and readings'}, el('thead', {}, head), body))
  node.append(grid)
  const lines = []

  function line(i) {
    const blank = new Blank(sheet, {field: `bench ${i}`, label: `Reading ${i + 1}`, send: text => ({do: 'fold', fold: 'bench', message: {do: 'reading', row: i, text}})})
    blank.node.addEventListener('keydown', e => {
      const step = {Enter: e.shiftKey ? -1 : 1, ArrowDown: 1, ArrowUp: -1}[e.key]
      if (!step || blank.refused) return
      e.preventDefault()
      lines[i + step]?.blank.node.focus()
    })
    blank.node.addEventListener('focus', () => { if (shown?.now !== i) send({do: 'go', row: i}) })
    blank.node.addEventListener('paste', e => {
      const text = e.clipboardData.getData('text')
      if (!/[\n\t]/.test(text.trim())) return
      e.preventDefault()
      send({do: 'paste', row: i, text}, `bench ${i}`)
    })
    return {blank, bar: deviation(), row: el('tr'), cells: [], shape: ''}
  }

  function fillGrid(s) {
    const heads = ['', ...s.names, 'expect', 'limits', 'read', 'deviation', '']
    if (head.dataset.of !== heads.join('\u0000')) {
      head.dataset.of = heads.join('\u0000')
      head.replaceChildren(...heads.map((h, k) => {
        const signal = k > 0 && k <= s.names.length
        const th = el('th', {scope: 'col', class: signal ? 'r src' : k > s.names.length && k < heads.length - 2 ? 'r' : ''})
        if (signal) setAttr(th, 'title', `V to put on ${h}`)
        if (signal) th.append(swatch(style(s.styles[k - 1])), ' ', el('span', {text: h})); else th.textContent = h || ''
        if (!h) th.append(el('span', {class: 'vh', text: k ? 'verdict' : 'number'}))
        return th
      }))
    }
    while (lines.length < s.rows.length) { const l = line(lines.length); lines.push(l); body.append(l.row) }
    while (lines.length > s.rows.length) { const l = lines.pop(); l.blank.drop(); l.row.remove() }
    s.rows.forEach((row, i) => {
      const l = lines[i], isOutput = row.apply && row.probe === 'output' && row.unit === 'V', shape = isOutput ? 'volts' : 'what'
      if (l.shape !== shape + s.names.length) {
        l.shape = shape + s.names.length
        const td = cls => el('td', {class: cls})
        l.cells = [td('r'), ...(isOutput ? s.names.map(() => td('r')) : [el('td', {class: 'what', colspan: s.names.length})]), td('r'), td('r soft'), td('r'), td('bar-cell'), td('')]
        l.cells.at(-3).append(l.blank.node); l.cells.at(-2).append(l.bar.node)
        l.row.replaceChildren(...l.cells)
      }
      const c = l.cells
      setText(c[0], String(i + 1))
      if (isOutput) row.apply.forEach((v, k) => { setText(c[k + 1], volts(v)); setClass(c[k + 1], 'soft', !v) })
      else setText(c[1], row.title)
      setAttr(l.row, 'title', isOutput ? row.title : `${row.title}: ${row.probe}`)
      const n = c.length
      setText(c[n - 5], shownIn(row.expect, row.unit))
      setText(c[n - 4], '±' + (row.unit === 'V' ? shownIn((row.high - row.low) / 2, 'V') : engineering((row.high - row.low) / 2, row.unit, 2)))
      l.blank.set(row.text); l.bar.set(row)
      setText(c[n - 1], row.word); setClass(c[n - 1], 'bad', row.word === 'out')
      setClass(l.row, 'now', i === s.now); setClass(l.row, 'todo', row.value === null)
      setAttr(l.row, 'aria-current', i === s.now ? 'step' : null)
    })
    const now = lines[s.now]?.row
    if (now && grid.clientHeight && grid.dataset.now !== String(s.now)) {
      grid.dataset.now = String(s.now)
      const top = now.offsetTop, bottom = top + now.offsetHeight
      if (top - 30 < grid.scrollTop) grid.scrollTop = top - 30
      else if (bottom > grid.scrollTop + grid.clientHeight) grid.scrollTop = bottom - grid.clientHeight + 4
    }
  }

  // ---------------------------------------------------------------- acts under the grid

  const file = el('input', {type: 'file', accept: '.csv,.txt,text/csv', class: 'vh', tabindex: -1, 'aria-label': 'Readings file', onchange: async () => {
    const given = file.files[0]
    file.value = ''
    if (!given) return
    if (given.size > 4e6) { sheet.note(`“${given.name}” has ${Math.round(given.size / 1e6)} MB; readings have at most 4. A waveform record is opened under Capture.`, null, {bad: true}); return }
    send({do: 'file', text: await given.text()})
  }})
  const act = (text, onclick, more = {}) => el('button', {class: 'act', text, onclick, ...more})
  const meter = new Blank(sheet, {field: 'bench meter', label: 'Meter, accuracy as its data sheet states it', send: text => ({do: 'fold', fold: 'bench', message: {do: 'meter', text}})})
  const kept = el('span', {class: 'soft', role: 'status'})
  const keep = act('Keep in the log', () => send({do: 'keep'})), clear = act('Clear', () => send({do: 'clear'})), back = act('Bring back', () => send({do: 'bring back'}))
  node.append(el('div', {class: 'line'}, el('span', {class: 'meter'}, el('label', {}, el('span', {class: 'soft', text: 'meter ± '}), meter.node)),
    act('Open readings (CSV)', () => file.click()), file, act('Take as CSV', () => send({do: 'csv'})), keep, clear, back, kept))

  // ---------------------------------------------------------------- what follows

  const fits = table([{text: ''}, {text: 'fitted', class: 'r'}, {text: `±2u`, class: 'r'}, {text: 'allowed'}, {text: 'limits'}, {text: ''}], 'Fitted weights')
  const fitNote = el('p', {class: 'fit-note'}), marks = [], limits = []
  const suspects = table([{text: 'probability', class: 'r'}, {text: 'suspect'}, {text: 'about', class: 'r'}], 'Suspects')
  const odd = el('p', {class: 'note bad', hidden: true}), told = el('p', {class: 'note'}), apart = el('p', {class: 'note'}), next = el('p', {class: 'note'}), notes = el('div', {})
  const weighing = el('span', {class: 'soft', role: 'status'})
  const take = act('Take it up', () => { wanted = 'large'; send({do: 'next'}) })
  const home = el('details', {hidden: true}, el('summary', {text: 'Bring it home'}))
  const homeTable = table([{text: 'weight'}, {text: 'is', class: 'r'}, {text: 'wanted', class: 'r'}, {text: 'select on test'}, {text: 'or a trimmer'}], 'What brings it home')
  const soft = el('p', {class: 'note'}), cure = el('p', {class: 'note'})
  home.append(cure, homeTable.node, soft, el('p', {class: 'line'}, act('Take the board as built', () => send({do: 'as built'})),
    el('span', {class: 'soft', text: 'resistor values as the readings have them, onto the sheet; one undo step'})))
  node.append(el('div', {class: 'two'},
    el('div', {}, el('h3', {text: 'Weights the board has'}), el('div', {class: 'fits'}, fits.node), fitNote, home),
    el('div', {}, el('h3', {}, 'Suspects, likeliest first ', weighing), odd, el('div', {class: 'suspects'}, suspects.node), told, apart, next, notes)))
  const capture = mountCapture(sheet, send)
  node.append(capture.node)

  // A person's own limits of a weight; empty, it shows what the parts allow.
  function limitOf(i) {
    limits[i] ??= new Blank(sheet, {field: `bench limits ${i}`, label: '', send: text => ({do: 'fold', fold: 'bench', message: {do: 'limit', name: shown.fit[i].name, text}})})
    return limits[i]
  }

  function fillFit(s) {
    fits.set(s.fit.map((w, i) => {
      marks[i] ??= position(); marks[i].set(w)
      const offset = i === s.fit.length - 1, d = 4, limit = limitOf(i)
      limit.set(w.stated)
      setAttr(limit.node, 'placeholder', `${fixed(w.low, d)} to ${fixed(w.high, d)}`)
      setAttr(limit.node, 'aria-label', `Limits of ${w.name}; empty: what the parts allow`)
      setAttr(limit.node, 'title', 'Your own limits, as 0.24 to 0.26 or ±2 %; empty: what the parts allow')
      const more = w.word === 'undecided' && w.more ? `undecided, ${w.more} more tell` : w.known ? w.word : s.taken ? 'not determined' : ''
      return [[w.name, ''], [w.value === null ? '–' : offset ? `${fixed(w.value, d)}${THIN}V` : signed(w.value, d), 'r'], [w.wide === null ? '' : fixed(w.wide, d), 'r soft'],
        [marks[i].node, ''], [limit.node, 'limits'], [more, w.word === 'out' ? 'bad' : '']]
    }))
    const out = s.left_out.length ? ` Reading ${s.left_out.slice(0, 6).map(x => x.line).join(', ')} ${s.left_out.length > 1 ? 'are' : 'is'} near clipping and kept out.` : s.taken ? ' No reading was near clipping.' : ''
    const c = s.chi
    setAttr(fitNote, 'title', c.value === null || !s.taken || !c.freedom ? null : 'χ²: the squares of what each reading is off the fitted weights, in its own uncertainty, added up. p: how often sound readings would be off by as much or more')
    setText(fitNote, c.value === null || !s.taken ? (s.taken ? out.trim() : 'No readings of the output yet.')
      : c.freedom === 0 ? `As many readings as unknowns; one more tests the fit.${out}`
        : `χ² = ${fixed(c.value, 1)} on ${c.freedom} ${c.freedom === 1 ? 'degree' : 'degrees'} of freedom, p = ${c.p < .001 ? 'under 0.001' : fixed(c.p, c.p < .1 ? 3 : 2)}.${out}`)
    const mend = s.taken && s.told?.cure
    home.hidden = !s.home.length && !mend
    if (home.hidden) return
    setText(cure, mend ? mend.says : ''); cure.hidden = !mend; homeTable.node.hidden = !s.home.length
    homeTable.set(s.home.map(h => {
      const o = h.name === 'offset', say = x => o ? `${fixed(x, 4)}${THIN}V` : signed(x, 4)
      const r = h.resistor, t = h.trimmer
      return [[h.name, ''], [say(h.measured), 'r'], [say(h.wanted), 'r'],
        [r && r.value ? `${resistor(r.value)} in ${r.how}: ${say(r.weight)}` : h.why_not || 'none helps', ''],
        [t ? `${t.fixed ? resistor(t.fixed) + ' and ' : ''}${resistor(t.trimmer)}, turn ${say(h.turn)}` : '', '']]
    }))
    setText(soft, s.software.length ? 'In software: add ' + s.software.map(c => `${signed(c.value, 5)} (u ${fixed(c.standard_uncertainty, 5)})${c.name === 'offset' ? `${THIN}V` : ` × ${c.name}`}`).join(', ') + '.' : '')
  }

  function fillSuspects(s) {
    const t = s.told
    setText(weighing, s.busy ? 'weighing…' : '')
    if (!t) { suspects.set([]); return }
    const list = s.taken ? t.suspects.filter((x, i) => i < 1 || x.probability >= .005).slice(0, 6) : t.suspects.slice(0, 1)
    const rest = 1 - list.reduce((sum, x) => sum + x.probability, 0)
    suspects.set([...list.map(x => [[fixed(x.probability, 2), 'r'], [x.fault === 'none' ? 'nothing wrong' : [x.part, x.fault].filter(Boolean).join(', '), 'who'], [x.estimate === null ? '' : x.unit === 'V' ? `${fixed(x.estimate)}${THIN}V` : resistor(x.estimate), 'r']]),
      ...(rest >= .005 ? [[[fixed(rest, 2), 'r'], ['anything else', 'who soft'], ['', '']]] : [])])
    list.forEach((x, i) => { setClass(suspects.body.rows[i], 'lead', i === 0); setClass(suspects.body.rows[i], 'joined', x.group === list[i + 1]?.group) })
    const first = list[0]
    odd.hidden = !t.odd; setText(odd, t.odd)
    setText(told, first ? first.explain : '')
    const sound = first?.fault === 'none' && first.probability >= .9
    setText(apart, t.tell && s.taken && !sound ? `These readings cannot part the first ${list.filter(x => x.group === 1).length + t.more}. ${t.tell}` : '')
    const live = Object.entries(t.next).map(([n, v]) => `${n} ${volts(v)}`).join(', ')
    const spent = s.taken && t.bits < .01, parted = t.tell && !sound
    next.replaceChildren(el('b', {text: 'Next reading. '}), spent
      ? parted ? 'No reading of the output tells more; the measurement above does.' : 'Nothing more to tell.'
      : `${live}${THIN}V, worth ${fixed(t.bits, 2)} bit. `, spent ? '' : take)
    setAttr(next, 'title', spent ? null : 'What the reading is likely to tell: 1 bit halves the suspects that are left')
    notes.replaceChildren(...t.notes.map(text => el('p', {class: 'fit-note', text})))
  }

  function update(s) {
    shown = s
    if (!node.clientWidth) return
    const row = s.rows[s.now]
    setText(count, `step ${s.now + 1} of ${s.rows.length}`)
    before.disabled = s.now === 0; after.disabled = s.now === s.rows.length - 1
    setText(ask, row.title)
    const live = row.apply ? s.names.map((n, k) => [n, row.apply[k]]).filter(([, v]) => v) : []
    setText(setup, live.length ? `${row.setup}: ${live.map(([n, v]) => `${n} ${volts(v)}${THIN}V`).join(', ')}` : row.setup)
    expect.replaceChildren('probe ', el('b', {text: row.probe}), ', expect ', el('b', {text: shownIn(row.expect, row.unit)}), `, from ${shownIn(row.low, row.unit)} to ${shownIn(row.high, row.unit)}`)
    setText(unit, row.unit)
    setAttr(large.node, 'aria-label', `Reading, ${row.title}, in ${row.unit}`)
    if (large.node.dataset.row !== String(s.now)) { large.node.dataset.row = String(s.now); large.restore() }
    large.set(row.text)
    if (document.activeElement !== large.node && !large.refused && large.node.value !== row.text) large.node.value = row.text
    setText(result_, result(row)); setClass(result_, 'bad', row.word === 'out')
    caution.hidden = !row.caution; setText(caution, row.caution ? `Caution. ${row.caution}` : '')
    setText(miss, row.word === 'out' ? row.miss : row.why)
    const height = Math.max(150, Math.min(s.rows.length * 29 + 32, innerHeight - (innerHeight < 900 ? 555 : 430))) // on a low screen the suspects come first
    grid.style.setProperty('--grid', `${height}px`)
    fillGrid(s); fillFit(s); fillSuspects(s)
    meter.set(s.meter)
    const many = s.waiting > 1
    setText(kept, s.waiting ? `${s.waiting} ${many ? 'readings belong' : 'reading belongs'} to steps that this stage does not have; ${many ? 'they are' : 'it is'} kept.` : s.kept)
    keep.hidden = !s.log; keep.disabled = !s.taken; clear.disabled = !s.taken; back.hidden = !s.gone
    capture.update(s)
    if (wanted === 'large') { wanted = null; large.node.focus(); large.node.select() }
  }

  return {update, heard(reply) {
    if (reply?.csv !== undefined) saveText(reply.csv, reply.name)
    capture.heard(reply)
  }}
}
