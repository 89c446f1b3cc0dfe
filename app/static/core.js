// The sheet in the browser: takes frames from the wire, hands each part its share, turns the folds.

import {el, forgetSizes, setAttr, setText, setClass} from './dom.js'
import {Line, wasAway} from './wire.js'
import {Blank, isRefused, settle} from './blanks.js'
import {THIN, fixed} from './format.js'
import * as strips from './strips.js'
import * as stage from './stage.js'
import * as plate from './plate.js'
import * as margins from './margins.js'
import * as drawer from './drawer.js'
import * as commands from './commands.js'
import * as place from './place.js'
import {speak} from './spoken.js'
import './help.js'

const start = JSON.parse(document.getElementById('start').textContent)
const state = {}
const folds = new Map() // key -> {node, mounted}
const PARTS = [strips, stage, plate, margins, drawer, commands, place]
const NEW = {key: 'new', title: ''}

const line = new Line(apply, silent, gone)

// What every module of the sheet is given.
export const sheet = {
  state,
  line,
  act(act, newest = null) { line.act(act, newest) },
  // a message to the open fold's own view
  fold(message, newest = null) { line.act({do: 'fold', fold: state.open, message}, newest) },
  // the element that holds a Bokeh figure of a fold: append it where the figure shall be
  figure(key, slot) { return document.querySelector(`[data-slot="${key}_${slot}"]`) },
  note,
  open: turn,
  redraw() { draw(true) },
}

// ---------------------------------------------------------------- frames

function apply(frame, fields = new Set()) {
  const notes = settleLater(frame, fields)
  for (const [key, value] of Object.entries(frame)) {
    if (!['seq', 'refusals', 'heard', 'note', 'folds', 'fold', 'live'].includes(key)) state[key] = value
  }
  if (frame.live) enliven(frame.live)
  if (frame.fold) (state.shown ??= {})[frame.fold.key] = frame.fold
  draw(false)
  for (const one of settle(fields, frame.refusals ?? [])) if (one.field === 'sum' && state.open === 'new') folds.get('new').mounted?.refused(one.text)
  else note(one.text, one.field, {bad: true, refusal: one.refusal})
  if (frame.note) {
    note(frame.note.text, 'server', {bad: frame.note.bad})
    if (frame.note.bad) noted.at += 15_000 // something went wrong that nobody asked about: time to read it
  }
  for (const reply of frame.heard ?? []) heard(reply)
  notes()
}

// what moves with the values, put where it belongs
function enliven({signals, stage}) {
  state.signals.on = signals.on
  state.signals.rows.forEach((row, i) => { row.value = signals.value[i]; row.made = signals.made[i]; row.share = signals.share[i] })
  const {cells, load, ...rest} = stage
  Object.assign(state.stage, rest)
  state.stage.load.i = load
  cells.forEach((cell, i) => Object.assign(state.stage.cells[i], cell))
}

// a sentence of the sheet's own stays until the next thing is done
function settleLater(frame, fields) {
  return () => { if (frame.seq && !frame.refusals?.length && !isRefused(noted.field) && Date.now() - noted.at > 1500) note(null, noted.field) }
}

function heard(reply) {
  if (reply.fold) folds.get(reply.fold)?.mounted?.heard?.(reply.reply)
  for (const part of [...PARTS, ...(folds.get('new')?.mounted ? [folds.get('new').mounted] : [])]) part.heard?.(reply)
}

function draw(resized) {
  if (!state.signals) return
  if (resized) forgetSizes()
  const theme = state.theme ?? 'light'
  if (document.documentElement.dataset.theme !== theme) document.documentElement.dataset.theme = theme
  title.set(state.title)
  if (document.title !== `${state.title} · Sumwright`) document.title = `${state.title} · Sumwright`
  invented.hidden = !state.invented
  for (const part of PARTS) part.update?.(state, resized)
  const fold = folds.get(state.open)
  const shown = state.shown?.[state.open]
  if (fold?.mounted && shown) {
    setText(fold.refused, shown.refused ?? state.problem ?? '')
    if (shown.shown) {
      fold.mounted.update(shown.shown, state, resized)
      speak(state.open, shown.shown, state)
    }
  } else if (state.open === 'new') fold?.mounted?.update(null, state, resized)
  setText(tail.value, `${fixed(state.stage.output)}${THIN}V`)
  setClass(tail.value, 'red', state.stage.clipped !== 'no')
}

// ---------------------------------------------------------------- the line under the strips

const noted = {field: null, at: 0}
const noteText = el('span', {})
const noteActs = el('span', {class: 'acts'})
export const noteLine = el('p', {id: 'note', class: 'note-line', role: 'alert'}, noteText, noteActs)

