// Where the sheet is kept: the address of the page follows it, so that a reload or a copied link finds it again.

import {el} from './dom.js'

let sheet, compare

export function mount(theSheet) {
  sheet = theSheet
  const copy = el('button', {class: 'act', text: 'Copy link', title: 'A link to this sheet, as it is at work', onclick: () => copied(link())})
  document.getElementById('commands').append(copy)
  compare = el('button', {class: 'act', text: 'Compare', title: 'Theirs, yours, or both side by side', hidden: true, onclick: () => { location.hash = 'log' }})
  document.getElementById('saved').after(compare)
}

// The address of a sheet, of one of its folds, or of one entry of the log.
export function link({notebook, sheet: number} = sheet.state.place ?? {}, fold = sheet.state.open, entry = null) {
  const url = new URL(location.href)
  url.search = ''
  if (notebook) {
    url.searchParams.set('notebook', notebook)
    url.searchParams.set('sheet', number)
    if (entry) url.searchParams.set('entry', entry)
  }
  url.hash = fold ?? ''
  return url.href
}

export async function copied(href) {
  if (!sheet.state.place?.notebook) { sheet.note('The demonstration has no link of its own until something on it is changed.'); return }
  try {
    await navigator.clipboard.writeText(href)
    sheet.note('The link is copied.')
  } catch {
    sheet.note(`Copy it by hand: ${href}`) // no clipboard without HTTPS or leave
  }
}

export function update(state) {
  compare.hidden = state.saved?.state !== 'changed'
  const place = state.place
  if (!place?.notebook) return
  const here = new URLSearchParams(location.search)
  if (here.get('notebook') === place.notebook && here.get('sheet') === String(place.sheet)) return
  history.replaceState(null, '', link(place, location.hash.slice(1)))
}

// UTC from the server as this place's own time: the time of day, with the date when it is another day.
export function clock(utc) {
  const at = new Date(utc)
  if (!utc || isNaN(at)) return ''
  const two = n => String(n).padStart(2, '0')
  const time = `${two(at.getHours())}:${two(at.getMinutes())}:${two(at.getSeconds())}`
  const day = `${at.getFullYear()}-${two(at.getMonth() + 1)}-${two(at.getDate())}`
  const now = new Date()
  return at.toDateString() === now.toDateString() ? time : `${day} ${time.slice(0, 5)}`
}
