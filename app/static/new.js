// A new sheet: one large line to write the sum in, or a list of weights to paste; under it what is asked of the output.

import {el, setText} from './dom.js'
import {THIN, engineering, fixed, signed} from './format.js'
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
  // what may be left empty: each becomes a line of the text that is read
  const blank = (label, placeholder, title) => el('input', {class: 'blank', 'aria-label': label, placeholder, title, autocomplete: 'off', spellcheck: 'false'})
  const asked = {window: [blank('window of the output, from', 'any', 'Lower end of what the output must keep to. In V. From what is asked.'), blank('window of the output, to', 'any', 'Upper end of what the output must keep to. In V. From what is asked.')], accuracy: [blank('accuracy of the output, either side', 'any', 'How far the output may be off, to either side, at 95 %. In V. From what is asked.')],
    rails: [blank('plus rail of the new sheet', '12', 'The + rail, nominal. In V. From your supply.'), blank('minus rail of the new sheet', '\u221212', 'The − rail, nominal; 0 for a single supply. In V. From your supply.')]}
  const fields = Object.values(asked).flat()
  const wants = el('p', {class: 'wants soft'}, el('span', {}, 'output kept within ', asked.window[0], ' to ', asked.window[1], `${THIN}V`),
    el('span', {}, 'accurate to ± ', asked.accuracy[0], `${THIN}V`), el('span', {}, 'rails ', asked.rails[0], `${THIN}V and `, asked.rails[1], `${THIN}V`))
  const draw = el('button', {class: 'act', onclick: () => go()}, el('b', {text: 'Draw it'}))
  const file = el('input', {type: 'file', accept: '.json', class: 'vh', tabindex: '-1', 'aria-label': 'Design file', onchange: () => { read(file.files[0]); file.value = '' }})
  node.className = 'new'
  node.append(
    el('h3', {text: 'Write the sum you want, or paste a list: a line for each signal and its weight'}), text, wants, wrong, told,
    el('div', {class: 'row'}, draw, el('button', {class: 'act', text: 'Open a design file', onclick: () => file.click()}), file, el('button', {class: 'act', text: 'Back to the sheet', onclick: () => { location.hash = 'curves' }})),
    el('h3', {text: 'Or begin from an example, all invented'}),
    el('ul', {class: 'examples'}, ...EXAMPLES.map(([name, title, words]) => el('li', {},
      el('button', {class: 'act', text: title, onclick: () => sheet.act({do: 'example', example: name})}), ' ', el('span', {class: 'soft', text: words})))))
  let soon = 0
  const changed = () => {
    clearTimeout(soon)
    setText(wrong, '')
    soon = setTimeout(() => { if (text.value.trim()) send('read_sum', text.value, 'sum') }, 250)
  }
  text.addEventListener('input', changed)
  text.addEventListener('keydown', e => { if (e.key === 'Enter' && (e.ctrlKey || e.metaKey)) { e.preventDefault(); go() } })
  for (const field of fields) {
    field.addEventListener('input', changed)
    field.addEventListener('keydown', e => { if (e.key === 'Enter') { e.preventDefault(); go() } })
  }

  function send(act, sum, newest = null) {
    const lines = [sum]
    for (const [word, ends] of Object.entries(asked)) {
      const typed = ends.map((end, i) => end.value.trim() || (word === 'rails' ? ends[i].placeholder : ''))
      if (ends.every(end => !end.value.trim())) continue
      if (typed.some(t => !t)) { setText(wrong, 'The window wants both its ends, for example 0 to 5.'); setText(told, ''); return }
      lines.push(`${word} ${typed.join(', ')}`)
    }
    sheet.act({do: act, text: lines.join('\n'), field: 'sum'}, newest)
  }
  const go = () => send('draw_sum', text.value.trim() || EXAMPLE)

  return {
    update() {},
    focus() { text.focus() },
    refused(sentence) { setText(wrong, sentence); setText(told, '') },
    heard(reply) {
      if (reply.sum) {
        const {signals, offset, able, window: [low, high], accuracy, rails} = reply.sum
        const minus = signals.filter(s => s[1] < 0).length
        const same = signals.every(s => s[2] === signals[0][2] && s[3] === signals[0][3])
        setText(wrong, '')
        setText(told, `${signals.length === 1 ? 'One signal' : `${signals.length} signals`}: ${signals.map(s => `${s[0]} ${signed(s[1], 4)}`).join(', ')}` +
          `${minus ? `; ${minus} subtracted` : ''}${offset ? `; offset ${fixed(offset)}${THIN}V` : ''}.` +
          `${same ? ` Each takes ${fixed(signals[0][2], 0)} to ${fixed(signals[0][3], 0)}${THIN}V until you say otherwise.` : ''} It can be made ${able.join(', ')}.` +
          `${low === null ? '' : ` Window ${fixed(low)} to ${fixed(high)}${THIN}V.`}${accuracy === null ? '' : ` Accurate to ±${engineering(accuracy, 'V')}.`}` +
          ` Rails ${signed(rails[0], 2)}${THIN}V and ${signed(rails[1], 2)}${THIN}V; 10${THIN}kΩ load, E96 1${THIN}% until you say otherwise.`)
      }
      if (reply.drawn) { for (const field of [text, ...fields]) field.value = ''; setText(told, ''); location.hash = 'curves' }
    },
  }
}
