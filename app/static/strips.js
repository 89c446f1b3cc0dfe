// The strips: a row a signal; its wire runs on into the drawing at the same height.

import {helpFor} from './help.js'
import {el, svg, setAttr, setClass, setText, keyed, px, size, forgetSizes} from './dom.js'
import {Blank} from './blanks.js'
import {THIN, engineering, fixed, signed, volts, weight} from './format.js'
import {style, swatch, markerAttributes} from './marks.js'
import {openDrawer} from './drawer.js'

const STEPS = 500
let sheet, work, sum, box, list, foot, follow, mini
let reordering = false
const rows = new Map()
const minis = new Map()
let pulled = null // the slider under the pointer

export function mount(theSheet) {
  sheet = theSheet
  work = document.querySelector('.work')
  sum = document.getElementById('sum')
  box = document.getElementById('strips')
  mini = document.getElementById('mini')
  list = el('div', {class: 'list'})
  follow = el('select', {class: 'blank', 'aria-label': 'Resistors follow a wanted weight', title: 'When a wanted weight changes, its resistors take the nearest value of the series, the exact value, or stay as fitted', onchange: () => sheet.act({do: 'follow', follow: follow.value})},
    el('option', {value: 'nearest'}), el('option', {value: 'exact', text: 'exact values'}), el('option', {value: 'kept', text: 'as fitted'}))
  const reorder = el('button', {class: 'act', text: 'Reorder', 'aria-pressed': 'false', onclick: () => {
    reordering = !reordering
    setAttr(reorder, 'aria-pressed', String(reordering))
    setText(reorder, reordering ? 'Done' : 'Reorder')
    setClass(work, 'reordering', reordering)
  }})
  foot = el('div', {class: 'foot'}, el('button', {class: 'act', text: 'Add a signal', onclick: () => sheet.act({do: 'add'})}), reorder, el('label', {class: 'follow'}, el('span', {class: 'soft', text: 'resistors '}), follow))
  box.append(
    el('div', {class: 'cols', 'aria-hidden': 'true'}, el('span', {text: 'signal'}), el('span', {text: 'value, over its range'}), el('span'),
      el('span', {class: 'r two-lines'}, 'wanted', el('br'), el('em', {text: 'made'})), el('span', {class: 'r two-lines'}, 'share of', el('br'), 'the output'), el('span')),
    list, foot)
  document.addEventListener('pointerup', () => letGo())
  document.addEventListener('pointercancel', () => letGo())
}

function letGo() {
  if (!pulled) return
  pulled = null
  sheet.act({do: 'let_go'})
}

// under a moving hand everything follows at once; only what a single act changed glides to its place
let still = 0
function moving() {
  document.body.classList.add('moving')
  clearTimeout(still)
  still = setTimeout(() => document.body.classList.remove('moving'), 400)
}

// A live slider: the arrows move it 1/500 of its range, with Shift ten times that, Home and End to the ends.
function slider(name, tell) {
  const input = el('input', {type: 'range', 'aria-label': `${name}, volts`, 'data-v': name})
  let rest = 0
  const send = () => {
    moving()
    tell?.(input.valueAsNumber)
    sheet.act({do: 'value', signal: name, value: input.valueAsNumber}, `value ${name}`)
  }
  input.addEventListener('input', send)
  input.addEventListener('pointerdown', () => { pulled = name })
  input.addEventListener('keydown', e => {
    const way = {ArrowRight: 1, ArrowUp: 1, ArrowLeft: -1, ArrowDown: -1}[e.key]
    if (way) {
      e.preventDefault()
      const step = (Number(input.max) - Number(input.min)) / STEPS * (e.shiftKey ? 10 : 1)
      input.value = Math.min(Number(input.max), Math.max(Number(input.min), input.valueAsNumber + way * step))
      send()
    }
    if (way || e.key === 'Home' || e.key === 'End') {
      clearTimeout(rest)
      rest = setTimeout(() => sheet.act({do: 'let_go'}), 600)
    }
  })
  const show = r => {
    setAttr(input, 'min', r.low)
    setAttr(input, 'max', r.high)
    setAttr(input, 'step', (r.high - r.low) / STEPS / 10 || 'any')
    input.disabled = r.high <= r.low
    setAttr(input, 'aria-valuetext', `${fixed(r.value)} volts`)
    const ahead = pulled === name || (document.activeElement === input && sheet.line.busy && sheet.line.queue.some(q => q.newest === `value ${name}`))
    if (!ahead && input.valueAsNumber !== r.value) input.value = r.value
  }
  return {input, show}
}

