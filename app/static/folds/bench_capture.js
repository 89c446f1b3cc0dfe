// The capture on the Bench: a record goes up in parts, its channels are mapped, the fit comes back and is laid over it.

import {el, setText} from '../dom.js'
import {THIN, engineering, fixed, signed} from '../format.js'
import {Figure, table} from './figures.js'

const PART = 1_500_000 // bytes in one message
const MOST = 128 * 2 ** 20

const base64 = bytes => new Promise(done => {
  const reader = new FileReader()
  reader.onload = () => done(reader.result.slice(reader.result.indexOf(',') + 1))
  reader.readAsDataURL(new Blob([bytes]))
})

export function mountCapture(sheet, send) {
  let rest = null, at = 0, figure = null, mapped = null
  const file = el('input', {type: 'file', accept: '.csv,.txt,text/csv', class: 'vh', tabindex: -1, 'aria-label': 'Capture file', onchange: () => {
    const given = file.files[0]
    file.value = ''
    if (!given) return
    if (given.size > MOST) { sheet.note(`“${given.name}” has ${Math.round(given.size / 2 ** 20)} MB; a capture has at most 128.`, null, {bad: true}); return }
    rest = given; at = 0; mapped = null
    more()
  }})
  async function more() {
    const given = rest
    if (!given) return
    const part = given.slice(at, at + PART), first = at === 0
    const data = await base64(await part.arrayBuffer())
    if (rest !== given) return
    at += part.size
    const last = at >= given.size
    if (last) rest = null
    setText(said, last ? 'reading…' : `${Math.round(100 * at / given.size)}${THIN}% of “${given.name}”`)
    send({do: 'capture', step: 'part', data, first, last, ...(first ? {name: given.name.slice(-200)} : {})})
  }
  const said = el('span', {class: 'soft', role: 'status'})
  const mapping = el('div', {class: 'mapping'})
  const lay = el('button', {class: 'act', text: 'Lay it over the prediction', onclick: () => send({do: 'capture', step: 'fit', map: Object.fromEntries(mapped.map(([c, s]) => [c, s.value]))})})
  const fits = table([{text: ''}, {text: 'from the record', class: 'r'}, {text: 'u', class: 'r'}, {text: 'by the drawing', class: 'r'}], 'Weights from the record')
  const facts = el('p', {class: 'note'}), findings = el('div', {class: 'note'})
  const place = el('div', {class: 'capture-figure'}), shownFit = el('div', {hidden: true}, el('p', {class: 'soft', text: 'Measured in grey, the drawing’s prediction dashed, the fit drawn through; V against time. Signals that no channel is mapped to are taken where the sheet has them.'}), place, el('div', {class: 'two'}, fits.node, el('div', {}, facts, findings)))
  const node = el('details', {}, el('summary', {text: 'Capture'}),
    el('div', {class: 'line'}, el('button', {class: 'act', text: 'Open a scope’s or logger’s record (CSV)', onclick: () => file.click()}), file, said), mapping, shownFit)
  node.addEventListener('toggle', () => sheet.redraw?.())

  return {
    node,
    heard(reply) { if (reply?.part !== undefined && rest) more() },
    update(s) {
      const c = s.capture, about = c.about
      if (c.problem) setText(said, c.problem)
      else if (c.busy) setText(said, c.fit || !about ? 'reading…' : 'fitting…')
      else if (about) setText(said, `${about.rows.toLocaleString('en').replaceAll(',', THIN)} rows, one every ${engineering(about.interval, 's')}, ${engineering(about.span, 's')} in all; ${about.time}`)
      said.classList.toggle('err', !!c.problem)
      const key = about ? JSON.stringify([about.channels, s.names]) : ''
      if (mapping.dataset.of !== key) {
        mapping.dataset.of = key
        mapped = about ? about.channels.map(name => [name, el('select', {class: 'blank', 'aria-label': `What ${name} is`},
          [['', 'not used'], ['output', 'output'], ...s.names.map(n => [n, n])].map(([v, t]) => el('option', {value: v, text: t, selected: about.map[name] === v})))]) : null
        mapping.replaceChildren(...(mapped ? [...mapped.map(([name, select]) => el('label', {}, `${name} is `, select)), lay] : []))
      }
      shownFit.hidden = !c.fit
      if (!c.fit) return
      const r = c.fit, names = [...r.names, 'offset']
      const places = u => u > 0 ? Math.max(4, Math.min(8, 1 - Math.floor(Math.log10(u)))) : 5 // two figures of the uncertainty
      fits.set(names.map((n, i) => [[n, ''], [r.value[i] === null ? '–' : signed(r.value[i], places(r.u[i])), 'r'], [r.u[i] === null ? '' : fixed(r.u[i], places(r.u[i])), 'r soft'], [signed(r.predicted[i], 5), 'r']]))
      setText(facts, `Delay ${engineering(r.delay, 's')}; bandwidth ${r.bandwidth === null ? 'beyond what the sampling shows' : engineering(r.bandwidth, 'Hz')}; ${engineering(r.noise, 'V')} RMS left over; ${fixed(100 * r.used, 1)}${THIN}% of the samples in the fit.`)
      findings.replaceChildren(...(r.findings.length ? r.findings : ['No clipping, slewing, ringing or mains pick-up stands clear of the noise.']).map(text => el('p', {text})))
      if (!node.open) return
      figure ??= (() => { const f = new Figure(sheet, 'bench', 'capture'); place.append(f.slot); return f })()
      if (place.clientWidth) figure.fit(place.clientWidth, 240)
    },
  }
}
