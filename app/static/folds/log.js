// The notebook: what was written, newest first; freeze, note, decision, correction; compare, search, export, import.
// Notes come as HTML that the server has cleaned; everything else of a person's goes through textContent.

import {el, keyed, setAttr, setClass, setText} from '../dom.js'
import {clock, copied, link} from '../place.js'

export const styles = true

const KINDS = {note: 'Note.', decision: 'Decision.', frozen: 'Frozen', readings: 'Readings.', capture: 'Capture.', correction: 'Correction'}
const PART = 1_500_000 // bytes of a file in one message

export function mount(node, sheet) {
  let shown = {}, kind = 'note', correcting = null, seen = null, fresh = 0
  const waiting = new Map() // token -> what to do when the server has done it

  const ask = (what, more = {}, then = null) => {
    const token = `${Date.now().toString(36)}-${fresh++}`
    if (then) waiting.set(token, then)
    sheet.fold({ask: what, token, ...more})
  }

  // ---------------------------------------------------------------- writing

  const text = el('textarea', {class: 'blank-note', rows: 3, 'aria-label': 'Text of the entry, Markdown', placeholder: 'write a note, or a decision and its reason; Ctrl+Enter writes it', spellcheck: 'true', maxlength: 100000})
  const kinds = ['note', 'decision'].map(k => el('button', {class: 'act', text: k === 'note' ? 'Note' : 'Decision', onclick: () => { kind = k; correcting = null; sayKind(); text.focus() }}))
  const what = el('span', {class: 'soft', role: 'status'})
  const write = el('button', {class: 'act strong', text: 'Write it', onclick: () => {
    const sent = text.value
    ask('write', {kind: correcting ? 'correction' : kind, text: sent, ...(correcting ? {of: correcting} : {})},
      () => { if (text.value === sent) text.value = ''; correcting = null; sayKind() })
  }})
  text.addEventListener('input', () => { text.dataset.dirty = text.value ? 'yes' : '' }) // its own undo while it holds something
  text.addEventListener('keydown', e => {
    if (e.key === 'Enter' && (e.ctrlKey || e.metaKey)) { e.preventDefault(); write.click() }
    if (e.key === 'Escape' && correcting) { correcting = null; sayKind() }
  })
  function sayKind() {
    kinds.forEach((b, k) => setAttr(b, 'aria-pressed', !correcting && kind === ['note', 'decision'][k] ? 'true' : 'false'))
    setText(what, correcting ? `corrects entry ${correcting}; Esc leaves it` : '')
  }
  sayKind()
  const title = el('input', {class: 'blank wide', 'aria-label': 'What the frozen design is called', placeholder: 'as the sheet stands', maxlength: 200})
  const freeze = el('button', {class: 'act strong', text: 'Freeze now', onclick: () => ask('freeze', {title: title.value}, () => { title.value = '' })})
  const writing = el('div', {class: 'writing'},
    text, el('p', {class: 'acts'}, kinds, write, what),
    el('p', {class: 'acts'}, el('label', {class: 'soft grow'}, 'Freeze the design as ', title), freeze))

  // ---------------------------------------------------------------- the log

  const find = el('input', {class: 'blank wide', type: 'search', 'aria-label': 'Search the log', placeholder: 'search notes, titles, parts, people', maxlength: 200})
  let soon = 0
  find.addEventListener('input', () => { clearTimeout(soon); soon = setTimeout(() => sheet.fold({ask: 'search', text: find.value}, 'search'), 250) })
  const list = el('ol', {class: 'log', 'aria-label': 'Entries, newest first'})
  const more = el('button', {class: 'act', text: 'Earlier entries', onclick: () => sheet.fold({ask: 'more'})})
  const empty = el('p', {class: 'soft'})

  function entry(number) {
    const time = el('time', {}), who = el('span', {class: 'soft who'}), head = el('span', {class: 'k'}), body = el('div', {class: 'said'})
    const acts = el('span', {class: 'acts'})
    const row = el('li', {id: `entry-${number}`, tabindex: -1}, time, who, el('div', {class: 'entry'}, head, ' ', body, acts))
    return {node: row, set(e) {
      if (row.__sum === e.sum) return
      row.__sum = e.sum
      setText(time, clock(e.at)); setAttr(time, 'datetime', e.at); setAttr(time, 'title', `${e.at} · entry ${e.number} · SHA-256 ${e.sum}…`)
      setText(who, e.author)
      setText(head, e.kind === 'frozen' ? `Frozen ${e.letter}.` : e.kind === 'correction' ? `Correction of ${e.of}.` : KINDS[e.kind])
      if (e.html !== undefined) body.innerHTML = e.html // cleaned by the server; see notebook/markdown.py
      else setText(body, e.text)
      acts.replaceChildren(
        ...(e.kind === 'frozen' ? [
          el('button', {class: 'act', text: 'Compare', 'aria-label': `Compare frozen ${e.letter} with the sheet`, onclick: () => { a.value = e.number; b.value = 'sheet'; a.__chosen = b.__chosen = true; runCompare() }}),
          el('button', {class: 'act', text: 'Hold beside', 'aria-label': `Hold frozen ${e.letter} beside the sheet in Budget and Response`, onclick: () => ask('hold', {number: e.number}, done => done.held && sheet.note(`Frozen ${e.letter} is held beside the sheet: Budget, Compare, and the plots of Response show what moved.`))}),
          el('button', {class: 'act', text: 'Put on the sheet', 'aria-label': `Put frozen ${e.letter} on the sheet`, onclick: () => ask('use', {number: e.number}, done => done.used && sheet.note(`Frozen ${e.letter} is on the sheet; Undo takes it back.`))}),
        ] : []),
        ...(e.table ? [el('button', {class: 'act', text: 'CSV', 'aria-label': `Table of entry ${e.number} as a file`, onclick: () => ask('table', {number: e.number}, done => fetchParts(done.file))})] : []),
        el('button', {class: 'act correct', text: 'Correct', 'aria-label': `Correct entry ${e.number}`, onclick: () => { correcting = e.number; sayKind(); text.focus() }}),
        el('button', {class: 'act', text: 'Link', 'aria-label': `Copy a link to entry ${e.number}`, onclick: () => copied(link(shown.place, 'log', e.number))}))
    }}
  }

  // ---------------------------------------------------------------- compare

  const a = el('select', {class: 'blank', 'aria-label': 'Compare this'}), b = el('select', {class: 'blank', 'aria-label': 'with this'})
  const side = v => v === 'sheet' ? v : Number(v)
  const runCompare = () => ask('compare', {a: side(a.value), b: side(b.value)})
  for (const s of [a, b]) s.addEventListener('change', () => { s.__chosen = true; runCompare() })
  const table = el('tbody', {}), headA = el('th', {class: 'r'}), headB = el('th', {class: 'r'})
  const compared = el('table', {class: 'compared'}, el('thead', {}, el('tr', {}, el('th', {}), headA, headB)), table)
  const choose = el('p', {class: 'acts'}, 'Compare ', a, ' with ', b)

  function names(v) {
    if (v === 'sheet') return 'the sheet'
    if (v === 'theirs' || v === 'mine') return v
    const f = (shown.frozen ?? []).find(f => f[0] === v)
    return f ? f[1] : String(v)
  }
  function fillSelect(node, keep) {
    const options = [['sheet', 'the sheet'], ...(shown.frozen ?? []).map(f => [String(f[0]), `${f[1]}  ${f[2]}`.slice(0, 60)])]
    const spelled = JSON.stringify(options)
    if (node.__spelled === spelled) return
    node.__spelled = spelled
    const had = node.__chosen && node.value ? node.value : keep // the newest frozen one, until somebody chose
    node.replaceChildren(...options.map(([value, label]) => el('option', {value, text: label})))
    node.value = options.some(o => o[0] === had) ? had : 'sheet'
  }
  function showCompared(c) {
    compared.hidden = !c
    if (!c) return
    setText(headA, names(c.a)); setText(headB, names(c.b))
    const line = r => el('tr', {}, el('td', {text: r[0]}), el('td', {class: 'r', text: r[1]}), el('td', {class: 'r'}, el('b', {text: r[2]})))
    const rest = (n, what) => el('tr', {}, el('td', {class: 'soft', colspan: 3, text: `${n || 'no'} ${what} the same`}))
    table.replaceChildren(...c.values.map(line), rest(c.same[0], 'values'), ...c.results.map(line), ...(c.a === 'theirs' ? [] : [rest(c.same[1], 'results to four figures')]))
  }

  // ---------------------------------------------------------------- conflict

  const clash = el('p', {class: 'bad', role: 'alert'})
  const clashActs = el('p', {class: 'acts'},
    el('button', {class: 'act', text: 'Side by side', onclick: () => sheet.fold({ask: 'conflict'})}),
    el('button', {class: 'act', text: 'Take theirs', onclick: () => sheet.fold({ask: 'resolve', choice: 'theirs'})}),
    el('button', {class: 'act', text: 'Keep mine', onclick: () => ask('resolve', {choice: 'mine'})}))
  const conflict = el('div', {class: 'clash'}, clash, clashActs)

  // ---------------------------------------------------------------- notebooks and files

  const file = el('input', {type: 'file', accept: '.zip,application/zip', class: 'vh', 'aria-label': 'Notebook file', tabindex: -1, onchange: () => { bring(file.files[0]); file.value = '' }})
  const acts = {
    books: el('button', {class: 'act', text: 'Notebooks', onclick: () => ask('books', {text: '', archived: false})}),
    book: el('button', {class: 'act', text: 'New notebook', onclick: () => name('Title of the new notebook', t => ask('new book', {title: t}, go))}),
    sheet: el('button', {class: 'act', text: 'New sheet', onclick: () => name('Title of the new sheet', t => ask('new sheet', {title: t}, go))}),
    rename: el('button', {class: 'act', text: 'Rename', onclick: () => name('Title of this notebook', t => ask('rename', {title: t}), shown.title)}),
    export: el('button', {class: 'act', text: 'Export', onclick: () => ask('export', {}, done => fetchParts(done.file))}),
    import: el('button', {class: 'act', text: 'Import', onclick: () => file.click()}),
    verify: el('button', {class: 'act', text: 'Verify', onclick: () => ask('verify', {}, done => sheet.note(done.verified.length ? `Changed after it was written: ${done.verified.join('; ')}.` : `All ${done.length} entries are as they were written.`, null, {bad: done.verified.length > 0}))}),
  }
  const naming = el('p', {class: 'acts', hidden: true})
  function name(label, then, held = '') {
    const input = el('input', {class: 'blank wide', 'aria-label': label, placeholder: label, maxlength: 200})
    input.value = held ?? ''
    const done = () => { naming.hidden = true; naming.replaceChildren() }
    input.addEventListener('keydown', e => {
      if (e.key === 'Enter' && input.value.trim()) { then(input.value); done() }
      if (e.key === 'Escape') done()
    })
    naming.replaceChildren(input, el('button', {class: 'act', text: 'Make it so', onclick: () => { if (input.value.trim()) { then(input.value); done() } }}))
    naming.hidden = false
    input.focus()
  }
  const heading = el('h3', {}), sheets = el('p', {class: 'sheets'})
  const books = el('ol', {class: 'books', 'aria-label': 'Notebooks'})
  const hits = el('ol', {class: 'books hits', 'aria-label': 'Entries found in all notebooks'})
  const bookFind = el('input', {class: 'blank wide', type: 'search', 'aria-label': 'Search the notebooks', placeholder: 'search all: titles, notes, parts, people', maxlength: 200})
  const archived = el('input', {type: 'checkbox', id: 'log-archived'})
  const askBooks = () => ask('books', {text: bookFind.value, archived: archived.checked})
  bookFind.addEventListener('input', () => { clearTimeout(soon); soon = setTimeout(askBooks, 250) })
  archived.addEventListener('change', askBooks)
  const shelf = el('div', {hidden: true}, el('h3', {text: 'Notebooks'}), bookFind, el('label', {class: 'soft'}, archived, ' archived ones'), books, hits)
  const who = el('p', {class: 'soft'})

  const go = done => { if (done.go) location.href = link(done.go, 'curves') }
  const address = (id, number, entry = null) => { const url = new URL(link({notebook: id, sheet: number}, 'log', entry)); return url.search + url.hash }

  function showBooks(found, entries) {
    shelf.hidden = !found
    if (!found) return
    const rows = keyed(hits, entries.map(e => `${e.id} ${e.number}`), () => {
      const open = el('a', {class: 'act'}), about = el('span', {class: 'soft'}), said = el('span', {})
      return {node: el('li', {}, open, ' ', said, ' ', about), open, about, said}
    })
    for (const e of entries) {
      const row = rows.get(`${e.id} ${e.number}`)
      setText(row.open, `${e.title}, entry ${e.number}`); setAttr(row.open, 'href', address(e.id, e.sheet, e.number))
      setText(row.said, e.summary); setText(row.about, `${e.by}, ${clock(e.at)}`)
    }
    const items = keyed(books, found.map(n => n.id), () => {
      const open = el('a', {class: 'act'}), about = el('span', {class: 'soft'}), act = el('button', {class: 'act', text: ''})
      return {node: el('li', {}, open, ' ', about, ' ', act), open, about, act}
    })
    for (const n of found) {
      const item = items.get(n.id)
      setText(item.open, n.title); setAttr(item.open, 'href', address(n.id, n.sheets[0]?.[0] ?? 1))
      setText(item.about, `${n.by}, ${clock(n.at)}; ${n.entries} ${n.entries === 1 ? 'entry' : 'entries'}`)
      setText(item.act, n.archived ? 'Take out of the archive' : 'Archive')
      item.act.hidden = !shown.may?.archive
      item.act.onclick = () => ask('archive', {id: n.id, back: n.archived}, askBooks)
    }
  }

  let taking = null
  function fetchParts(about) {
    taking = {name: about.name, parts: about.parts, got: []}
    sheet.fold({ask: 'part', part: 0})
  }
  let bringing = null
  async function bring(chosen) {
    if (!chosen) return
    if (chosen.size > 64e6) { sheet.note(`“${chosen.name}” has ${Math.round(chosen.size / 1e6)} MB; a notebook file has at most 64.`, null, {bad: true}); return }
    bringing = {bytes: new Uint8Array(await chosen.arrayBuffer()), token: `import-${fresh++}`}
    waiting.set(bringing.token, go)
    send(0)
  }
  function send(k) {
    const {bytes, token} = bringing
    const parts = Math.max(1, Math.ceil(bytes.length / PART))
    let binary = ''
    for (const byte of bytes.subarray(k * PART, (k + 1) * PART)) binary += String.fromCharCode(byte)
    sheet.fold({ask: 'import', token, part: k, parts, data: btoa(binary)})
  }

  // ---------------------------------------------------------------- the fold

  node.append(el('div', {class: 'two log-fold'},
    el('div', {}, conflict, writing, find, list, empty, more),
    el('div', {}, heading, sheets, choose, compared, el('p', {class: 'acts wrap'}, Object.values(acts)), file, naming, shelf, who)))

  let asked = new URLSearchParams(location.search).get('entry')

  function settle(done) {
    if (!done || done.busy || done.id === seen || !done.id) return
    seen = done.id
    if (done.refused) { sheet.note(done.refused, null, {bad: true}); waiting.delete(done.token); return }
    waiting.get(done.token)?.(done)
    waiting.delete(done.token)
  }

  return {
    update(now) {
      shown = now
      if (now.none) { setText(empty, 'This sheet has no notebook.'); return }
      const may = now.may ?? {}
      conflict.hidden = !now.conflict
      if (now.conflict) setText(clash, `${now.conflict.by} saved this sheet at ${clock(now.conflict.at)} while you were changing it. Nothing is overwritten until you choose.`)
      writing.hidden = !may.write || now.archived
      setClass(list, 'closed', writing.hidden) // nothing can be corrected either
      for (const key of ['book', 'sheet', 'rename', 'import']) acts[key].hidden = !may[{book: 'new', sheet: 'new'}[key] ?? key]
      for (const key of ['sheet', 'rename', 'export', 'verify']) acts[key].disabled = !now.place?.notebook
      setText(heading, now.title ? `Notebook: ${now.title}${now.archived ? ' (archived: nothing more is written in it)' : ''}` : 'Not in a notebook yet')
      sheets.replaceChildren(...((now.sheets ?? []).length > 1 ? now.sheets.map(([n, t]) => el('a', {class: 'act', href: address(now.place.notebook, n), text: t, 'aria-current': n === now.place.sheet ? 'page' : null})) : []))
      const entries = now.entries ?? []
      const rows = keyed(list, entries.map(e => e.number), entry)
      for (const e of entries) rows.get(e.number).set(e)
      more.hidden = !now.more
      setText(empty, entries.length ? '' : now.query ? 'Nothing in this notebook has all of these words.' : 'Nothing is written here yet.')
      fillSelect(a, String(now.frozen?.[0]?.[0] ?? 'sheet')); fillSelect(b, 'sheet')
      choose.hidden = !(now.frozen ?? []).length
      showCompared(now.compared)
      showBooks(now.books, now.hits ?? [])
      setText(who, may.name ? `${may.name}, ${may.role}` : '')
      settle(now.done)
      if (asked && rows.get(Number(asked))) {
        const row = rows.get(Number(asked)).node
        setClass(row, 'asked', true)
        row.focus(); row.scrollIntoView({block: 'center'})
        asked = null
      }
    },
    heard(reply) {
      if (!reply) return
      if (reply.next !== undefined && bringing) send(reply.next)
      if (reply.part !== undefined && taking) {
        taking.got.push(Uint8Array.from(atob(reply.data), c => c.charCodeAt(0)))
        if (taking.got.length < taking.parts) { sheet.fold({ask: 'part', part: taking.got.length}); return }
        const url = URL.createObjectURL(new Blob(taking.got, {type: taking.name.endsWith('.csv') ? 'text/csv' : 'application/zip'}))
        el('a', {href: url, download: taking.name}).click()
        setTimeout(() => URL.revokeObjectURL(url), 10000)
        taking = null
      }
    },
  }
}