function makeRow(key, r) {
  const name = r.name
  const s = style(r.reference ? null : r.style)
  const value = new Blank(sheet, {
    field: `value ${key}`, label: r.reference ? 'reference voltage' : `${name}, typed value`, unit: 'V',
    send: text => r.reference ? {do: 'figure', group: 'reference', figure: 'voltage', text} : {do: 'signal', signal: name, figure: 'value', text},
  })
  const want = new Blank(sheet, {
    field: `weight ${key}`, label: r.reference ? 'wanted offset, volts' : `${name}, wanted weight`, cls: 'want', // an offset is shown with its unit
    send: text => r.reference ? {do: 'offset', text} : {do: 'weight', signal: name, text},
  })
  const made = el('span', {class: 'made'})
  const bar = svg('rect', {height: 8, fill: s.colour}), zero = svg('path', {class: 'axis'}), share = svg('text', {'text-anchor': 'end'})
  const shares = el('span', {class: 'sh'}, svg('svg', {'aria-hidden': 'true'}, zero, bar, share))
  const title = el('button', {class: 'name', onclick: () => openDrawer(r.reference ? 'reference' : `signal ${name}`)}, el('b', {text: name}), el('span', {class: 'rs soft'}))
  const nm = el('span', {class: 'nm'}, swatch(s), title)
  const node = el('div', {class: 'sig', 'data-s': name, style: `--c:${s.colour}`, role: 'group', 'aria-label': name}, nm)
  const plugDrawing = svg('svg', {'aria-hidden': 'true'}, svg('path', {class: 'wire'}), svg('path', {stroke: s.colour, fill: 'none'}), svg('circle', {cy: 0}), svg('path', {class: 'wire'}))
  const item = {node, value, want, made, bar, zero, share, shares, plugDrawing, s, title, drop() { value.drop(); want.drop() }}
  if (r.reference) {
    node.append(el('span', {class: 'soft n offset-word', text: 'makes the offset'}))
    item.plug = el('span', {class: 'plug'}, plugDrawing)
  } else {
    item.slide = slider(name, moved => { if (document.activeElement !== value.node) value.node.value = volts(moved) })
    const moves = el('span', {class: 'moves'},
      ...[['up', -1], ['down', 1]].map(([word, way]) => el('button', {class: 'act', text: word, 'aria-label': `${name} ${word}`, onclick: () => move(name, way)})),
      el('button', {class: 'act', text: 'remove', 'aria-label': `remove ${name}`, onclick: () => sheet.act({do: 'remove', signal: name})}))
    item.past = el('span', {class: 'past', role: 'status'})
    node.append(item.slide.input, moves, item.past)
    item.plug = el('button', {class: 'plug', onclick: () => sheet.act({do: 'plug', signal: name, out: !sheet.state.signals.rows.find(x => x.name === name).out})}, plugDrawing)
    node.addEventListener('focusin', () => { if (sheet.state.signals.on !== name) sheet.act({do: 'on', signal: name}) })
  }
  node.append(el('span', {class: 'val'}, value.node, el('span', {class: 'u', text: 'V'})), el('span', {class: 'wt'}, want.node, made), shares, item.plug)
  return item
}

// among the rows of its own node: the order the person gave is the order of all signals
function move(name, way) {
  const all = sheet.state.signals.rows.filter(r => !r.reference)
  const me = all.find(r => r.name === name)
  const group = all.filter(r => r.cell === me.cell && r.node === me.node)
  const other = group[group.indexOf(me) + way]
  if (!other) return
  const order = [...sheet.state.signals.order]
  const a = order.indexOf(name), b = order.indexOf(other.name)
  order[a] = other.name
  order[b] = name
  sheet.act({do: 'order', names: order})
}

