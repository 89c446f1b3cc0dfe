// A new sheet: one large line to write the sum in, or a list of weights to paste.

import {el, setText} from './dom.js'
import {THIN, fixed, signed} from './format.js'
import {read} from './commands.js'

const EXAMPLES = [
  ['glasshouse-vent', 'Glasshouse roof vent', 'four sensors open it, the wind closes it; either sign on one op amp'],
  ['village-hall-bus', 'Village hall', 'four microphones on one bus; inverting'],
  ['tide-gauge', 'Tide gauge', '\u00b12 V shifted into a 3.3 V converter on a single supply'],
  ['lock-gate-switches', 'Lock gate', 'four switches weighted 8, 4, 2, 1'],
]
const EXAMPLE = 'out = 0.25 left + 0.25 right \u2212 0.5 zero + 0.5 V'

export function mount(node, sheet) {
  const told = el('p', {class: 'told soft'})
  const wrong = el('p', {class: 'told err', role: 'alert'})
  const text = el('textarea', {'aria-label': 'The sum', spellcheck: 'false', placeholder: EXAMPLE})
  const draw = el('button', {class: 'act', onclick: () => go()}, el('b', {text: 'Draw it'}))
  const file = el('input', {type: 'file', accept: '.json', class: 'vh', tabindex: '-1', 'aria-label': 'Design file', onchange: () => { read(file.files[0]); file.value = '' }})
  node.className = 'new'
  node.append(
    el('h3', {text: 'Write the sum you want, or paste a list: one signal and its weight a line'}), text, wrong, told,
    el('div', {class: 'row'}, draw, el('button', {class: 'act', text: 'Open a design file', onclick: () => file.click()}), file, el('button', {class: 'act', text: 'Back to the sheet', onclick: () => { location.hash = 'curves' }})),
    el('h3', {text: 'Or begin from an example, all invented'}),
    el('ul', {class: 'examples'}, ...EXAMPLES.map(([name, title, words]) => el('li', {},
      el('button', {class: 'act', text: title, onclick: () => sheet.act({do: 'example', example: name})}), ' ', el('span', {class: 'soft', text: words})))))
  let soon = 0
  text.addEventListener('input', () => {
    clearTimeout(soon)
    setText(wrong, '')
    soon = setTimeout(() => { if (text.value.trim()) sheet.act({do: 'read_sum', text: text.value, field: 'sum'}, 'sum') }, 250)
  })
  text.addEventListener('keydown', e => { if (e.key === 'Enter' && (e.ctrlKey || e.metaKey)) { e.preventDefault(); go() } })

  function go() {
    sheet.act({do: 'draw_sum', text: text.value.trim() || EXAMPLE, field: 'sum'})
  }

  return {
    update(shown, state, resized) { if (resized && document.activeElement === document.body) text.focus() },
    refused(sentence) { setText(wrong, sentence); setText(told, '') },
    heard(reply) {
      if (reply.sum) {
        const {signals, offset, able} = reply.sum
        const minus = signals.filter(s => s[1] < 0).length
        const same = signals.every(s => s[2] === signals[0][2] && s[3] === signals[0][3])
        setText(wrong, '')
        setText(told, `${signals.length === 1 ? 'One signal' : `${signals.length} signals`}: ${signals.map(s => `${s[0]} ${signed(s[1], 4)}`).join(', ')}` +
          `${minus ? `; ${minus} subtracted` : ''}${offset ? `; offset ${fixed(offset)}${THIN}V` : ''}.` +
          `${same ? ` Each takes ${fixed(signals[0][2], 0)} to ${fixed(signals[0][3], 0)}${THIN}V until you say otherwise.` : ''} It can be made ${able.join(', ')}. Rails ±12${THIN}V, 10${THIN}kΩ load, E96 1${THIN}% until you say otherwise.`)
      }
      if (reply.drawn) { text.value = ''; setText(told, ''); location.hash = 'curves' }
    },
  }
}
