// The wire's other end: acts go up a few at a time, one frame comes back for them.
// While a frame is under way the newest value of each slider waits; a lost answer frees the wire after a while.

const PATIENCE = 4000 // ms

const LOOK_AGAIN = 1500 // ms between looks whether the server is back

export class Line {
  // apply(frame, fields), silent(lost, never), gone(): the session is over and cannot be taken up again
  constructor(apply, silent, gone = () => {}) {
    this.apply = apply
    this.silent = silent
    this.gone = gone
    this.dead = false
    this.queue = []
    this.seq = 0
    this.shown = 0
    this.busy = false
    this.wire = null
    this.fields = new Set() // of the acts under way
    this.whole = false
    const join = () => {
      if (this.wire) return
      this.wire = window.sumwrightWire
      this.wire.listen(text => this.heard(JSON.parse(text)))
      for (const doc of window.Bokeh?.documents ?? []) doc.on_event('connection_lost', () => this.end())
      this.pump()
    }
    if (window.sumwrightWire) join()
    else {
      document.addEventListener('sumwright:wire', join, {once: true})
      setTimeout(() => { if (!this.wire) silent(true, true) }, 3 * PATIENCE)
    }
  }

  // `newest` names what only the newest act matters of: a slider under the hand.
  act(act, newest = null) {
    if (this.dead) { this.gone(); return }
    const last = this.queue[this.queue.length - 1]
    if (newest && last && last.newest === newest) last.act = act
    else this.queue.push({act, newest})
    this.pump()
  }

  pump() {
    if (!this.wire || this.dead || this.busy || !(this.queue.length || this.whole)) return
    this.busy = true
    this.seq += 1
    const acts = this.queue.splice(0, 64).map(q => q.act)
    this.fields = new Set([...this.whole ? this.fields : [], ...acts.map(a => a.field).filter(Boolean)])
    this.wire.send(JSON.stringify({seq: this.seq, acts, whole: this.whole}))
    this.whole = false
    // an answer that does not come may have carried changes: the next one has to bring everything
    this.timer = setTimeout(() => { this.silent(true); this.whole = true; this.free(this.seq) }, PATIENCE)
  }

  heard(frame) {
    this.silent(false)
    this.apply(frame, frame.seq === this.seq ? this.fields : new Set())
    if (!frame.seq || frame.seq !== this.seq) return
    clearTimeout(this.timer)
    // the frame counts as shown when what it changed, the figures too, has been painted
    const painted = () => setTimeout(() => this.free(frame.seq), 0)
    if (document.hidden) painted()
    else requestAnimationFrame(painted)
  }

  free(seq) {
    clearTimeout(this.timer)
    this.busy = false
    this.shown = seq
    document.dispatchEvent(new CustomEvent('sumwright:shown', {detail: seq}))
    this.pump()
  }

  // The server ended the session (it was restarted, or the line broke): a page cannot join another one. So look until
  // the server answers, then open the page anew; the sheet itself is in the notebook.
  end() {
    if (this.dead) return
    this.dead = true
    clearTimeout(this.timer)
    this.silent(true)
    this.gone()
    const look = async () => {
      const there = await fetch(new URL('./tokens.css', import.meta.url), {cache: 'no-store'}).then(r => r.status < 500, () => false)
      if (there) reopen()
      else setTimeout(look, LOOK_AGAIN)
    }
    setTimeout(look, LOOK_AGAIN)
  }
}

// What is to be said after the page has opened itself anew: kept in the tab, as nothing else outlives the page.
const KEPT = 'sumwright: the server was away'

function reopen() {
  try { sessionStorage.setItem(KEPT, '1') } catch { /* no storage, no sentence */ }
  location.reload()
}

export function wasAway() {
  try {
    const away = sessionStorage.getItem(KEPT) !== null
    sessionStorage.removeItem(KEPT)
    return away
  } catch { return false }
}
