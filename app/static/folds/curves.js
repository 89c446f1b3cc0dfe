// Curves: three pictures on one ruler. Contributions and headroom are SVG; the transfer curves are a Bokeh figure
// whose frame is set on the same volts, so the rail, the window and the output are single lines through all three.

import {el, svg, setAttr, setText, Pool, px, size} from '../dom.js'
import {THIN, fixed, signed, within} from '../format.js'
import {style, markerAttributes} from '../marks.js'

const SIDE = 8 // px of the figure left and right of its frame, so that markers at the ends are whole

// the smallest of 1, 2, 5 times a power of ten that is not under `least`
function niceStep(least) {
  const power = 10 ** Math.floor(Math.log10(least))
  return [1, 2, 5, 10].map(m => m * power).find(step => step >= least * (1 - 1e-9))
}

export function mount(node, sheet) {
  const under = svg('svg', {role: 'img', 'aria-label': 'Contributions, transfer curves and headroom on one voltage ruler', class: 'under'})
  const over = svg('svg', {'aria-hidden': 'true', class: 'over'})
  const slot = sheet.figure('curves', 'transfer')
  const whole = el('button', {class: 'act whole', text: 'whole range', hidden: true, onclick: () => sheet.fold({do: 'whole'})})
  const last = el('li', {class: 'soft'})
  const key = el('ul', {class: 'clips', 'aria-label': 'Where each signal drives the output into a limit'}, last)
  const table = el('p', {class: 'vh', role: 'note'})
  node.className = 'curves'
  node.append(under, slot, over, key, whole, table)
  const below = new Pool(under), above = new Pool(over)
  let figure = null, frame = '', heard = false, latest = null

  // the figure's own size follows the page's; its data come from the server
  function fitFigure(x, y, width, height, bottom) {
    figure ??= window.Bokeh?.documents?.map(d => d.get_model_by_name('transfer')).find(Boolean) ?? null
    if (!figure) { setTimeout(() => sheet.redraw(), 150); return }
    if (!heard) {
      heard = true
      for (const end of ['start', 'end']) figure.x_range.properties[end].change.connect(() => { if (latest) requestAnimationFrame(() => update(latest)) })
    }
    const wanted = [x, y, width, height, bottom].map(Math.round).join()
    slot.style.transform = `translate(${Math.round(x - SIDE)}px,${Math.round(y)}px)`
    if (wanted === frame) return
    frame = wanted
    slot.style.width = `${Math.round(width) + 2 * SIDE}px`
    slot.style.height = `${Math.round(height + bottom)}px`
    figure.setv({
      width: Math.round(width) + 2 * SIDE, height: Math.round(height + bottom),
      min_border_left: SIDE, min_border_right: SIDE, min_border_top: 0, min_border_bottom: Math.round(bottom),
      frame_width: Math.round(width), frame_height: Math.round(height),
    })
  }

  function update(shown) {
    latest = shown
    const W = size(node).width
    if (!W) return
    const k = px('--t-1') / 14
    const top0 = size(node).top
    const H = Math.max(236, Math.min(560, innerHeight - top0 - 8))
    node.style.height = `${H}px`
    const narrow = W < 800
    const pt = 24 * k, pb = 46 * k, y1 = Math.round(H - pb), y0 = Math.round(pt)
    const Y = v => y1 - (v - shown.low) / (shown.high - shown.low) * (y1 - y0)
    const clamp = v => Math.max(y0, Math.min(y1, Y(v)))
    const L = 32 * k, R = W - 98 * k, gap = 26 * k, crowded = shown.beams.length > 2
    const w1 = (R - L) * (narrow ? .33 : .29), w3 = (R - L) * (crowded ? .32 : narrow ? .27 : .23)
    const a = [L, L + w1], b = [Math.round(L + w1 + gap), Math.round(R - w3 - gap)], c = [R - w3, R]
    const p = below
    for (const s of [under, over]) { setAttr(s, 'width', W); setAttr(s, 'height', H) }
    p.start(); above.start()

    // the window the target asks for, edged in ink
    const inside = shown.lines.filter(l => l.kind === 'window').map(l => l.value)
    if (inside.length === 2) p.put('rect', {x: L, y: Y(inside[0]), width: R - L, height: Y(inside[1]) - Y(inside[0]), fill: 'var(--raised)'})

    // the ruler
    const decimals = Math.max(0, -Math.floor(Math.log10(Math.abs(shown.ticks[1] - shown.ticks[0] || 1)) + 1e-9))
    for (const v of shown.ticks) {
      p.path(`M${L} ${Y(v)}H${R}`, {class: 'grid'})
      if (Math.abs(Y(v) - Y(shown.output)) > 15 * k) p.text(L - 8, Y(v) + 5, fixed(v, decimals), {class: 'soft', 'text-anchor': 'end'})
    }
    const fine = Math.max(2, decimals + 1) // one more than the scale has
    p.path(`M${L} ${y1}V${y0}`, {class: 'axis'})
    for (const [x, anchor] of [[L - 8, 'end'], [W, 'end']]) p.text(x, 12 * k, 'V', {class: 'soft', 'text-anchor': anchor})
    let lowest = -99
    for (const line of shown.lines) {
      const y = Y(line.value)
      p.path(`M${L} ${y}H${R + 5}`, {class: `ruled ${line.kind}`})
      const at = Math.max(y + 5, lowest + 15 * k)
      lowest = at
      p.text(R + 10, at, line.kind, {class: 'soft'})
      p.text(W, at, fixed(line.value, 2), {'text-anchor': 'end'})
    }

    // what each adds, climbing to the output
    const parts = shown.contributions
    p.text(a[0], 12 * k, 'Contributions', {class: 'cap'})
    const wide = (a[1] - a[0] - 6) / Math.max(parts.length, 3)
    // all by name, or all by mark
    const named = parts.every(part => part.style === null || part.name.length * 6.6 * k <= wide - 1)
    // their volts: two decimals, one, or written upward, as the room is
    const longest = d => Math.max(...parts.map(part => signed(part.volts, d).length)) * 7.2 * k
    const places = longest(fine) <= wide ? fine : fine - 1, upward = longest(places) > wide + 5
    let sum = 0
    parts.forEach((part, i) => {
      const s = style(part.style), x = a[0] + 6 + i * wide
      const from = clamp(sum), to = clamp(sum + part.volts)
      p.put('rect', {x: x + wide * .14, y: Math.min(from, to), width: wide * .72, height: Math.max(1.5, Math.abs(from - to)), ...(part.cut ? {fill: 'none', stroke: 'var(--accent)', 'stroke-width': 1.5, 'stroke-dasharray': '3 2', class: 'move'} : {fill: s.colour, class: 'move'})})
      // beyond the scale: it goes on that way
      const end = sum + part.volts
      if (clamp(end) !== Y(end)) p.path(`M${x + wide / 2} ${clamp(end) + (Y(end) < y0 ? -1 : 1)}l-5 ${Y(end) < y0 ? 7 : -7}h10z`, {class: 'tip'})
      p.path(`M${x + wide * .14} ${to}H${x + wide * (i < parts.length - 1 ? 1.86 : 1)}`, {class: 'axis inked'})
      const under = Math.max(from, to), text = signed(part.volts, places), mid = x + wide / 2
      if (!upward) p.text(mid, under + 15 * k > y1 - 1 ? Math.min(from, to) - 5 : under + 15 * k, text, {'text-anchor': 'middle', class: 'halo'})
      else if (wide > 12.5 * k) {
        const above = under + 6 + text.length * 7.3 * k > y1
        p.text(0, 0, text, {'text-anchor': above ? 'start' : 'end', class: 'halo', transform: `translate(${mid + 5 * k} ${above ? Math.min(from, to) - 5 : under + 6}) rotate(-90)`})
      }
      if (part.style !== null && !named) p.path(markerAttributes(s, x + wide / 2, y1 + 12 * k).d, {...markerAttributes(s, x + wide / 2, y1 + 12 * k)})
      else p.text(x + wide / 2, y1 + 18 * k, part.cut ? wide > 44 * k ? 'cut off' : 'cut' : part.style === null ? 'ref' : part.name, {'text-anchor': 'middle', class: 'soft'})
      sum += part.volts
    })

    // transfer curves: the caption and the present output here, the curves in the figure
    p.text(b[0], 12 * k, b[1] - b[0] < 322 * k ? 'Output against each signal' : 'Output against each signal, the others where they are', {class: 'cap'})
    p.path(`M${b[1]} ${y1}H${b[0]}V${y0}`, {class: 'axis'})
    p.path(`M${b[0]} ${Y(shown.output)}H${b[1]}`, {class: 'present'})
    fitFigure(b[0], y0, b[1] - b[0], y1 - y0, 6)
    const [x0, x1] = range(shown)
    const step = niceStep(Math.max(1e-9, (x1 - x0) / 6.5)), digits = Math.max(0, -Math.floor(Math.log10(step) + 1e-9))
    for (let n = Math.ceil(x0 / step - 1e-6); n * step <= x1 + step * 1e-6; n++) {
      const x = b[0] + (n * step - x0) / (x1 - x0) * (b[1] - b[0])
      p.path(`M${x} ${y1}v5`, {class: 'axis'})
      p.text(x, y1 + 18 * k, fixed(n * step, digits), {class: 'soft', 'text-anchor': 'middle'})
    }
    p.text(b[1] + (fixed(x1, digits).length * 4 + 7) * k, y1 + 18 * k, 'V', {class: 'soft'})

    // headroom
    p.text(c[0], 12 * k, narrow ? 'Headroom' : 'Headroom, all corners', {class: 'cap'})
    beams(p, shown, c, Y, clamp, y0, y1, k)

    // the present output, tied to the ruler
    const red = shown.clipped !== 'no'
    p.put('rect', {x: 0, y: Y(shown.output) - 10 * k, width: L - 5, height: 20 * k, fill: 'var(--paper)'})
    p.path(`M${L} ${Y(shown.output)}l-6 -4v8z`, {class: 'tip'})
    p.text(L - 8, Y(shown.output) + 5, within(shown.output, 6, fine), {'text-anchor': 'end', class: red ? 'node red' : 'node'})
    p.end()

    marks(shown, b, Y, k)
    above.end()
    strip(shown, L, W, y1 + 26 * k, k)
    const zoomed = x0 > shown.x[0] + 1e-9 || x1 < shown.x[1] - 1e-9
    whole.hidden = !zoomed
    if (zoomed) whole.style.transform = `translate(${Math.round(b[1] - 92 * k)}px,${Math.round(y0 + 4)}px)`
    setText(table, `The output is ${fixed(shown.output)} volts. ` + shown.clips.map(q => `${q.name}: ${clipWords(q)}.`).join(' '))
  }

  const range = shown => figure ? [figure.x_range.start, figure.x_range.end] : shown.x

  // where the signal under the hand meets the limit
  function marks(shown, b, Y, k) {
    const q = shown.clips.find(x => x.name === shown.on && x.at !== null)
    if (!q || q.cell !== null) return
    const [x0, x1] = range(shown)
    if (q.at < x0 || q.at > x1) return
    const x = b[0] + (q.at - x0) / (x1 - x0) * (b[1] - b[0])
    const y = q.side === 'high' ? Y(q.y) - 14 * k : Y(q.y) + 24 * k
    above.text(Math.max(b[0] + 18, Math.min(b[1] - 18, x)), y, 'clips', {'text-anchor': 'middle', class: 'node red halo'})
  }

  const clipWords = q => q.out ? 'cable out' : q.at === null ? (latest?.clipped === 'no' ? 'not in its range' : 'all through its range')
    : `at ${fixed(q.at, 2)}${THIN}V${q.side === 'low' ? ', low' : ''}${q.cell !== null ? `, cell ${q.cell + 1}` : ''}`

  // the key: a strip of its own under the pictures; who clips comes first, what does not fit is counted
  const items = []
  const GAP = 18
  function strip(shown, L, R, top, k) {
    const hit = q => q.at !== null && !q.out
    const rank = q => q.name === shown.on ? 0 : hit(q) ? 1 : 2
    let order = [...shown.clips]
    const wide = q => 26 + (q.name.length + (words(q) ? words(q).length + 1 : 0)) * 7 * k + GAP
    const room = R - L - end(shown).length * 7 * k
    const full = order.reduce((sum, q) => sum + wide(q), 0) > room
    if (full) order.sort((one, two) => rank(one) - rank(two))
    let used = full ? 90 * k : 0
    const fits = order.filter(q => (used += wide(q)) <= room)
    const more = order.length - fits.length
    while (items.length < fits.length) {
      const mark = svg('svg', {width: 24, height: 14, 'aria-hidden': 'true'}, svg('path'), svg('path'))
      const name = el('span', {class: 'key-name'}), at = el('span', {class: 'key-at'})
      const node = el('li', {}, mark, name, at)
      items.push({node, mark, name, at})
      last.before(node)
    }
    while (items.length > fits.length) items.pop().node.remove()
    fits.forEach((q, i) => {
      const item = items[i], s = style(q.style)
      setAttr(item.mark.children[0], 'd', 'M0 7H24'); setAttr(item.mark.children[0], 'stroke', s.colour); setAttr(item.mark.children[0], 'stroke-width', 2.4); setAttr(item.mark.children[0], 'stroke-dasharray', s.dash || null)
      for (const [name, value] of Object.entries(markerAttributes(s, 12, 7))) setAttr(item.mark.children[1], name, value)
      setText(item.name, q.name)
      setText(item.at, words(q))
      setAttr(item.node, 'class', `${q.name === shown.on ? 'on ' : ''}${hit(q) ? 'hit' : ''}`)
    })
    setText(last, [more ? `and ${more} more` : '', end(shown)].filter(Boolean).join(', '))
    key.style.transform = `translate(${Math.round(L)}px,${Math.round(top)}px)`
    key.style.width = `${Math.round(R - L)}px`
  }
  const words = q => q.out ? 'cable out' : q.at === null ? (latest?.clipped === 'no' || through(latest) ? '' : 'clipped all through') : `clips ${q.side}${q.cell !== null ? ` in cell ${q.cell + 1}` : ''} at ${fixed(q.at, 2)}${THIN}V`
  const through = shown => shown.clipped !== 'no' && shown.clips.every(q => q.out || q.at === null)
  const end = shown => through(shown) ? `clipped ${shown.clipped} wherever any one of them goes` : shown.clipped === 'no' && shown.clips.every(q => q.at === null) && !shown.clips.every(q => q.out) ? 'none clips within its range' : ''

  // what no label may lie on: ruled lines, the beams themselves, labels that stand already
  function placer(lines, k) {
    const taken = lines.map(y => ({x0: -1e4, x1: 1e4, y0: y - 1, y1: y + 1, cost: 1}))
    const over = (q, x0, y0, x1, y1) => q.x0 < x1 && q.x1 > x0 && q.y0 < y1 && q.y1 > y0
    const block = (x0, y0, x1, y1) => taken.push({x0, x1, y0, y1, cost: 4})
    // the first of the places, [x, y, anchor], that is free; else the least bad one
    const put = (text, places, more, kind) => {
      const wide = text.length * 7.3 * k
      let best = null
      for (const [x, y, anchor] of places) {
        const x0 = anchor === 'end' ? x - wide : anchor === 'middle' ? x - wide / 2 : x
        const box = [x0, y - 11 * k, x0 + wide, y + 1]
        const cost = taken.reduce((sum, q) => sum + (over(q, ...box) ? q.cost : 0), 0)
        if (!best || cost < best.cost) best = {cost, x, y, anchor, box}
        if (!cost) break
      }
      block(...best.box)
      kind.text(best.x, best.y, text, {...more, 'text-anchor': best.anchor})
    }
    return {block, put}
  }

  function beams(p, shown, [c0, c1], Y, clamp, y0, y1, k) {
    const list = shown.beams, n = list.length, step = (c1 - c0) / n
    const {block, put} = placer(shown.lines.map(l => Y(l.value)), k)
    const at = i => c0 + step * (i + (n > 2 ? .36 : i === 0 ? .3 : .42))
    list.forEach((beam, i) => block(at(i) - 8, clamp(beam.high) - 2, at(i) + 8, clamp(beam.low) + 2))
    for (const [i, beam] of list.entries()) for (const y of [Y(beam.limit_high), Y(beam.limit_low)]) block(at(i) - 19, y - 1, at(i) + 19, y + 1)
    block(c1 + 6, -1e4, 1e4, 1e4)
    const labels = []
    list.forEach((beam, i) => {
      const x = at(i)
      const bad = {high: beam.high > beam.limit_high, low: beam.low < beam.limit_low}
      const top = bad.high ? clamp(Math.max(beam.limit_high, beam.low)) : clamp(beam.high), base = bad.low ? clamp(Math.min(beam.limit_low, beam.high)) : clamp(beam.low)
      p.path(`M${x} ${base}V${top}`, {class: 'beam'})
      for (const [end, wrong] of [[beam.high, bad.high], [beam.low, bad.low]]) {
        const y = clamp(end), past = Math.sign(y - Y(end)) // beyond the scale it has no end here: an arrow, as the bars have
        p.path(past ? `M${x - 6} ${y + past * 8}L${x} ${y + past}L${x + 6} ${y + past * 8}` : `M${x - 7} ${y}h14`, {class: wrong ? 'beam wrong' : 'beam'})
      }
      if (bad.high) p.path(`M${x} ${top}V${clamp(beam.high)}`, {class: 'past'})
      if (bad.low) p.path(`M${x} ${base}V${clamp(beam.low)}`, {class: 'past'})
      for (const limit of [beam.limit_high, beam.limit_low]) if (Y(limit) >= 0 && Y(limit) <= y1 + 4) p.path(`M${x - 18} ${Y(limit)}h36`, {class: 'limit'})
      p.put('circle', {cx: x, cy: clamp(beam.now), r: 4.2, class: 'now'})
      // the extremes: beside their ends, or beyond them; one number where the two are one
      const write = v => within(v, n <= 2 ? 8 : 7, n <= 2 ? 3 : 2)
      const floor = y => Math.max(y0 + 11 * k, Math.min(y1 - 2, y))
      const near = (v, out) => {
        const y = clamp(v), ys = [y + 5 * k, y + out * 9 * k, y - out * 7 * k + 5 * k, y + out * 16 * k, y + out * 26 * k].map(floor)
        return [...ys.map(to => [x + 12, to, 'start']), ...ys.map(to => [x - 12, to, 'end']), [x, floor(y - 7 * k), 'middle'], [x, floor(y + 17 * k), 'middle']]
      }
      labels.push([2, write(beam.high), near(beam.high, -1), bad.high])
      if (beam.high - beam.low > 5e-4) labels.push([2, write(beam.low), near(beam.low, 1), bad.low])
      // the limit it must keep: dashed, with its number where there is room for one
      if (n <= 2) for (const [limit, out] of [[beam.limit_high, -1], [beam.limit_low, 1]]) {
        const y = Y(limit)
        if (y < y0 || y > y1) continue
        const ys = [y + 5 * k, y + out * 8 * k + 5 * k, y - out * 8 * k + 5 * k, y + out * 15 * k, y - out * 15 * k]
        labels.push([1, write(limit), ys.flatMap(to => [[x + 21, to, 'start'], [x - 21, to, 'end']]), false])
      }
      const label = n > 2 && step < 80 * k ? beam.label.replace('output', 'out').replace('inputs', 'in') : beam.label
      p.text(x, y1 + 18 * k, label, {'text-anchor': 'middle', class: 'soft'})
    })
    for (const [rank, text, places, wrong] of labels.sort((one, two) => two[0] - one[0])) put(text, places, {class: wrong ? 'node red halo' : rank === 1 ? 'soft halo' : 'halo'}, p)
  }

  return {update}
}
