// The drawer: every figure of one thing, opened between the drawing and the crease. One is open at a time.

import {el, setAttr, setText} from './dom.js'
import {Blank} from './blanks.js'
import {fixed, signed} from './format.js'

let sheet, box
let open = null // {what, fill(state), blanks}

export function mount(theSheet) {
  sheet = theSheet
  box = document.getElementById('drawer')
  box.addEventListener('keydown', e => { if (e.key === 'Escape' && !e.defaultPrevented) close() })
}

export function openDrawer(what) {
  if (open?.what === what) { close(); return }
  close()
  const opener = document.activeElement
  const kind = what.startsWith('signal ') ? 'signal' : what
  const made = MAKERS[kind]?.(what)
  if (!made) return
  open = {what, opener, ...made}
  box.replaceChildren(
    el('div', {class: 'top'}, el('h2', {text: made.title}), ...(made.head ?? []), el('button', {class: 'act', text: 'Close', onclick: close})),
    made.body)
  box.hidden = false
  setAttr(box, 'aria-label', made.title)
  update(sheet.state)
  sheet.redraw()
  box.querySelector('input, select, button')?.focus()
}

function close() {
  if (!open) return
  for (const blank of open.blanks) blank.drop()
  const {opener} = open
  open = null
  box.hidden = true
  box.replaceChildren()
  sheet.redraw()
  if (opener?.isConnected) opener.focus()
}

export function update(state) {
  if (open && open.fill(state) === false) close()
}

// a signal that was renamed in its drawer keeps it open
export function heard() {}

// ---------------------------------------------------------------- what a drawer holds

function group(title, rows) {
  return el('section', {class: 'group'}, title ? el('h3', {text: title}) : null,
    el('dl', {}, ...rows.flatMap(([word, node, unit]) => [el('dt', {text: word}), el('dd', {}, node), el('dd', {class: 'u', text: unit ?? ''})])))
}

// blanks of one group of figures of the plate
function figures(groupName, list, blanks) {
  return list.map(([figure, word, unit]) => {
    const blank = new Blank(sheet, {
      field: `drawer ${groupName} ${figure}`, label: `${groupName.replace('_', ' ')}, ${word}`, unit,
      send: text => ({do: 'figure', group: groupName, figure, text}),
    })
    blanks.push(Object.assign(blank, {take: state => state.plate[groupName]?.[figure] ?? ''}))
    return [word, blank.node, unit]
  })
}

function act(blanks, {field, label, send, unit, take, cls = ''}) {
  const blank = Object.assign(new Blank(sheet, {field, label, send, unit, cls}), {take})
  blanks.push(blank)
  return blank.node
}

const fillAll = blanks => state => { for (const blank of blanks) blank.set(blank.take(state)) }

