// Curves: three pictures on one ruler. Contributions and headroom are SVG; the transfer curves are a Bokeh figure
// whose frame is set on the same volts, so the rail, the window and the output are single lines through all three.

import {el, svg, setAttr, setText, Pool, px, size} from '../dom.js'
import {THIN, fixed, signed} from '../format.js'
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
  const key = el('ul', {class: 'clips'}, el('li', {class: 'key-head'}, el('span'), el('span'), el('span', {class: 'key-at', text: 'clips'})))
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
    const pt = 24 * k, pb = 30 * k, y1 = Math.round(H - pb), y0 = Math.round(pt)
    const Y = v => y1 - (v - shown.low) / (shown.high - shown.low) * (y1 - y0)
    const clamp = v => Math.max(y0, Math.min(y1, Y(v)))
    const L = 32 * k, R = W - 98 * k, gap = 26 * k
    const w1 = (R - L) * (narrow ? .33 : .29), w3 = (R - L) * (narrow ? .27 : .23)
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
    p.path(`M${L} ${y1}V${y0}`, {class: 'axis'})
    let last = -99
    for (const line of shown.lines) {
      const y = Y(line.value)
      p.path(`M${L} ${y}H${R + 5}`, {class: `ruled ${line.kind}`})
      const at = Math.max(y + 5, last + 15 * k)
      last = at
      p.text(R + 10, at, line.kind, {class: 'soft'})
      p.text(W, at, fixed(line.value, 2), {'text-anchor': 'end'})
    }

    // what each adds, climbing to the output
    const parts = shown.contributions
    p.text(a[0], 12 * k, 'Contributions', {class: 'cap'})
    const wide = (a[1] - a[0] - 6) / Math.max(parts.length, 3)
    // all by name, or all by mark
    const named = parts.every(part => part.style === null || part.name.length * 6.6 * k <= wide - 1)
    let sum = 0
    parts.forEach((part, i) => {
      const s = style(part.style), x = a[0] + 6 + i * wide
      const from = clamp(sum), to = clamp(sum + part.volts)
      p.put('rect', {x: x + wide * .14, y: Math.min(from, to), width: wide * .72, height: Math.max(1.5, Math.abs(from - to)), ...(part.cut ? {fill: 'none', stroke: 'var(--accent)', 'stroke-width': 1.5, 'stroke-dasharray': '3 2', class: 'move'} : {fill: s.colour, class: 'move'})})
      // beyond the scale: it goes on that way
      const end = sum + part.volts
      if (clamp(end) !== Y(end)) p.path(`M${x + wide / 2} ${clamp(end) + (Y(end) < y0 ? -1 : 1)}l-5 ${Y(end) < y0 ? 7 : -7}h10z`, {class: 'tip'})
      p.path(`M${x + wide * .14} ${to}H${x + wide * (i < parts.length - 1 ? 1.86 : 1)}`, {class: 'axis inked'})
      if (wide > 32 * k) p.text(x + wide / 2, Math.min(Math.max(from, to) + 15 * k, y1 + 14 * k), signed(part.volts, 2), {'text-anchor': 'middle', class: 'halo'})
      if (part.style !== null && !named) p.path(markerAttributes(s, x + wide / 2, y1 + 12 * k).d, {...markerAttributes(s, x + wide / 2, y1 + 12 * k)})
      else p.text(x + wide / 2, y1 + 18 * k, part.cut ? wide > 44 * k ? 'cut off' : 'cut' : part.style === null ? 'ref' : part.name, {'text-anchor': 'middle', class: 'soft'})
      sum += part.volts
    })

    // transfer curves: the caption and the present output here, the curves in the figure
    p.text(b[0], 12 * k, narrow ? 'Output against each signal' : 'Output against each signal, the others where they are', {class: 'cap'})
    p.path(`M${b[1]} ${y1}H${b[0]}V${y0}`, {class: 'axis'})
    p.path(`M${b[0]} ${Y(shown.output)}H${b[1]}`, {class: 'present'})
    fitFigure(b[0], y0, b[1] - b[0], y1 - y0, 6)
    const [x0, x1] = range(shown)
    const step = niceStep(Math.max(1e-9, (x1 - x0) / 6.5)), places = Math.max(0, -Math.floor(Math.log10(step) + 1e-9))
    for (let n = Math.ceil(x0 / step - 1e-6); n * step <= x1 + step * 1e-6; n++) {
      const x = b[0] + (n * step - x0) / (x1 - x0) * (b[1] - b[0])
      p.path(`M${x} ${y1}v5`, {class: 'axis'})
      p.text(x, y1 + 18 * k, fixed(n * step, places), {class: 'soft', 'text-anchor': 'middle'})
    }
    p.text(b[1] + 12 * k, y1 + 18 * k, 'V', {class: 'soft'})

    // headroom
    p.text(c[0], 12 * k, narrow ? 'Headroom' : 'Headroom, all corners', {class: 'cap'})
    beams(p, shown.beams, c, Y, clamp, y1, k, shown.high)

    // the present output, tied to the ruler
    const red = shown.clipped !== 'no'
    p.put('rect', {x: 0, y: Y(shown.output) - 10 * k, width: L - 5, height: 20 * k, fill: 'var(--paper)'})
    p.path(`M${L} ${Y(shown.output)}l-6 -4v8z`, {class: 'tip'})
    p.text(L - 8, Y(shown.output) + 5, fixed(shown.output, 2), {'text-anchor': 'end', class: red ? 'node red' : 'node'})
    p.end()

    marks(shown, b, Y, k)
    above.end()
    legend(shown, b, Y, y0, y1, k)
    const zoomed = x0 > shown.x[0] + 1e-9 || x1 < shown.x[1] - 1e-9
    whole.hidden = !zoomed
    if (zoomed) whole.style.transform = `translate(${Math.round(b[1] - 92 * k)}px,${Math.round(y0 + 4)}px)`
    setText(table, `The output is ${fixed(shown.output)} volts. ` + shown.clips.map(q => `${q.name}: ${clipWords(q)}.`).join(' '))
  }

  const range = shown => figure ? [figure.x_range.start, figure.x_range.end] : shown.x

  // where the signal under the hand meets the limit
  let marked = null
  function marks(shown, b, Y, k) {
    marked = null
    const q = shown.clips.find(x => x.name === shown.on && x.at !== null)
    if (!q || q.cell !== null) return
    const [x0, x1] = range(shown)
    if (q.at < x0 || q.at > x1) return
    const x = b[0] + (q.at - x0) / (x1 - x0) * (b[1] - b[0])
    const y = q.side === 'high' ? Y(q.y) - 14 * k : Y(q.y) + 24 * k
    marked = {x, y}
    above.text(Math.max(b[0] + 18, Math.min(b[1] - 18, x)), y, 'clips', {'text-anchor': 'middle', class: 'node red halo'})
  }

  const clipWords = q => q.out ? 'cable out' : q.at === null ? (latest?.clipped === 'no' ? 'not in its range' : 'all through its range')
    : `at ${fixed(q.at, 2)}${THIN}V${q.side === 'low' ? ', low' : ''}${q.cell !== null ? `, cell ${q.cell + 1}` : ''}`

  // how much of the curves runs through a box
  function crossings(at, wide, high, b, Y, shown) {
    const data = figure?.renderers[0]?.data_source.data
    const xs = data?.get ? data.get('x') : data?.x, ys = data?.get ? data.get('y') : data?.y
    if (!xs) return 0
    const [x0, x1] = range(shown)
    // a ruled line through the words counts too, and the word at the mark most
    const ruled = [...shown.lines.map(l => l.value), shown.output].filter(v => Y(v) > at.top + 2 && Y(v) < at.top + high - 2).length
    const word = marked && marked.x > at.left - 24 && marked.x < at.left + wide + 24 && marked.y > at.top - 4 && marked.y < at.top + high + 16
    let inside = 3 * ruled + (word ? 20 : 0)
    for (let q = 0; q < xs.length; q++) for (let j = 1; j < xs[q].length; j++) for (let t = 0; t <= 1; t += .125) {
      const x = b[0] + (xs[q][j - 1] + t * (xs[q][j] - xs[q][j - 1]) - x0) / (x1 - x0) * (b[1] - b[0])
      const y = Y(ys[q][j - 1] + t * (ys[q][j] - ys[q][j - 1]))
      if (x > at.left && x < at.left + wide && y > at.top - 4 && y < at.top + high + 4) inside++
    }
    return inside
  }

  // the key stands where the curves leave room
  let stand = 0
  const items = []
  function legend(shown, b, Y, y0, y1, k) {
    const n = shown.clips.length
    while (items.length < n) {
      const mark = svg('svg', {width: 24, height: 14, 'aria-hidden': 'true'}, svg('path'), svg('path'))
      const name = el('span', {class: 'key-name'}), at = el('span', {class: 'key-at'})
      const node = el('li', {}, mark, name, at)
      items.push({node, mark, name, at})
      key.append(node)
    }
    while (items.length > n) items.pop().node.remove()
    shown.clips.forEach((q, i) => {
      const item = items[i], s = style(q.style)
      setAttr(item.mark.children[0], 'd', 'M0 7H24'); setAttr(item.mark.children[0], 'stroke', s.colour); setAttr(item.mark.children[0], 'stroke-width', 2.4); setAttr(item.mark.children[0], 'stroke-dasharray', s.dash || null)
      for (const [name, value] of Object.entries(markerAttributes(s, 12, 7))) setAttr(item.mark.children[1], name, value)
      setText(item.name, q.name)
      setText(item.at, clipWords(q))
      const state = `${q.name === shown.on ? 'on ' : ''}${q.at !== null && !q.out ? 'hit' : ''}`
      setAttr(item.node, 'class', state)
    })
    const rows = Math.ceil(n / (n > 6 ? 2 : 1))
    const slim = b[1] - b[0] < 220 * k // the strips tell which mark is whose
    setAttr(key, 'class', n > 6 ? 'clips two-columns' : slim ? 'clips slim' : 'clips')
    const high = (rows + 1) * 16 * k
    const wide = (n > 6 ? 380 : slim ? 150 : 232) * k
    const lefts = [Math.max(b[0] + 8, b[1] - wide), b[0] + 10], tops = [y1 - high - 6, y0 + 4, (y0 + y1 - high) / 2]
    const places = tops.flatMap(top => lefts.map(left => ({left, top})))
    // stay where it is unless the curves run through it there and do so less elsewhere
    const crossed = places.map(at => crossings(at, wide, high, b, Y, shown))
    if (stand >= places.length || crossed[stand] > Math.min(...crossed) + 2) stand = crossed.indexOf(Math.min(...crossed))
    const {left, top} = places[stand]
    key.style.transform = `translate(${Math.round(left)}px,${Math.round(top)}px)`
    key.hidden = n > 12 || b[1] - b[0] < 160 * k || (slim && n > 6)
  }

  function beams(p, list, [c0, c1], Y, clamp, y1, k, shownHigh) {
    const n = list.length, step = (c1 - c0) / n
    list.forEach((beam, i) => {
      const x = c0 + step * (i + (n > 2 ? .3 : i === 0 ? .3 : .42))
      const right = (i > 0 || n > 2) && x + 21 + 46 * k < c1 + 4
      const bad = {high: beam.high > beam.limit_high, low: beam.low < beam.limit_low}
      const top = bad.high ? clamp(Math.max(beam.limit_high, beam.low)) : clamp(beam.high), base = bad.low ? clamp(Math.min(beam.limit_low, beam.high)) : clamp(beam.low)
      p.path(`M${x} ${base}V${top}`, {class: 'beam'})
      for (const [end, wrong] of [[beam.high, bad.high], [beam.low, bad.low]]) p.path(`M${x - 7} ${clamp(end)}h14`, {class: wrong ? 'beam wrong' : 'beam'})
      if (bad.high) p.path(`M${x} ${top}V${clamp(beam.high)}`, {class: 'past'})
      if (bad.low) p.path(`M${x} ${base}V${clamp(beam.low)}`, {class: 'past'})
      for (const limit of [beam.limit_high, beam.limit_low]) if (Y(limit) >= 0 && Y(limit) <= y1 + 4) p.path(`M${x - 18} ${Y(limit)}h36`, {class: 'limit'})
      p.put('circle', {cx: x, cy: clamp(beam.now), r: 4.2, class: 'now'})
      const close = Math.abs(clamp(beam.high) - clamp(beam.low)) < 20 * k
      if (n <= 2 || step > 58 * k) {
        p.text(x + 13, clamp(beam.high) + (beam.high > shownHigh ? 14 : bad.high ? -5 : close ? -6 : 9), fixed(beam.high), {class: bad.high ? 'node red halo' : 'halo'})
        if (!close || beam.high - beam.low > 5e-4) p.text(x + 13, clamp(beam.low) + (close ? 16 : bad.low ? 14 : 1), fixed(beam.low), {class: bad.low ? 'node red halo' : 'halo'})
        if (n <= 2 && Y(beam.limit_high) > 0) p.text(right ? x + 21 : x - 21, right && !bad.high ? Math.min(Y(beam.limit_high) + 5, clamp(beam.high) - 8) : Y(beam.limit_high) + 5, fixed(beam.limit_high), {'text-anchor': right ? 'start' : 'end', class: 'soft halo'})
      } else {
        p.text(beam.high > shownHigh ? x + 24 : x, clamp(beam.high) + (beam.high > shownHigh ? 12 : -6), fixed(beam.high, 2), {'text-anchor': 'middle', class: bad.high ? 'node red halo' : 'halo'})
        const deep = clamp(beam.low) + 15 > y1
        if (!close) p.text(deep ? x + 28 * k : x, clamp(beam.low) + (deep ? -4 : 15), fixed(beam.low, 2), {'text-anchor': 'middle', class: bad.low ? 'node red halo' : 'halo'})
      }
      const label = n > 2 && step < 62 * k ? beam.label.replace('output', 'out').replace('inputs', 'in') : beam.label
      p.text(x, y1 + 18 * k, label, {'text-anchor': 'middle', class: 'soft'})
    })
  }

  return {update}
}
