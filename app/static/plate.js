// The plate: what the stage is built from and around, beside the drawing where there is room for it.

import {el, setAttr, setClass, setText, size} from './dom.js'
import {Blank} from './blanks.js'
import {THIN} from './format.js'
import {placed} from './stage.js'
import {openDrawer} from './drawer.js'

let sheet, box
const blanks = {}
const words = {}
let asked = false // an arrangement was chosen and is not answered yet

const figure = (group, name, label, unit, cls = '') => {
  const blank = blanks[`${group} ${name}`] = new Blank(sheet, {
    field: `plate ${group} ${name}`, label, unit, cls, send: text => ({do: 'figure', group, figure: name, text}),
  })
  return blank.node
}

export function mount(theSheet) {
  sheet = theSheet
  const word = (name, drawer, label) => (words[name] = el('button', {class: 'act', 'aria-label': label, onclick: () => openDrawer(drawer)}))
  const ways = words.ways = el('select', {class: 'blank ways', 'aria-label': 'Arrangement', onchange: () => { asked = true; sheet.act({do: 'arrange', arrangement: ways.value, field: 'arrangement'}) }})
  const symbols = words.symbols = ['IEC 60617', 'IEEE 315'].map(name => el('button', {text: name, onclick: () => sheet.act({do: 'symbols', symbols: name})}))
  box = el('dl', {class: 'plate', id: 'plate'},
    ...pair('stage', ways, words.made = el('span', {class: 'soft made'})),
    ...pair('rails', figure('supply', 'high', 'plus rail', 'V'), `${THIN}V `, figure('supply', 'low', 'minus rail', 'V'), `${THIN}V `, word('tolerance', 'surroundings', 'rails, ambient and what is asked of the output')),
    ...pair('load', figure('load', 'resistance', 'load resistance', 'Ω'), `${THIN}Ω `, el('span', {class: 'soft', text: '∥ '}), figure('load', 'capacitance', 'load capacitance', 'F'), `${THIN}F`),
    ...pair('op amp', word('op_amp', 'op amp', 'op amp, every figure')),
    ...pair('resistors', word('resistor', 'resistors', 'resistors, series and limits')),
    ...pair('target', word('target', 'surroundings', 'target window, accuracy, noise and bandwidth')),
    ...pair('symbols', el('span', {class: 'seg', role: 'group', 'aria-label': 'Resistor symbols'}, ...symbols)))
  document.querySelector('.work').append(box)
}

// where there is little room the words that their values explain are left to those who hear the sheet
const SAID = ['load', 'target']
const pair = (name, ...children) => [el('div', {}, el('dt', {text: name, class: SAID.includes(name) ? null : 'plain'}), el('dd', {}, ...children))]

export function update(state, resized) {
  const p = state.plate, s = state.stage
  if (!p) return
  blanks['supply high'].set(p.supply.high); blanks['supply low'].set(p.supply.low)
  setText(words.tolerance, `±${p.supply.tolerance}`)
  blanks['load resistance'].set(p.load.resistance); blanks['load capacitance'].set(p.load.capacitance)
  setAttr(blanks['load resistance'].node, 'placeholder', 'none')
  setText(words.op_amp, p.op_amp.name.length > 24 ? p.op_amp.name.slice(0, 23) + '…' : p.op_amp.name)
  setText(words.resistor, `${p.resistor.series}  ${p.resistor.tolerance}  ${p.resistor.temperature_coefficient}${THIN}ppm/K`)
  const t = p.target
  setText(words.target, t.low || t.high ? `${t.low || '…'} to ${t.high || '…'}${THIN}V${t.accuracy ? ` ±${t.accuracy}${THIN}V` : ''}` : 'no window given')
  fillWays(s)
  for (const button of words.symbols) setAttr(button, 'aria-pressed', String(button.textContent === s.symbols))
  stand(resized)
}

function fillWays(s) {
  const key = JSON.stringify([s.arrangements, s.able, s.arrangement, s.made])
  if (words.ways.dataset.key !== key) {
    words.ways.dataset.key = key
    const ways = s.arrangements.map(way => el('option', {value: way, text: way + (s.able.includes(way) ? '' : ', cannot make these weights')}))
    // chosen, but with the legs of another for these weights
    const other = s.made && s.arrangement !== s.made
    setText(words.made, other ? `as ${s.made}` : '')
    setAttr(words.made, 'title', other ? `For these weights the ${s.arrangement} arrangement has its legs where ${s.made} has them` : null)
    if (!s.arrangement) ways.unshift(el('option', {value: '', text: 'of its own', disabled: true}))
    words.ways.replaceChildren(...ways)
  }
  if ((asked || document.activeElement !== words.ways) && words.ways.value !== (s.arrangement ?? '')) words.ways.value = s.arrangement ?? ''
  asked = false
}

// under the op amps if it fits there, slimmer if it must, else across the foot of the drawing
const WAYS = [[0, ''], [1, 'slim'], [0, 'slim'], [1, 'slim tight']]
let stood = ''
function stand(resized) {
  const work = box.parentNode
  if (!placed || !size(work).width) return
  const {places, bottom} = placed.free
  const key = [JSON.stringify(places), bottom, placed.width, box.textContent.length, words.ways.value].join()
  if (key === stood && !resized) return
  stood = key
  const strip = size(document.getElementById('strips')).width
  let at = null
  for (const [k, way] of WAYS) {
    if (at || !places[k]) continue
    box.className = `plate ${way}`
    const {left, top} = places[k]
    if (box.scrollWidth <= placed.width - left + 4 && box.offsetHeight <= bottom - top) at = {left: strip + left, top: bottom - box.offsetHeight}
  }
  if (!at) box.className = 'plate flat'
  box.style.left = at ? `${at.left}px` : '0px'
  box.style.top = `${at ? at.top : bottom + 6}px`
  const margin = at ? '0px' : `${box.offsetHeight + 4}px`
  if (work.style.marginBottom !== margin) {
    work.style.marginBottom = margin
    dispatchEvent(new Event('resize'))
  }
}
