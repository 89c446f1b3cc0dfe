// Report: documents and files made from the sheet as it stands. The server makes them beside the sheet; a file is
// fetched once, when it is ready, and then opened, kept or copied.

import {el, setAttr, setText} from '../dom.js'

export const styles = true

const DOCUMENTS = [
  ['report', 'Design report', 'job, schematic, values, weights, margins, errors, response, noise, cautions: one file that prints on A4 and Letter', ['Open', 'Keep']],
  ['bring-up', 'Bring-up sheet', 'the run step by step with limits, blanks for the readings, and room to sign', ['Open', 'Keep']],
  ['record', 'Calibration record', 'the weights as measured on the bench, their uncertainty, verdicts, suspects, and room to sign', ['Open', 'Keep']],
  ['summary', 'Summary', 'a page of Markdown for a message or a ticket', ['Copy', 'Keep']],
  ['bundle', 'Everything', 'the report, the design, the results, every table as CSV, every picture as SVG, in one ZIP', ['Keep']],
]
const DO = {Open: 'open', Keep: 'keep', Copy: 'copy', PNG: 'png'}

export function mount(node, sheet) {
  node.className = 'report-fold'
  let fresh = 0, waiting = null, built = ''
  const said = el('p', {class: 'note', role: 'status'})
  const stop = el('button', {class: 'act', text: 'Stop', hidden: true, onclick: () => { drop(); sheet.fold({ask: 'stop'}) }})
  const draws = el('input', {class: 'blank', value: '10000', inputmode: 'numeric', 'aria-label': 'Boards drawn for the histogram', maxlength: 7})
  const table = el('select', {class: 'blank', 'aria-label': 'Table'})
  const picture = el('select', {class: 'blank', 'aria-label': 'Picture'})
  const look = el('figure', {class: 'look'})

  const HOW = {Open: 'in a tab of its own', Keep: 'as a file', Copy: 'to the clipboard'}
  const button = (text, label, run) => el('button', {class: 'act', text, 'aria-label': label, title: HOW[text] ?? 'as a file', onclick: run})
  node.append(
    el('div', {},
      el('h3', {text: 'Documents'}),
      el('ul', {class: 'papers'}, ...DOCUMENTS.map(([kind, title, words, acts]) => el('li', {},
        el('span', {class: 'k', text: title}), el('span', {class: 'soft', text: words}),
        el('span', {class: 'acts'}, ...acts.map(a => button(a, `${a}: ${title}`, () => order(kind, '', DO[a], title))))))),
      el('p', {class: 'acts'}, el('label', {class: 'soft'}, 'boards drawn ', draws), said, stop)),
    el('div', {},
      el('h3', {text: 'Tables and pictures'}),
      el('div', {class: 'chosen'},
        el('p', {class: 'acts'}, table, button('CSV', 'CSV of the table', () => order('table', table.value, 'keep', word(table)))),
        el('p', {class: 'acts'}, picture,
          button('SVG', 'SVG of the picture', () => order('picture', picture.value, 'keep', word(picture))),
          button('PNG', 'PNG of the picture', () => order('picture', picture.value, 'png', word(picture))))),
      look))
  picture.addEventListener('change', () => ask())

  const word = select => select.selectedOptions[0]?.textContent ?? ''

  function order(kind, which, then, title) {
    const count = Number(draws.value)
    const good = /^\d{1,7}$/.test(draws.value.trim()) && count <= 1e6
    setAttr(draws, 'aria-invalid', good ? null : 'true')
    if (!good) { setText(said, `Boards drawn is “${draws.value}”; a whole number from 0 to 1000000 is wanted.`); return }
    drop()
    const token = `${Date.now().toString(36)}-${fresh++}`
    // a tab must be opened while the hand is still on the button
    waiting = {token, then, title, tab: then === 'open' ? window.open('', '_blank') : null, asked: false}
    if (waiting.tab) waiting.tab.document.title = title
    setText(said, `${title}: making it…`)
    stop.hidden = false
    sheet.fold({ask: 'make', kind, which, token, draws: count})
  }

  // the picture that is chosen is there to look at, and follows the sheet
  let stamp = null, soon = 0
  const ask = () => { if (picture.value) sheet.fold({ask: 'look', which: picture.value}, 'look') }

  function drop() {
    waiting?.tab?.close()
    waiting = null
    stop.hidden = true
  }

  function update(shown) {
    const key = JSON.stringify([shown.tables, shown.pictures])
    if (key !== built) {
      built = key
      for (const [select, list] of [[table, shown.tables], [picture, shown.pictures]]) {
        const now = select.value
        select.replaceChildren(...list.map(([value, text]) => el('option', {value, text})))
        if (list.some(([value]) => value === now)) select.value = now
      }
    }
    if (shown.stamp !== stamp) {
      const first = stamp === null
      stamp = shown.stamp
      clearTimeout(soon)
      soon = setTimeout(ask, first ? 0 : 250)
    }
    if (waiting && shown.ready === waiting.token && !waiting.asked) {
      waiting.asked = true
      sheet.fold({ask: 'take', token: waiting.token})
    }
    if (waiting && shown.refused && shown.making !== waiting.token && shown.ready !== waiting.token) {
      setText(said, shown.refused)
      drop()
    }
  }

  async function heard(reply) {
    if (reply?.look) { if (reply.look === picture.value) show(reply.svg); return }
    if (!waiting || reply?.token !== waiting.token) return
    const {then, title, tab} = waiting
    waiting = null
    stop.hidden = true
    const bytes = Uint8Array.from(atob(reply.data), c => c.charCodeAt(0))
    const file = new Blob([bytes], {type: reply.type})
    setText(said, `${title}: done.`)
    if (then === 'open' && tab) tab.location = lent(file)
    else if (then === 'copy') {
      try {
        await navigator.clipboard.writeText(new TextDecoder().decode(bytes))
        setText(said, `${title}: copied.`)
      } catch {
        keep(file, reply.name)
        setText(said, `${title}: the browser did not lend the clipboard; it is kept as ${reply.name}.`)
      }
    } else if (then === 'png') await raster(file, reply.name, title)
    else { keep(file, reply.name); setText(said, `${title}: kept as ${reply.name}.`) }
  }

  function lent(file) {
    const url = URL.createObjectURL(file)
    setTimeout(() => URL.revokeObjectURL(url), 60000)
    return url
  }

  function keep(file, name) { el('a', {href: lent(file), download: name}).click() }

  // the drawing itself, so that its words can be read out and its lines stay sharp
  function show(text) {
    if (!text) { look.replaceChildren(el('p', {class: 'soft', text: 'This stage has no such picture.'})); return }
    const parsed = new DOMParser().parseFromString(text, 'image/svg+xml').documentElement
    if (parsed.nodeName !== 'svg') return
    if (Number(parsed.getAttribute('width')) > 700) parsed.setAttribute('data-wide', '') // scrolls rather than shrink
    parsed.setAttribute('class', 'paper') // it brings its own hand
    look.replaceChildren(document.importNode(parsed, true))
  }

  // twice the size of the drawing, enough for a slide
  async function raster(file, name, title) {
    const image = new Image()
    image.src = lent(file)
    try {
      await image.decode()
      const canvas = el('canvas', {width: image.naturalWidth * 2, height: image.naturalHeight * 2})
      canvas.getContext('2d').drawImage(image, 0, 0, canvas.width, canvas.height)
      const png = await new Promise(done => canvas.toBlob(done, 'image/png'))
      const kept = name.replace(/\.svg$/, '.png')
      keep(png, kept)
      setText(said, `${title}: kept as ${kept}.`)
    } catch {
      setText(said, `${title}: this browser cannot turn the drawing into a PNG; keep the SVG.`)
    }
  }

  return {update, heard}
}
