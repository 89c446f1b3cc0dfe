// A blank: a value that can be typed. Enter or leaving it commits, Esc restores. A refused entry stays as typed,
// marked, with one sentence in the foot; the sheet keeps what it had.

import {el, setAttr} from './dom.js'

const blanks = new Map()

export class Blank {
  // send(text) gives the act to send; `unit` is said after what the sheet keeps.
  constructor(sheet, {field, label, send, unit = '', cls = '', ...attributes}) {
    this.sheet = sheet
    this.field = field
    this.send = send
    this.unit = unit
    this.good = ''
    this.waiting = null
    this.node = el('input', {
      class: `blank ${cls}`.trim(), 'aria-label': label, autocomplete: 'off', spellcheck: 'false', ...attributes,
    })
    this.node.addEventListener('keydown', e => {
      if (e.key === 'Enter') { e.preventDefault(); this.commit(); this.node.select() }
      else if (e.key === 'Escape') { e.stopPropagation(); this.restore() }
    })
    this.node.addEventListener('blur', () => this.commit())
    this.node.addEventListener('focus', () => { if (!this.refused) this.node.select() })
    this.node.blank = this
    blanks.set(field, this)
  }

  get refused() { return this.node.getAttribute('aria-invalid') === 'true' }

  commit() {
    const text = this.node.value.trim()
    if (text === this.good || text === this.waiting) { if (text === this.good) this.accept(); return }
    if (this.refused && text === this.badText) return
    this.waiting = this.sent = text
    this.sheet.act({...this.send(text), field: this.field})
  }

  restore() { this.node.value = this.good; this.accept() }

  accept() {
    this.waiting = null
    this.badText = null
    if (this.refused) { setAttr(this.node, 'aria-invalid', null); setAttr(this.node, 'aria-describedby', null); this.sheet.note(null, this.field) }
  }

  refuse(text) {
    this.badText = this.waiting ?? this.node.value
    this.waiting = null
    setAttr(this.node, 'aria-invalid', 'true')
    setAttr(this.node, 'aria-describedby', 'note')
    return `${text.replace(/\.$/, '')}; the sheet keeps ${this.good || 'it empty'}${this.unit && this.good ? '\u202f' + this.unit : ''}.`
  }

  // What the sheet holds; a text being typed, or refused, is left alone.
  set(text) {
    const was = this.good
    this.good = text
    if (this.waiting !== null || this.refused) return
    if (document.activeElement === this.node && this.node.value !== was) return
    if (this.node.value !== text) this.node.value = text
  }

  drop() { if (blanks.get(this.field) === this) blanks.delete(this.field) }
}

export const isRefused = field => blanks.get(field)?.refused ?? false

// After a frame: the blanks whose acts it answers were taken, or refused.
export function settle(fields, refusals) {
  const refused = new Map(refusals.filter(r => r.field).map(r => [r.field, r]))
  const sentences = []
  for (const [field, blank] of blanks) {
    const r = refused.get(field)
    if (r) { sentences.push({field, text: blank.refuse(r.text), refusal: r}); refused.delete(field) }
    else if (fields.has(field)) { blank.accept(); if (blank.node.value !== blank.good) blank.node.value = blank.good }
  }
  for (const r of refusals) if (!r.field || refused.has(r.field)) sentences.push({field: r.field ?? null, text: r.text, refusal: r})
  return sentences
}
