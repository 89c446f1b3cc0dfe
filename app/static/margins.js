// The margin column: the verdict, and hanging from its bar the plumb line, the zero-margin line of every gauge.
// Right of the line is room, left of it is short; the hatched strip is the tight zone.

import {el, svg, setAttr, setClass, setText, keyed, px, size} from './dom.js'
import {margin, verdict} from './format.js'

const TIGHT = .1 // of the allowance: where the hatched strip ends
const WORDS = ['short', 'tight', 'clear', 'unknown']
const MEANS = {
  short: 'short: the limit is passed, by the number in red', tight: 'tight: less than a tenth of the whole room is left',
  clear: 'clear: more than a tenth of the whole room is left', unknown: 'unknown: something is not given; open it to see what to type',
}
let box, head, big, what, why, cure, live, counts, plumb, tip, warned, usual
const gauges = new Map()
let open = null, spoken = '', speak = 0

export function mount(sheet) {
  box = document.getElementById('margins')
  big = el('span', {class: 'big'})
  what = el('span', {class: 'what'})
  why = el('p')
  cure = el('p')
  live = el('p', {class: 'vh', 'aria-live': 'polite', role: 'status'})
  head = el('div', {class: 'verdict'}, big, what, why, cure)
  counts = WORDS.map(word => el('span', {title: MEANS[word]}, el('b'), ' ' + word))
  plumb = el('div', {class: 'plumb'})
  tip = svg('svg', {width: '100%', height: 26, 'aria-hidden': 'true', class: 'bob'}, svg('path', {stroke: 'var(--ink)'}), svg('path', {fill: 'var(--ink)'}))
  const hatch = svg('svg', {width: 0, height: 0, 'aria-hidden': 'true', class: 'defs'}, svg('defs', {},
    svg('pattern', {id: 'hatch', width: 4, height: 4, patternUnits: 'userSpaceOnUse', patternTransform: 'rotate(45)'},
      svg('path', {d: 'M0 0V4', stroke: 'var(--line)', 'stroke-width': 1}))))
  warned = el('div', {class: 'cautions now', role: 'alert', tabindex: '0', 'aria-label': 'Cautions'})
  usual = el('div', {class: 'cautions'})
  box.append(live, head, el('div', {class: 'count'}, ...counts), warned, plumb, tip, usual, hatch)
}

export function update(state) {
  const checks = state.margins
  const known = checks.filter(c => c.status !== 'unknown')
  const worst = known.find(c => c.first) ?? known[0]
  const count = word => checks.filter(c => c.status === word).length
  head.className = `verdict ${worst?.status ?? 'unknown'}`
  if (state.problem) {
    setText(big, 'no answer'); setText(what, ''); setText(why, state.problem); setText(cure, '')
  } else if (!worst) {
    setText(big, 'not known'); setText(what, ''); setText(why, 'Nothing has been asked of this stage yet.'); setText(cure, '')
  } else if (worst.status === 'short') {
    setText(big, `${verdict(worst.margin, worst.unit)} short`)
    setText(what, worst.title)
    setText(why, worst.why)
    sentence(cure, worst.advice)
  } else {
    setText(big, worst.status === 'tight' ? 'all hold' : 'all clear')
    setText(what, `least margin: ${worst.title[0].toLowerCase()}${worst.title.slice(1)}, ${margin(worst.margin, worst.unit)}`)
    setText(why, worst.why)
    sentence(cure, worst.advice)
  }
  WORDS.forEach((word, i) => { setText(counts[i].firstChild, String(count(word))); setClass(counts[i], 'red', word === 'short' && count(word) > 0) })
  announce(`${big.textContent}. ${what.textContent}`)
  caution(warned, (state.cautions ?? []).filter(c => c.present))
  caution(usual, (state.cautions ?? []).filter(c => !c.present))
  drawGauges(checks)
}

function caution(node, list) {
  const key = JSON.stringify(list)
  if (node.dataset.key === key) return
  node.dataset.key = key
  node.hidden = !list.length
  node.replaceChildren(...list.map(c => el('p', {}, el('b', {text: `${c.title}.`}), ' ' + c.text)))
}

function sentence(node, advice) {
  if (!advice) { if (node.firstChild) node.replaceChildren(); return }
  if (node.dataset.text === advice && node.firstChild) return
  node.dataset.text = advice
  node.replaceChildren(el('b', {text: 'Cure.'}), ' ' + advice)
}

// said once it has stood still, so that a drag does not chatter
function announce(text) {
  clearTimeout(speak)
  if (text !== spoken) speak = setTimeout(() => { spoken = text; setText(live, text) }, 900)
}

