// Choices: real resistors for the wanted weights. The picture (Bokeh) and the table show the sets found so far;
// the pane under the table shows what taking one would change, its parts list, the drawer, trimmers and spans.

import {el, svg, setAttr, setText, setClass, keyed} from '../dom.js'
import {THIN, engineering, fixed, margin, signed} from '../format.js'
import {Blank} from '../blanks.js'
import {column} from './figures.js'

export const styles = true

const SHAPES = {inverting: 'down', 'inverting-pair': 'diamond', 'non-inverting': 'up', 'mixed-sign': 'disc', 'two-stage': 'square'}
const OUTLINE = {
  disc: 'M2 7a5 5 0 1 0 10 0a5 5 0 1 0 -10 0z', square: 'M2.5 2.5h9v9h-9z', diamond: 'M7 1l6 6l-6 6l-6 -6z',
  up: 'M7 1.5l6 10.5h-12z', down: 'M7 12.5l6 -10.5h-12z', cross: 'M7 1v12M1 7h12',
}
const MERITS = {
  'least weight error': 'best', 'fewest different values': 'few values', 'least noise': 'quietest', 'lightest load on the sources': 'lightest load',
  'lifted for the single supply': 'one supply',
}
const AXIS_WORDS = {parts: 'parts', noise: 'noise', band: 'bandwidth'}
const PANE_WORDS = {preview: 'Preview', parts: 'Parts list', drawer: 'Drawer', trim: 'Trim', spans: 'Spans'}

const percent = (x, figures = 3) => x === null || x === undefined ? '–' : x === 0 ? `0${THIN}%` : `${small(x * 100, figures)}${THIN}%`
const small = (x, figures) => Math.abs(x) >= 0.0005 ? Number(x.toPrecision(figures)).toFixed(Math.max(0, Math.min(6, figures - 1 - Math.floor(Math.log10(Math.abs(x)))))).replace('-', '\u2212') : x.toExponential(1).replace('-', '\u2212')
const plus = x => (x > 0 ? '+' : '') + percent(x, 2)
const ohms = x => x === null || x === undefined ? 'all' : engineering(x, 'Ω', 3)