export function note(text, field = null, {bad = false, refusal = null} = {}) {
  if (!text) {
    if (field !== null && noted.field !== null && field !== noted.field) return
    noted.field = null
    setText(noteText, '')
    noteActs.replaceChildren()
    setClass(document.body, 'noted', false)
    return
  }
  noted.field = field
  noted.at = Date.now()
  setText(noteText, text)
  setClass(noteLine, 'err', bad)
  setClass(document.body, 'noted', true)
  noteActs.replaceChildren(...(refusal?.able ?? []).map(way => el('button', {
    class: 'act', text: `take ${way}`,
    onclick: () => { const again = {...refusal.act, arrangement: way}; note(null, field); line.act(again) },
  })))
  // under an open drawer, or many signals, the line may be out of sight: then it stands at the foot of the window
  setClass(noteLine, 'afloat', false)
  const {top, bottom} = noteLine.getBoundingClientRect()
  setClass(noteLine, 'afloat', top < 0 || bottom > innerHeight)
}

function silent(lost, never = false) {
  if (lost && !state.lost) state.lost = new Date()
  if (!lost) state.lost = null
  state.never = lost && never
  commands.saved(state)
}

// the session is over: at once, and again whenever something is typed
function gone() {
  note('The server has ended this session: what you change now is not kept. The page opens itself anew when the server answers.', 'server', {bad: true})
}

// ---------------------------------------------------------------- folds

const tail = {node: el('span', {class: 'tail soft'}), value: el('b', {class: 'n'})}
tail.node.append(el('i', {class: 'serif', text: 'out'}), ' = ', tail.value)
const invented = document.getElementById('invented')
const title = new Blank(sheet, {
  field: 'title', label: 'Title of the sheet', send: text => ({do: 'title', text}), cls: 'title', placeholder: 'Untitled sheet',
})
{ const there = document.getElementById('title'); title.node.id = 'title'; there.replaceWith(title.node) }

async function turn(key) {
  const known = [...start.folds, NEW].find(f => f.key === key)
  if (!known) key = start.folds[0]?.key
  if (!key) return
  state.open = key
  document.body.dataset.fold = key
  for (const a of document.querySelectorAll('#crease a')) setAttr(a, 'aria-current', a.hash === '#' + key ? 'page' : null)
  if (!folds.has(key)) {
    const refused = el('p', {class: 'err refused', role: 'status'})
    const body = el('div', {})
    const node = el('section', {class: 'fold', id: `f-${key}`, 'aria-label': known?.title || 'New sheet'}, el('h2', {class: 'vh', text: known?.title || 'New sheet'}), refused, body)
    folds.set(key, {node, refused})
    document.getElementById('folds').append(node)
    const module = await import(key === 'new' ? './new.js' : `./folds/${key}.js`)
    if (module.styles) {
      const href = new URL(`./folds/${key}.css`, import.meta.url).href
      await new Promise(done => document.head.append(el('link', {rel: 'stylesheet', href, onload: done, onerror: done})))
    }
    folds.get(key).mounted = module.mount(body, sheet)
  }
  for (const [k, f] of folds) f.node.hidden = k !== key
  if (key !== 'new') line.act({do: 'turn', fold: key})
  draw(true)
  folds.get(key).mounted.focus?.()
}

function mountFolds() {
  document.getElementById('crease').append(
    ...start.folds.map(f => el('a', {href: '#' + f.key, text: f.title})), noteLine, tail.node)
  addEventListener('hashchange', () => turn(location.hash.slice(1)))
}

// ---------------------------------------------------------------- keys

document.addEventListener('keydown', e => {
  if (!(e.ctrlKey || e.metaKey) || e.altKey || e.key.toLowerCase() !== 'z') return
  // a text being typed has an undo of its own
  if (e.target.matches?.('textarea') || (e.target.blank && e.target.value !== e.target.blank.good)) return
  e.preventDefault()
  line.act({do: e.shiftKey ? 'redo' : 'undo'})
})

// whatever changes the room there is (the window, a scroll bar, a drawer) draws everything anew, once
let soon = 0
const again = () => { cancelAnimationFrame(soon); soon = requestAnimationFrame(() => draw(true)) }
addEventListener('resize', again)
let width = 0
new ResizeObserver(([main]) => {
  if (Math.abs(main.contentRect.width - width) > .5) again()
  width = main.contentRect.width
}).observe(document.querySelector('main'))

// ---------------------------------------------------------------- begin

for (const part of PARTS) part.mount?.(sheet)
mountFolds()
apply(start)
// a phone at the board shows the bench alone
const small = matchMedia('(max-width: 640px)').matches && start.folds.some(f => f.key === 'bench')
turn(location.hash.slice(1) || (small ? 'bench' : start.folds[0]?.key))
document.fonts?.ready.then(() => draw(true))
if (wasAway()) {
  note('The server was away, and the page has opened itself anew. The sheet is as it was last saved; what was typed meanwhile is not on it.', 'server')
  noted.at += 10_000 // the first frames do not take it away
}
window.sumwright = sheet