// of another style it is another row
const keyOf = r => r.reference ? `reference ${r.cell}` : r.style ? `${r.name} ${r.style}` : r.name

export function update(state) {
  const shown = state.signals
  const n = shown.rows.length
  fit(n)
  writeSum(shown)
  setText(follow.options[0], `nearest ${shown.series}`)
  if (follow.value !== shown.follow) follow.value = shown.follow
  if (!size(box).width) { drawMini(shown); return }
  keyed(list, shown.rows.map(keyOf), key => {
    const r = shown.rows.find(x => keyOf(x) === key)
    return Object.assign(makeRow(key, r), {style: r.style})
  }, rows)
  const row = px('--row-now')
  const reach = Math.max(...shown.rows.map(r => Math.abs(r.share)), 1e-12)
  const first = rows.get(keyOf(shown.rows[0]))
  const W = size(first.shares).width, plugWidth = size(first.plug).width
  for (const r of shown.rows) drawRow(rows.get(keyOf(r)), r, shown, row, reach, W, plugWidth)
  drawMini(shown)
}

function drawRow(item, r, shown, row, reach, W, plugWidth) {
  const {node, s} = item
  setClass(node, 'on', r.name === shown.on)
  setClass(node, 'out', r.out)
  setAttr(node.querySelector('svg.swatch').parentNode, 'title', r.name)
  item.slide?.show(r)
  if (!(pulled === r.name)) item.value.set(volts(r.value))
  const beyond = !r.reference && (r.value < r.low || r.value > r.high)
  setClass(node, 'beyond', beyond)
  if (item.past) setText(item.past, beyond ? `past ${brief(r.low)} to ${brief(r.high)}${THIN}V` : '')
  setAttr(item.value.node, 'title', beyond ? `past its range, ${fixed(r.low)} to ${fixed(r.high)}${THIN}V: the corners and margins do not cover it` : helpFor(item.value.field))
  setText(item.title.lastChild, r.rs ? `${engineering(r.rs, 'Ω').replace(/\.0+(?=\u202f)/, '')}` : '')
  item.want.set(r.reference ? `${signed(shown.offset)}${THIN}V` : weightText(r))
  setText(item.made, r.out ? 'cable out' : r.reference ? `${volts(r.share, signed)}${THIN}V` : weight(r.made))
  if (W) {
    const zero = W * .24, room = W - zero - 2, x = r.share / reach * room * (r.share < 0 ? Math.min(1, zero / room * .95) : 1)
    setAttr(item.zero, 'd', `M${zero} 0V${row}`)
    setAttr(item.bar, 'x', Math.min(zero, zero + x)); setAttr(item.bar, 'y', row / 2 - 13); setAttr(item.bar, 'width', Math.max(1.5, Math.abs(x)))
    setAttr(item.share, 'x', W); setAttr(item.share, 'y', row / 2 + (row < 36 ? 11.5 : 13))
    setText(item.share, volts(r.share, signed))
  }
  const y = row / 2, at = plugWidth * .42
  const [wire, cord, pin, socket] = item.plugDrawing.children
  if (r.reference) {
    setAttr(wire, 'd', `M0 ${y}H${plugWidth}`)
    setAttr(pin, 'r', 0)
    return
  }
  setAttr(item.plug, 'aria-pressed', String(r.out))
  setAttr(item.plug, 'aria-label', r.out ? `plug the ${r.name} cable in` : `pull the ${r.name} cable out`)
  setAttr(item.plug, 'title', r.out ? 'plug the cable in' : 'pull the cable out')
  setAttr(wire, 'd', r.out ? '' : `M${at} ${y}H${plugWidth}`)
  setAttr(socket, 'd', r.out ? `M${plugWidth - 6} ${y - 7}q7 7 0 14` : '')
  setAttr(cord, 'd', `M0 ${y}H${r.out ? 4 : at}`); setAttr(cord, 'stroke-width', r.out ? 2.4 : 3)
  setAttr(pin, 'cx', r.out ? 8 : at); setAttr(pin, 'cy', y); setAttr(pin, 'r', r.out ? 4.6 : 5.5)
  setAttr(pin, 'fill', r.out ? 'var(--paper)' : s.colour); setAttr(pin, 'stroke', r.out ? s.colour : 'var(--paper)'); setAttr(pin, 'stroke-width', r.out ? 2 : 1)
}

