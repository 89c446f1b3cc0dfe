// What the folds with Bokeh figures share: sizing a figure to its place, and taking it away as CSV, SVG or PNG.

import {el, px} from '../dom.js'
import {THIN, engineering, fixed, signed} from '../format.js'

const find = name => window.Bokeh?.documents?.map(d => d.get_model_by_name(name)).find(Boolean) ?? null

// A Bokeh figure in its slot; `fit` gives it a size, borders for its axes, and the sheet's type size.
export class Figure {
  constructor(sheet, fold, name) {
    this.name = name
    this.sheet = sheet
    this.slot = sheet.figure(fold, name)
    this.model = null
    this.frame = ''
  }
  fit(width, height, {left = 44, bottom = 30, right = 14, top = 8} = {}) {
    this.model ??= find(this.name)
    if (!this.model) { setTimeout(() => this.sheet.redraw(), 150); return }
    const size = `${px('--t-1')}px`
    const wanted = [width, height, left, bottom, right, top, size].join()
    if (wanted === this.frame) return
    this.frame = wanted
    this.slot.parentNode.style.height = `${Math.round(height)}px`
    this.model.setv({
      width: Math.round(width), height: Math.round(height), min_border_left: left, min_border_right: right,
      min_border_top: top, min_border_bottom: bottom,
      frame_width: Math.max(40, Math.round(width - left - right)), frame_height: Math.max(40, Math.round(height - top - bottom)),
    })
    for (const axis of [...this.model.below, ...this.model.left]) axis.major_label_text_font_size = size
  }
  async take(kind) {
    const view = this.model && window.Bokeh.index.find_one(this.model)
    if (!view) return
    const paper = getComputedStyle(document.documentElement).getPropertyValue('--paper').trim()
    const alpha = this.model.border_fill_alpha
    this.model.setv({border_fill_color: paper, border_fill_alpha: 1})
    try { save(await view.export(kind).to_blob(), `${this.name}.${kind}`) } finally { this.model.border_fill_alpha = alpha }
  }
}

export function save(blob, name) {
  const link = el('a', {href: URL.createObjectURL(blob), download: name})
  document.body.append(link)
  link.click()
  link.remove()
  setTimeout(() => URL.revokeObjectURL(link.href), 10000)
}

export const saveText = (text, name) => save(new Blob([text], {type: 'text/csv;charset=utf-8'}), name)

// The three ways to take a figure away; `csv` is a message to the fold's view.
export function takers(sheet, figure, csv, what) {
  const act = (text, label, onclick) => el('button', {class: 'act', text, 'aria-label': `${what} as ${label}`, onclick})
  return el('span', {class: 'takers'},
    act('CSV', 'CSV', () => sheet.fold({do: 'csv', what: csv})),
    act('SVG', 'SVG', () => figure().take('svg')),
    act('PNG', 'PNG', () => figure().take('png')))
}

// A row of words of which one is pressed.
export function words(label, all, chosen) {
  const buttons = all.map(([value, text]) => el('button', {text, 'aria-pressed': 'false', onclick: () => chosen(value)}))
  const node = el('span', {class: 'seg', role: 'group', 'aria-label': label}, buttons)
  return {node, set(value) { all.forEach(([v], i) => { const on = String(v === value); if (buttons[i].getAttribute('aria-pressed') !== on) buttons[i].setAttribute('aria-pressed', on) }) }}
}

// How a column of numbers is written: one unit and as many decimals, the largest in `figures` figures, the smallest in `low`
// as far as `most` decimals go. `unit` has its prefix; `write` gives the number alone, `say` with its unit, `head` a heading.
export function column(values, unit, {figures = 3, low = 2, plus = false, least = 0, most = 3} = {}) {
  const sizes = values.filter(x => Number.isFinite(x) && x !== 0).map(Math.abs)
  const large = Math.max(0, ...sizes), small = Math.min(large, ...sizes)
  const prefixed = ['%', '°', '°C', 'K', ''].includes(unit) ? unit : engineering(large, unit).split(THIN)[1]
  const power = prefixed === unit || !large ? 0 : Math.floor(Math.log10(Number((large).toPrecision(figures))) / 3) * 3
  const digit = x => Math.floor(Math.log10(x / 10 ** power))
  const decimals = large ? Math.max(least, Math.min(most, Math.max(figures - 1 - digit(large), low - 1 - digit(small)))) : least
  const write = x => x === null || x === undefined ? '–' : (plus ? signed : fixed)(x / 10 ** power, decimals)
  return {unit: prefixed, write, head: text => prefixed ? `${text},\u00a0${prefixed.replace('/', '\u2060/\u2060')}` : text, say: x => x === null || x === undefined ? '–' : `${write(x)}${prefixed === '°' ? '' : THIN}${prefixed}`}
}

// A table whose rows are kept in place; cells are texts or [text, class].
export function table(heads, label) {
  const body = el('tbody')
  const head = el('tr', {}, heads.map(h => el('th', {class: h.class ?? '', text: h.text, scope: 'col'})))
  const node = el('table', {'aria-label': label}, el('thead', {}, head), body)
  return {
    node, body,
    set(rows) {
      while (body.rows.length > rows.length) body.deleteRow(-1)
      rows.forEach((row, i) => {
        const tr = body.rows[i] ?? body.insertRow()
        while (tr.cells.length > row.length) tr.deleteCell(-1)
        row.forEach((cell, j) => {
          const td = tr.cells[j] ?? tr.insertCell()
          const [text, cls] = Array.isArray(cell) ? cell : [cell, heads[j]?.class ?? '']
          if (td.className !== (cls ?? '')) td.className = cls ?? ''
          if (text instanceof Node) { if (td.firstChild !== text) td.replaceChildren(text) } else if (td.textContent !== text) td.textContent = text
        })
      })
    },
    heads(texts) {
      while (head.cells.length > texts.length) head.lastChild.remove()
      texts.forEach((t, i) => { const th = head.cells[i] ?? head.appendChild(el('th', {scope: 'col'})); if (th.textContent !== t) th.textContent = t })
    },
  }
}