const MAKERS = {
  'op amp'() {
    const blanks = []
    const p = sheet.state.plate.op_amp
    const find = figure => state => state.plate.op_amp.groups.flatMap(g => g[1]).find(f => f[0] === figure)?.[3] ?? ''
    const body = el('div', {class: 'groups'}, ...p.groups.map(([title, list]) => group(title, list.map(([figure, word, unit]) => [word, act(blanks, {
      field: `drawer op_amp ${figure}`, label: `op amp, ${word}`, unit, take: find(figure),
      send: text => ({do: 'figure', group: 'op_amp', figure, text}),
    }), unit]))))
    const list = el('select', {class: 'blank', 'aria-label': 'Take an op amp from the list', onchange: () => { if (list.value) sheet.act({do: 'amplifier', op_amp: list.value}) }})
    const note = el('span', {class: 'soft'})
    return {
      title: 'Op amp', blanks, body, head: [list, note],
      fill(state) {
        const {name, classes, note: said} = state.plate.op_amp
        const key = JSON.stringify([name, classes])
        if (list.dataset.key !== key) {
          list.dataset.key = key
          const known = classes.some(c => c[1] === name)
          list.replaceChildren(...(known ? [] : [el('option', {value: '', text: name})]), ...classes.map(([id, title]) => el('option', {value: id, text: title})))
          list.value = known ? classes.find(c => c[1] === name)[0] : ''
        }
        setText(note, said ?? '')
        fillAll(blanks)(state)
      },
    }
  },
  resistors() {
    const blanks = []
    const series = el('select', {class: 'blank', 'aria-label': 'Series of preferred values', onchange: () => sheet.act({do: 'series', series: series.value})},
      ...sheet.state.plate.series.map(s => el('option', {value: s, text: s})))
    const body = el('div', {class: 'groups'},
      group('values', [['series', series, 'IEC 60063'], ...figures('resistor', [['least', 'least', 'Ω'], ['most', 'most', 'Ω']], blanks)]),
      group('limits', figures('resistor', [['tolerance', 'tolerance ±', '%'], ['temperature_coefficient', 'temperature coefficient ±', 'ppm/K'], ['power', 'rating at 70 °C', 'W']], blanks)))
    return {title: 'Resistors', blanks, body, fill(state) { if (series.value !== state.plate.resistor.series) series.value = state.plate.resistor.series; fillAll(blanks)(state) }}
  },
  surroundings() {
    const blanks = []
    const band = end => act(blanks, {
      field: `drawer band ${end}`, label: end ? 'noise band, to' : 'noise band, from', unit: 'Hz', take: state => state.plate.band[end], send: text => ({do: 'band', end, text}),
    })
    const stray = act(blanks, {field: 'drawer stray', label: 'stray capacitance at each inverting node', unit: 'F', take: state => state.plate.stray, send: text => ({do: 'stray', text})})
    const body = el('div', {class: 'groups'},
      group('asked of the output', figures('target', [['low', 'window, from', 'V'], ['high', 'to', 'V'], ['accuracy', 'accuracy ±', 'V'], ['noise', 'noise, at most', 'V RMS'], ['bandwidth', 'bandwidth', 'Hz']], blanks)),
      group('rails', figures('supply', [['high', '+ rail', 'V'], ['low', '− rail', 'V'], ['tolerance', 'tolerance ±', '%']], blanks)),
      group('reference', figures('reference', [['voltage', 'voltage', 'V'], ['tolerance', 'tolerance ±', '%'], ['source_resistance', 'source resistance', 'Ω']], blanks)),
      group('ambient', figures('ambient', [['low', 'lowest', '°C'], ['nominal', 'nominal', '°C'], ['high', 'highest', '°C']], blanks)),
      group('load', figures('load', [['resistance', 'resistance', 'Ω'], ['capacitance', 'capacitance', 'F']], blanks)),
      group('board and noise', [['stray capacitance', stray, 'F'], ['noise band, from', band(0), 'Hz'], ['to', band(1), 'Hz']]))
    return {title: 'Surroundings', blanks, body, fill: fillAll(blanks)}
  },
  reference() { return {...MAKERS.surroundings(), title: 'Reference and surroundings'} },
  signal(what) {
    const blanks = []
    let name = what.slice(7)
    const index = sheet.state.signals.order.indexOf(name)
    const row = state => state.signals.rows.find(r => r.name === name)
    const title = el('span')
    const figure = (id, word, unit) => [word, act(blanks, {
      field: `drawer signal ${id}`, label: `${name}, ${word}`, unit, take: state => id === 'value' ? fixed(row(state)?.value) : (row(state)?.figures?.[id] ?? '').replace('-', '\u2212'),
      send: text => ({do: 'signal', signal: name, figure: id, text}),
    }), unit]
    const nameBlank = act(blanks, {field: 'drawer name', label: 'name of the signal', cls: 'wide', take: () => name, send: text => ({do: 'name', signal: name, text})})
    const weight = act(blanks, {field: 'drawer weight', label: 'wanted weight', unit: 'V/V', take: state => (row(state)?.weight_text ?? '').replace('-', '\u2212'), send: text => ({do: 'weight', signal: name, text})})
    const out = el('section', {class: 'group cable-out'})
    const body = el('div', {class: 'groups'},
      el('section', {class: 'group'}, el('h3', {text: 'name'}), nameBlank),
      group('weight', [['wanted', weight, 'V/V']]),
      group('range', [figure('low', 'from', 'V'), figure('high', 'to', 'V'), figure('value', 'now', 'V')]),
      group('source', [figure('source_resistance', 'resistance', 'Ω'), figure('frequency', 'highest frequency', 'Hz')]),
      out)
    const remove = el('button', {class: 'act', text: 'Remove', onclick: () => sheet.act({do: 'remove', signal: name})})
    return {
      title: 'Signal', blanks, body, head: [title, remove],
      fill(state) {
        if (!state.signals.order.includes(name)) { // renamed, or gone
          const now = state.signals.order[index]
          if (now && blanks[0].good === name && blanks[0].sent === now) name = now
          else return false
        }
        setText(title, '')
        fillAll(blanks)(state)
        cableOut(out, state.cable_out?.name === name ? state.cable_out : null, state.signals.rows.filter(r => r.weight), row(state)?.out)
      },
    }
  },
}

// what happens to the others when this cable is pulled, and when its source dies
function cableOut(node, found, rows, isOut) {
  const key = JSON.stringify([found, isOut])
  if (node.dataset.key === key) return
  node.dataset.key = key
  if (!found) { node.replaceChildren(); return }
  const line = ([name, ...values], write) => el('tr', {}, el('th', {scope: 'row', text: name}),
    ...values.map((v, i) => el('td', {class: `r${i && Math.abs(v - values[0]) > 1e-4 * Math.max(1e-9, Math.abs(values[0])) ? ' moved' : ''}`, text: write(v)})))
  if (isOut) { // nothing to foresee: what is wanted beside what is left of it
    const wanted = new Map(rows.map(r => [r.name, r.weight]))
    node.replaceChildren(el('h3', {text: 'this cable is out'}), el('table', {},
      el('thead', {}, el('tr', {}, el('th'), el('th', {class: 'r', text: 'wanted'}), el('th', {class: 'r', text: 'now'}))),
      el('tbody', {}, ...found.weights.map(([name, now]) => line([name, wanted.get(name) ?? 0, now], v => signed(v, 4))))))
    return
  }
  node.replaceChildren(el('h3', {text: 'if this cable goes'}), el('table', {},
    el('thead', {}, el('tr', {}, el('th'), el('th', {class: 'r', text: 'now'}), el('th', {class: 'r', text: 'pulled out'}), el('th', {class: 'r', text: 'source dead, 0\u202fV'}))),
    el('tbody', {}, ...found.weights.map(w => line(w, v => signed(v, 4))), line(['offset, V', ...found.offset], v => signed(v)), line(['noise gain', ...found.noise_gain], v => fixed(v)))))
}
