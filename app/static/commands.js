// The title strip: what stands saved, and the commands of the sheet.

import {el, setAttr, setClass, setText} from './dom.js'
import {clock} from './place.js'

let sheet, undo, redo, dark, file
const FILE_MOST = 2_000_000

export function mount(theSheet) {
  sheet = theSheet
  undo = button('Undo', () => sheet.act({do: 'undo'}), 'Ctrl+Z')
  redo = button('Redo', () => sheet.act({do: 'redo'}), 'Ctrl+Shift+Z')
  dark = button('Dark', () => sheet.act({do: 'theme', theme: sheet.state.theme === 'dark' ? 'light' : 'dark'}))
  file = el('input', {type: 'file', accept: '.json,application/json', class: 'vh', 'aria-label': 'Design file', tabindex: '-1', onchange: () => { read(file.files[0]); file.value = '' }})
  document.getElementById('commands').append(
    button('New', () => { location.hash = 'new' }, 'Write a new sum'),
    button('Open', () => file.click(), 'Open a design file, or drop one on the sheet'), file,
    button('Save', () => sheet.act({do: 'save'}), 'Keep the design as a file'),
    undo, redo, dark)
  addEventListener('dragover', e => { if (e.dataTransfer?.types.includes('Files')) e.preventDefault() })
  addEventListener('drop', e => {
    const dropped = e.dataTransfer?.files[0]
    if (!dropped || e.defaultPrevented) return
    e.preventDefault()
    read(dropped)
  })
}

const button = (text, onclick, title = null) => el('button', {class: 'act', text, title, onclick})

export async function read(chosen) {
  if (!chosen) return
  if (chosen.size > FILE_MOST) {
    sheet.note(`“${chosen.name}” has ${Math.round(chosen.size / 1e6)} MB; a design file has at most 2 MB. The sheet keeps what it had.`, null, {bad: true})
    return
  }
  sheet.act({do: 'open', text: await chosen.text(), field: null, name: chosen.name})
}

export function heard(reply) {
  if (reply.download) {
    const {name, text, type} = reply.download
    const url = URL.createObjectURL(new Blob([text], {type}))
    const link = el('a', {href: url, download: name})
    link.click()
    setTimeout(() => URL.revokeObjectURL(url), 10000)
  }
  if (reply.opened !== undefined) {
    if (!reply.note) sheet.note(null) // what was said of a file before
    if (sheet.state.open === 'new') location.hash = 'curves'
  }
  if (reply.note && (reply.download || reply.opened !== undefined)) sheet.note(reply.note)
}

export function update(state) {
  undo.disabled = !state.undo
  redo.disabled = !state.redo
  setText(dark, state.theme === 'dark' ? 'Light' : 'Dark')
  saved(state)
}

// saved 14:32:08 · saving… · not saved since 14:31:52 · changed elsewhere at 14:31 by Ines
export function saved(state) {
  const node = document.getElementById('saved')
  const s = state.saved ?? {}
  const words = {
    none: '', saving: 'saving…', saved: `saved ${clock(s.at)}`, unsaved: `not saved since ${clock(s.at)}${s.again ? `, trying again in ${s.again}\u202fs` : ''}`,
    reader: 'not kept', // its title says why
    changed: `changed elsewhere${s.at ? ' at ' + clock(s.at) : ''}${s.by ? ' by ' + s.by : ''}.`,
  }
  const lost = state.never ? 'no connection: what you change is not kept' : state.lost ? `no answer from the server since ${state.lost.toTimeString().slice(0, 8)}, ${sheet.line.dead ? 'not kept' : 'trying again'}` : ''
  setText(node, lost || (words[s.state] ?? ''))
  setClass(node, 'bad', lost || s.state === 'unsaved' || s.state === 'changed')
  setAttr(node, 'title', state.never ? 'The page could not open its websocket. Look at the server\u2019s allowed origins, and at a proxy in between.' : s.why || null)
  setAttr(node, 'data-state', s.state)
}