function makeGauge(key) {
  const t = el('span', {class: 't'}), w = el('span', {class: 'w'}), m = el('span', {class: 'm'})
  const room = svg('rect', {y: 0, fill: 'url(#hatch)'}), line = svg('path', {class: 'axis faint'})
  const bar = svg('rect', {class: 'move'}), end = svg('path', {class: 'move'}), zero = svg('path', {class: 'zero'})
  const g = svg('svg', {class: 'g', 'aria-hidden': 'true'}, room, line, bar, end, zero)
  const why = el('div', {class: 'why', hidden: true, id: `why-${key}`})
  const button = el('button', {class: 'chk', 'data-c': key, 'aria-expanded': 'false', 'aria-controls': `why-${key}`, onclick: () => {
    open = open === key ? null : key
    for (const [k, item] of gauges) {
      item.why.hidden = k !== open
      setAttr(item.button, 'aria-expanded', String(k === open))
      if (k === open) explain(item.why, item.check)
    }
  }}, t, w, g, m)
  return {node: el('div', {class: 'check'}, button, why), button, why, t, w, m, room, line, bar, end, zero}
}

function drawGauges(checks) {
  keyed(plumb, checks.map(c => c.key), makeGauge, gauges)
  if (!size(plumb).width) return
  const scale = px('--t-1') / 14
  const dense = checks.length * (scale > 1.1 ? 51 : 37) > innerHeight - (scale > 1.1 ? 310 : 240)
  setClass(box, 'dense', dense)
  const W = size(plumb).width - 84 * scale, z = px('--gut', box) + .5, H = scale > 1.1 ? (dense ? 16 : 20) : dense ? 12 : 15, mid = H / 2
  for (const c of checks) {
    const item = gauges.get(c.key)
    setText(item.t, c.title); setText(item.w, c.status); setAttr(item.w, 'title', MEANS[c.status])
    setText(item.m, c.status === 'unknown' ? 'not given' : c.margin === null ? 'no limit' : margin(c.margin, c.unit))
    setClass(item.button, 'tight', c.status === 'tight'); setClass(item.button, 'short', c.status === 'short'); setClass(item.button, 'unknown', c.status === 'unknown')
    item.check = c
    if (!item.why.hidden) explain(item.why, c)
    setAttr(item.room, 'x', z); setAttr(item.room, 'width', Math.max(0, (W - z) * Math.sqrt(TIGHT))); setAttr(item.room, 'height', H)
    setAttr(item.line, 'd', `M${z} ${mid}H${W}`)
    setAttr(item.line, 'class', c.status === 'unknown' ? 'dotted' : 'axis faint')
    setAttr(item.zero, 'd', `M${z} -25V${H + 2}`)
    const size = c.ratio === null || c.ratio === undefined ? c.status === 'clear' ? 1 : 0 : Math.min(1, Math.sqrt(Math.abs(c.ratio)))
    if (c.status === 'unknown') { setAttr(item.bar, 'width', 0); setAttr(item.end, 'd', ''); continue }
    if (c.status === 'short') {
      const x = Math.max(4, Math.min(1, size * 1.5) * (z - 2))
      rect(item.bar, z - x, 2, x, H - 4, 'var(--accent)', 'none')
      stroke(item.end, `M${z - x} 0v${H}`, 'var(--accent)', 2)
    } else if (c.status === 'tight') {
      const x = size * (W - z)
      rect(item.bar, z, 3, Math.max(3, x), H - 6, 'var(--paper)', 'var(--ink)')
      stroke(item.end, `M${z + Math.max(3, x)} 0v${H}`, 'var(--ink)', 3)
    } else {
      const x = size * (W - z)
      rect(item.bar, z, mid - 2.5, x, 5, 'var(--ink)', 'none')
      stroke(item.end, `M${z + x} 1.5v${H - 3}`, 'var(--ink)', 2)
    }
  }
  setAttr(tip.children[0], 'd', `M${z} -6V9`)
  setAttr(tip.children[1], 'd', `M${z - 5} 8h10l-5 14z`)
}

function rect(node, x, y, width, height, fill, line) {
  setAttr(node, 'x', x); setAttr(node, 'y', y); setAttr(node, 'width', width); setAttr(node, 'height', height)
  setAttr(node, 'fill', fill); setAttr(node, 'stroke', line); setAttr(node, 'stroke-width', 1.5)
}

function stroke(node, d, colour, width) {
  setAttr(node, 'd', d); setAttr(node, 'stroke', colour); setAttr(node, 'stroke-width', width)
}

function explain(node, c) {
  const text = `${c.why}\n${c.advice}`
  if (node.dataset.text === text) return
  node.dataset.text = text
  node.replaceChildren(el('span', {text: c.why}), ...(c.advice ? [' ', el('b', {text: 'Cure.'}), ' ' + c.advice] : []))
}