const brief = x => String(Number(x.toPrecision(4))).replace('-', '\u2212')

// as many decimals as the weight has, four at least: 0.33333 stays what was asked, 0.060000000000000005 is 0.06
const weightText = r => {
  const decimals = (String(Number(r.weight.toPrecision(12))).split('.')[1] ?? '').length
  return Math.abs(r.weight) >= 1e-4 && decimals <= 4 ? signed(r.weight, 4) : (r.weight > 0 ? '+' : '') + r.weight_text.replace('-', '\u2212')
}

// Rows shrink to two lines of type before the sheet grows beyond the window.
function fit(n) {
  const base = px('--row')
  const rows = Math.max(6, n)
  const now = Math.max(Math.round(px('--t-1') * 2.2), Math.min(base, base * 6 / rows))
  if (work.dataset.rows !== `${rows} ${now}`) {
    work.dataset.rows = `${rows} ${now}`
    document.documentElement.style.setProperty('--rows', rows)
    document.documentElement.style.setProperty('--row-now', `${now}px`)
    setClass(work, 'close', now < 36)
    forgetSizes()
    dispatchEvent(new Event('resize'))
  }
}

function writeSum(shown) {
  const order = [...shown.sum.filter(t => t[1] > 0), ...shown.sum.filter(t => t[1] < 0)]
  const parts = JSON.stringify([order, shown.offset])
  if (sum.dataset.parts === parts && sum.dataset.width === String(size(box).width)) return
  sum.dataset.width = size(box).width
  sum.dataset.parts = parts
  const terms = order.map(([name, w], i) => el('span', {class: 'term'},
    el('span', {class: 'op', text: w < 0 ? '\u2212' : i ? '+' : ''}), plainWeight(w) + THIN, el('i', {text: name})))
  if (shown.offset) terms.push(el('span', {class: 'term'}, el('span', {class: 'op', text: shown.offset < 0 ? '\u2212' : '+'}), `${fixed(Math.abs(shown.offset), 2)}${THIN}V`))
  sum.replaceChildren(el('i', {text: 'out'}), el('span', {class: 'op', text: '='}), ...terms.flatMap(t => [t, ' ']))
  // what does not stand in one line is set smaller, in two
  setClass(sum, 'long', false)
  setClass(sum, 'long', sum.scrollHeight > sum.clientHeight + 1)
  setAttr(sum, 'title', sum.textContent.trim())
  const longest = Math.max(...order.map(t => t[0].length), 9)
  document.documentElement.style.setProperty('--names', `calc(${Math.min(16, longest)} * .52em + 30px)`)
}

const plainWeight = w => {
  const text = String(Number(Math.abs(w).toPrecision(4)))
  return /e/.test(text) ? engineering(Math.abs(w)) : text.includes('.') && text.split('.')[1].length >= 2 ? text : Math.abs(w).toFixed(2)
}

// ---------------------------------------------------------------- folded: the sliders only

function drawMini(shown) {
  if (!size(mini).width) return
  const signals = shown.rows.filter(r => !r.reference)
  keyed(mini, signals.map(keyOf), key => {
    const r = signals.find(x => keyOf(x) === key), {name} = r, s = style(r.style)
    const value = el('span', {class: 'n'})
    const slide = slider(name, moved => setText(value, `${volts(moved)}${THIN}V`))
    const node = el('label', {style: `--c:${s.colour}`}, el('span', {class: 'top'}, el('b', {}, swatch(s), el('span', {text: name})), value), slide.input)
    return {node, slide, value}
  }, minis)
  for (const r of signals) {
    const item = minis.get(keyOf(r))
    item.slide.show(r)
    setClass(item.node, 'out', r.out)
    if (r.out || pulled !== r.name) setText(item.value, r.out ? 'cable out' : `${volts(r.value)}${THIN}V`)
  }
}