export function mount(node, sheet) {
  node.className = 'choices'
  const say = message => sheet.fold(message)

  // ---------------------------------------------------------------- left: the picture and what is searched
  const axes = el('div', {class: 'seg', role: 'group', 'aria-label': 'Against what'})
  const ways = el('select', {class: 'blank', 'aria-label': 'Arrangements searched', onchange: options})
  const pairs = el('button', {class: 'act', 'aria-pressed': 'false', text: 'pairs', title: 'Two resistors may stand for one', onclick: () => { setAttr(pairs, 'aria-pressed', String(!pressed(pairs))); options() }})
  const held = el('button', {class: 'act', 'aria-pressed': 'false', text: 'from the drawer', onclick: () => say({do: 'drawer_use', on: !pressed(held)})})
  const least = new Blank(sheet, {field: 'choices least', label: 'Least leg of a signal, ohms', cls: 'short', placeholder: 'any', send: text => ({do: 'fold', fold: 'choices', message: {do: 'least', text}})})
  const bar = el('i'), prog = el('div', {class: 'prog', role: 'progressbar', 'aria-label': 'Search', 'aria-valuemin': 0, 'aria-valuemax': 100}, bar)
  const where = el('span'), stop = el('button', {class: 'act', text: 'Stop', onclick: () => say({do: 'stop'})})
  const again = el('button', {class: 'act', text: 'Search again', onclick: () => say({do: 'again'})})
  const proof = el('p', {class: 'note proof', 'aria-live': 'polite'})
  const left = el('div', {class: 'left'},
    el('div', {class: 'line'}, el('span', {class: 'cap', text: 'Worst weight error against'}), axes),
    sheet.figure('choices', 'map'),
    el('div', {class: 'line'}, ways, pairs, el('label', {class: 'n'}, 'legs from ', least.node), held),
    prog, el('div', {class: 'line'}, where, stop, again), proof)

  // ---------------------------------------------------------------- right: the table and the panes
  const heads = ['(mark)', 'arrangement', 'weight,\u00a0%', 'offset,\u00a0%', 'R', 'op amps', 'noise gain', 'noise', 'sources see', 'Rf']
  const head = el('tr', {}, ...heads.map((t, i) => heading(t, i > 1 && i < 9 ? 'r' : null)))
  setAttr(head.children[2], 'title', 'worst weight error'); setAttr(head.children[3], 'title', 'error of the offset'); setAttr(head.children[4], 'title', 'resistors')
  const body = el('tbody')
  const table = el('div', {class: 'rows', tabindex: '-1'}, el('table', {}, el('thead', {}, head), body))
  const empty = el('p', {class: 'note'})
  const tabs = el('div', {class: 'seg panes', role: 'tablist'})
  const pane = el('div', {class: 'pane', role: 'tabpanel', tabindex: '0', 'aria-label': 'What goes with it'})
  const right = el('div', {class: 'right'}, table, empty, tabs, pane)
  node.append(left, right)

  const panes = {preview: previewPane(), parts: partsPane(), drawer: drawerPane(), trim: trimPane(), spans: spansPane()}
  for (const p of Object.values(panes)) { p.node.hidden = true; pane.append(p.node) }

  function options() { say({do: 'options', arrangement: ways.value, pairs: pressed(pairs)}) }
  const pressed = button => button.getAttribute('aria-pressed') === 'true'

  function segments(box, names, on, words, act) {
    keyed(box, names, name => ({node: el('button', {text: words[name], onclick: () => act(name)})}))
    names.forEach((name, i) => {
      if (box === tabs) { setAttr(box.children[i], 'role', 'tab'); setAttr(box.children[i], 'aria-selected', String(name === on)) }
      else setAttr(box.children[i], 'aria-pressed', String(name === on))
    })
  }

  // ---------------------------------------------------------------- the table
  function makeRow(key) {
    const mark = svg('svg', {width: 14, height: 14, 'aria-hidden': 'true'}, svg('path', {stroke: 'var(--ink)', 'stroke-width': 1.5}))
    const name = el('span'), pair = el('span', {class: 'vh'}), merit = el('span', {class: 'soft merit'}), bad = el('span', {class: 'bad'})
    const cells = Array.from({length: 8}, (_, i) => el('td', {class: i < 7 ? 'r' : null}))
    const item = {}
    const pick = el('button', {class: 'pick', onclick: () => say({do: 'pick', id: key})}, name, pair, bad, merit)
    item.node = el('tr', {onclick: e => { if (!e.target.closest('button')) pick.click() }, ondblclick: () => say({do: 'take', id: key})}, el('td', {}, mark), el('td', {class: 'who'}, pick), ...cells)
    return Object.assign(item, {mark, name, pair, merit, bad, cells, pick})
  }

  let scale = {}
  function drawRow(item, row, word) {
    const outline = item.mark.firstChild
    setAttr(outline, 'd', OUTLINE[SHAPES[row.arrangement] ?? 'cross'])
    setAttr(outline, 'fill', row.paired ? 'var(--paper)' : 'var(--ink)')
    setText(item.name, row.arrangement === 'own' ? 'your own' : row.arrangement)
    setText(item.pair, row.paired ? ', paired' : '')
    setText(item.merit, word ?? (row.same ? ' on the sheet' : row.merits.length ? ' ' + (MERITS[row.merits[0]] ?? row.merits[0]) : ''))
    setAttr(item.merit, 'title', row.merits.join(', ') || null)
    setText(item.bad, row.short.length ? ` ${row.short.length} short` : '')
    setAttr(item.bad, 'title', row.short.length ? `falls short: ${row.short.join(', ')}` : null)
    const texts = [
      scale.error.write(row.error * 100), row.offset === null ? '–' : scale.offset.write(row.offset * 100), String(row.resistors), String(row.op_amps), fixed(row.noise_gain, 2),
      scale.noise.write(row.noise), row.sees === null ? 'all' : scale.sees.write(row.sees), row.feedback,
    ]
    texts.forEach((text, i) => setText(item.cells[i], text))
  }

  const present = makeRow('now')
  present.pick.replaceWith(el('span', {}, present.name, present.merit))

  function drawTable(shown) {
    const keys = shown.now ? ['now', ...shown.rows.map(row => row.id)] : shown.rows.map(row => row.id)
    const store = keyed(body, keys, key => key === 'now' ? present : makeRow(key))
    const every = [...(shown.now ? [shown.now] : []), ...shown.rows]
    scale = {
      error: column(every.map(r => r.error * 100), '%', {low: 3, most: 4}), offset: column(every.map(r => r.offset === null ? null : r.offset * 100), '%', {plus: true, most: 3}),
      noise: column(every.map(r => r.noise), 'V/√Hz', {most: 1}), sees: column(every.map(r => r.sees), 'Ω', {most: 1}),
    }
    setText(head.children[7], scale.noise.head('noise')); setText(head.children[8], scale.sees.head('sources see'))
    if (shown.now) drawRow(present, shown.now, ' now')
    shown.rows.forEach((row, i) => {
      const item = store.get(row.id)
      drawRow(item, row)
      setClass(item.node, 'picked', i === shown.picked)
      setAttr(item.pick, 'aria-pressed', String(i === shown.picked))
    })
    setText(empty, shown.problem || (shown.rows.length || shown.share !== null ? '' : shown.stopped ? 'Stopped before anything was found.' : ''))
    setClass(empty, 'err', !!shown.problem)
  }

  // ---------------------------------------------------------------- frames
  function update(shown) {
    const top = node.getBoundingClientRect().top + scrollY
    const high = Math.max(280, Math.min(560, innerHeight - top - 150))
    fitFigure(Math.max(260, left.clientWidth), high)
    node.style.setProperty('--room', `${Math.max(300, innerHeight - top - 14)}px`)
    segments(axes, shown.axes, shown.axis, AXIS_WORDS, axis => say({do: 'axis', axis}))
    const wanted = ['', ...shown.able]
    keyed(ways, wanted, name => ({node: el('option', {value: name, text: name || 'every arrangement'})}))
    if (document.activeElement !== ways) ways.value = shown.arrangement ?? ''
    least.set(shown.least_leg)
    setAttr(pairs, 'aria-pressed', String(shown.pairs)); pairs.disabled = shown.use_drawer
    held.hidden = !shown.drawer
    setAttr(held, 'aria-pressed', String(shown.use_drawer)); setAttr(held, 'title', shown.drawer)
    const busy = shown.share !== null
    prog.hidden = stop.hidden = !busy
    bar.style.width = `${Math.round((shown.share ?? 0) * 100)}%`
    setAttr(prog, 'aria-valuenow', Math.round((shown.share ?? 0) * 100))
    again.hidden = busy || !(shown.stopped || shown.problem)
    setText(where, busy ? (shown.looking ? `searching ${shown.looking}, ${Math.round(shown.share * 100)}${THIN}%` : 'searching') : shown.stopped ? 'stopped; what was found so far stands' : '')
    setText(proof, [...shown.proof.map(p => p.proved ? `${p.arrangement}: proved, no set errs less than ${percent(p.bound)}.` : `${p.arrangement}: cut short; none can err less than ${percent(p.bound)}.`), ...shown.notes, shown.rows.some(r => r.paired) ? 'Open marks: two resistors stand for one somewhere.' : ''].join(' ').trim())
    drawTable(shown)
    segments(tabs, shown.panes, shown.pane, PANE_WORDS, name => say({do: 'pane', pane: name}))
    for (const [name, p] of Object.entries(panes)) p.node.hidden = name !== shown.pane
    panes[shown.pane].update(shown.open, shown)
  }

  let figure = null, size = ''
  function fitFigure(width, height) {
    figure ??= window.Bokeh?.documents?.map(d => d.get_model_by_name('choices map')).find(Boolean) ?? null
    if (!figure) { setTimeout(() => sheet.redraw(), 150); return }
    const wanted = `${Math.round(width)} ${Math.round(height)}`
    if (wanted === size) return
    size = wanted
    figure.setv({width: Math.round(width), height: Math.round(height)})
  }

  // ---------------------------------------------------------------- preview
  function previewPane() {
    const told = el('p', {class: 'note'}), text = el('span')
    const take = el('button', {class: 'act', onclick: () => say({do: 'take', id: take.of})}, el('b', {text: 'Take this set'}))
    told.append(el('b', {text: 'If you take it: '}), text, ' ', take)
    const none = el('p', {class: 'note soft', text: 'Pick a row, or a point of the picture, to see what it would change before it is taken.'})
    const legs = grid(['leg', 'wanted', 'now', 'made now', 'preview', 'made then'], 1)
    const margins = grid(['margin', 'now', '(word now)', 'then', '(word then)'], 1)
    const both = el('div', {class: 'two'}, el('div', {}, legs.node), el('div', {}, margins.node))
    const box = el('div', {}, told, none, both)
    return {node: box, update(open, shown) {
      const ready = open.picked
      told.hidden = both.hidden = !ready
      none.hidden = ready
      if (!ready) return
      take.of = shown.rows[shown.picked].id
      take.disabled = open.same
      setText(text, open.same ? 'this set is on the sheet already.' : change(open))
      legs.fill([
        ...open.legs.map(l => [l.name, signed(l.wanted, 4), l.now, l.made === null || l.made === undefined ? '–' : signed(l.made, 4), l.then, signed(l.made_then, 4)]),
        ...open.others.map(o => [o.name, '', '', '', o.then, '']),
      ])
      const said = (status, value, unit) => status === null ? '–' : status === 'unknown' ? 'not given' : margin(value, unit)
      margins.fill(open.margins.map(m => [
        m.title, said(m.status, m.margin, m.unit), m.status === m.status_then ? '' : m.status ?? 'no such check',
        said(m.status_then, m.margin_then, m.unit), m.status_then ?? 'no such check',
      ]), (row, i) => {
        setClass(row, 'worse', open.margins[i].status_then === 'short')
        setClass(row, 'moved', open.margins[i].status_then !== open.margins[i].status)
      })
    }}
  }

  // what changes, in a sentence: parts, the worst weight, and the margins whose word changes
  function change({before, after, margins}) {
    const bits = []
    if (before) {
      const more = after.resistors - before.resistors, amps = after.op_amps - before.op_amps
      bits.push(more ? `${Math.abs(more)} resistor${Math.abs(more) > 1 ? 's' : ''} ${more > 0 ? 'more' : 'fewer'}` : 'as many resistors')
      bits[0] += amps ? `, ${Math.abs(amps)} op amp ${amps > 0 ? 'more' : 'fewer'}.` : ', as many op amps.'
      const way = after.error < before.error ? 'falls' : after.error > before.error ? 'rises' : 'stays'
      bits.push(way === 'stays' ? `Worst weight error stays ${percent(after.error)}.` : `Worst weight error ${way} from ${percent(before.error)} to ${percent(after.error)}.`)
    }
    const both = margins.filter(m => m.status !== null && m.status_then !== null), moved = both.filter(m => m.status !== m.status_then)
    for (const m of moved) bits.push(`${m.title} becomes ${m.status_then}: ${margin(m.margin, m.unit)} to ${margin(m.margin_then, m.unit)}.`)
    // a stage with more or fewer op amps has checks of its own
    const fresh = margins.filter(m => m.status === null && (m.status_then === 'short' || m.status_then === 'tight'))
    for (const m of fresh) bits.push(`${m.title} is ${m.status_then}: ${margin(m.margin_then, m.unit)}.`)
    const stay = both.filter(m => m.status === 'short' && m.status_then === 'short')
    if (stay.length) bits.push(`Still short: ${stay.map(m => `${m.title} ${margin(m.margin_then, m.unit)}`).join(', ')}.`)
    if (!moved.length && !fresh.length) bits.push(both.length === margins.length ? 'Every margin keeps its word.' : 'Every margin that both stages have keeps its word.')
    return bits.join(' ')
  }

  // ---------------------------------------------------------------- parts list
  function partsPane() {
    const of = el('span'), save = el('button', {class: 'act', text: 'Save as CSV', onclick: () => say({do: 'csv'})})
    const lines = grid(['(designators)', 'count', 'part', 'value', 'rating', 'use'], 6, [1])
    lines.node.classList.add('parts')
    const notes = el('ul', {class: 'note balance'})
    const balance = el('ul', {class: 'note balance'})
    const problem = el('p', {class: 'err'})
    const box = el('div', {}, el('div', {class: 'line'}, of, save), problem, lines.node, notes, balance)
    return {node: box, update(open) {
      setText(problem, open.problem ?? '')
      if (open.problem) return
      setText(of, open.of === 'now' ? 'Parts of the stage on the sheet' : 'Parts of the set in preview')
      lines.fill(open.lines.map(line => line.slice(0, 6).map(text => String(text).replace(/ (?=%|W\b|ppm)/g, THIN))))
      // what is said of a part stands under the table; what is said of several, once
      const said = new Map()
      for (const [marks, , , , , , note] of open.lines) if (note) said.set(note, [...(said.get(note) ?? []), marks])
      const kept = keyed(notes, [...said.keys()], () => ({node: el('li')}))
      for (const [note, marks] of said) setText(kept.get(note).node, `${marks.join(', ')}: ${note}.`)
      const store = keyed(balance, open.balance.map(b => b.cell), k => {
        const text = el('span'), fit = el('button', {class: 'act', text: 'Fit it', onclick: () => say({do: 'balance', cell: k})})
        return {node: el('li', {}, text, ' ', fit), text, fit}
      })
      for (const b of open.balance) {
        const item = store.get(b.cell)
        setText(item.text, `Bias currents, cell ${b.cell + 1}: ${b.verdict}. ${b.why}`)
        item.fit.hidden = b.resistor === null || open.of !== 'now'
      }
    }}
  }

  // ---------------------------------------------------------------- drawer
  function drawerPane() {
    const file = el('input', {type: 'file', accept: '.csv,.txt,text/csv', class: 'vh', tabindex: '-1', 'aria-label': 'Drawer file', onchange: async () => {
      const given = file.files[0]
      file.value = ''
      if (!given) return
      if (given.size > 8e6) { sheet.note(`${given.name} has ${Math.round(given.size / 1e6)}${THIN}MB; a drawer of up to 8${THIN}MB is read.`, null, {bad: true}); return }
      let text
      try { text = new TextDecoder('utf-8', {fatal: true}).decode(await given.arrayBuffer()) } catch { sheet.note(`${given.name} is not UTF-8 text; save it as CSV in UTF-8.`, null, {bad: true}); return }
      say({do: 'drawer', name: given.name.slice(0, 200), text})
    }})
    const open = el('button', {class: 'act', text: 'Open a drawer (CSV)', onclick: () => file.click()})
    const told = el('p', {class: 'note'})
    const goal = new Blank(sheet, {field: 'choices goal', label: 'Wanted worst weight error', cls: 'short', send: text => ({do: 'fold', fold: 'choices', message: {do: 'goal', text}})})
    const want = el('p', {class: 'note'}, 'To get under ', goal.node, ' buy: '), buy = el('b')
    want.append(buy)
    const box = el('div', {}, el('div', {class: 'line'}, open, file), told, want)
    return {node: box, update(shown, all) {
      setText(told, shown.bins ? `${all.drawer}: ${shown.bins} values, ${shown.inside} of them from ${ohms(shown.least)} to ${ohms(shown.most)}. ${all.use_drawer ? 'Choices come from it alone, its counts respected.' : 'Press “from the drawer” to search in it.'}`
        : 'Columns value, tolerance, count, note; commas, semicolons or tabs; 4k7 or 4700. Without counts every value is there as often as wanted.')
      goal.set(percent(shown.goal).replace(THIN, ' '))
      want.hidden = !shown.bins || !all.use_drawer
      setText(buy, shown.refused ?? (shown.buy === undefined ? '…' : shown.buy.length ? shown.buy.map(p => `${p.count} × ${p.value} (${p.place})`).join(', ') : 'nothing, the drawer will do'))
    }}
  }

  // ---------------------------------------------------------------- trim
  function trimPane() {
    const intro = el('p', {class: 'note'})
    const rows = el('tbody'), store = new Map()
    const head = ['(leg)', 'fixed', 'trimmer', 'must reach', 'a step', 'measured', 'then'].map((t, i) => heading(t, i ? 'r' : null))
    const box = el('div', {}, intro, el('table', {}, el('thead', {}, el('tr', {}, ...head)), rows))
    function make(name) {
      const cells = Array.from({length: 5}, (_, i) => el('td', {class: i ? 'r' : null}))
      const blank = new Blank(sheet, {field: `choices measured ${name}`, label: `Measured weight of ${name}`, cls: 'short', send: text => ({do: 'fold', fold: 'choices', message: {do: 'measured', signal: name, text}})})
      const then = el('td', {class: 'r'})
      return {node: el('tr', {}, ...cells, el('td', {class: 'r'}, blank.node), then), cells, blank, then, drop() { blank.drop() }}
    }
    return {node: box, update(open) {
      setText(intro, open.problem ?? `For each leg of the ${open.of === 'now' ? 'stage on the sheet' : 'set in preview'}: a fixed resistor and a trimmer in series that surely cover the tolerance of everything else. A step is 1${THIN}% of the travel. Type a measured weight (for the reference the offset, V) for the resistor that brings it home.`)
      if (open.problem) return
      keyed(rows, open.rows.map(r => r.name), make, store)
      for (const r of open.rows) {
        const item = store.get(r.name)
        const texts = r.problem ? [r.name, r.problem, '', '', ''] : [r.name, r.fixed, r.trimmer, `${r.needed[0]} to ${r.needed[1]}`, percent(r.resolution, 2)]
        texts.forEach((t, i) => setText(item.cells[i], t))
        item.blank.set(r.measured === undefined ? '' : String(r.measured).replace('-', '\u2212'))
        setText(item.then, r.refused ?? (r.how === undefined ? '' : r.value === null ? 'nothing needed' : `${r.value} in ${r.how}: ${signed(r.after, 4)}`))
        setClass(item.then, 'err', !!r.refused)
      }
    }}
  }

  // ---------------------------------------------------------------- spans
  function spansPane() {
    const end = which => new Blank(sheet, {field: `choices window ${which}`, label: which === 'low' ? 'Lowest output, volts' : 'Highest output, volts', cls: 'short', unit: 'V', send: text => ({do: 'fold', fold: 'choices', message: {do: 'window', end: which, text}})})
    const low = end('low'), high = end('high')
    const take = el('button', {class: 'act', onclick: () => say({do: 'span_take'})}, el('b', {text: 'Take these weights'}))
    const told = el('p', {class: 'note'}), problem = el('p', {class: 'err'})
    const list = grid(['signal', 'its span', 'weight'], 1)
    const box = el('div', {class: 'spans'}, el('p', {class: 'note'}, 'Put the signals’ spans, equal shares, into ', low.node, `${THIN}V to `, high.node, `${THIN}V at the output. `, take), told, problem, list.node)
    return {node: box, update(open) {
      setText(problem, open.problem ?? open.refused ?? '')
      if (open.problem) return
      low.set(fixed(open.low)); high.set(fixed(open.high))
      list.fill(open.names.map((name, i) => [name, `${fixed(open.ranges[i][0], 2)} to ${fixed(open.ranges[i][1], 2)}${THIN}V`, signed(open.weights[i], 5)]))
      setText(told, `Offset ${fixed(open.offset)}${THIN}V${open.reference === null || open.reference === undefined ? '' : ` from the reference of ${fixed(open.reference)}${THIN}V`}. ${open.same ? 'The sheet wants these already.' : open.able.length ? `Can be made ${open.able.join(', ')}. Undo brings the old weights back.` : ''}`)
      take.disabled = open.same || !open.able.length
    }}
  }

  // a heading that is empty to the eye still says what the column is
  function heading(text, side) {
    const bare = text.startsWith('(')
    return el('th', {class: side, scope: 'col'}, bare ? el('span', {class: 'vh', text: text.slice(1, -1)}) : text)
  }

  // a table whose cells are texts: rows are kept, only what changed is written
  function grid(names, textColumns, right = []) {
    const rows = el('tbody')
    const side = i => i >= textColumns || right.includes(i) ? 'r' : null
    const table = el('table', {}, el('thead', {}, el('tr', {}, ...names.map((t, i) => heading(t, side(i))))), rows)
    return {node: table, fill(lines, look) {
      keyed(rows, lines.map((_, i) => i), () => ({node: el('tr', {}, ...names.map((_, i) => el('td', {class: side(i)})))}))
      lines.forEach((line, i) => {
        line.forEach((text, k) => setText(rows.children[i].children[k], text))
        look?.(rows.children[i], i)
      })
    }}
  }

  function heard(reply) {
    if (reply.csv === undefined) return
    const href = URL.createObjectURL(new Blob([reply.csv], {type: 'text/csv;charset=utf-8'}))
    const link = el('a', {href, download: reply.name})
    link.click()
    setTimeout(() => URL.revokeObjectURL(href), 1000)
  }

  return {update, heard}
}
