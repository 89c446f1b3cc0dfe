// The schematic: symbols by IEC 60617 or IEEE 315, wires at the strips' heights, voltages and currents live on it.

import {el, svg, setAttr, setClass, keyed, Pool, px, size} from './dom.js'
import {Blank} from './blanks.js'
import {THIN, engineering, fixed, signed, volts} from './format.js'
import {layout} from './layout.js'

let sheet, box, drawing, pool, values
const blanks = new Map()

export let placed = null // the last layout: the plate stands where it leaves room

export function mount(theSheet) {
  sheet = theSheet
  box = document.getElementById('stage')
  drawing = svg('svg', {role: 'img', id: 'drawing'})
  values = el('div', {class: 'values'})
  box.append(drawing, values)
  pool = new Pool(drawing)
}

export function update(state) {
  const width = size(box).width
  if (!width) return
  const s = state.stage
  const row = px('--row-now') || px('--row')
  const L = placed = layout({width, row, head: px('--head'), foot: px('--foot'), type: px('--t-1'), cells: s.cells, rows: s.rows})
  setAttr(drawing, 'aria-label', `Schematic of the ${s.arrangement ?? ''} stage with live voltages and currents`)
  setClass(box, 'wide', L.inner > width + 1)
  setAttr(drawing, 'width', L.inner)
  setAttr(drawing, 'height', L.bottom)
  const spots = draw(L, s)
  place(spots, s)
}

// ---------------------------------------------------------------- the drawing

function draw(L, s) {
  const p = pool, k = L.k, X = L.x, ieee = s.symbols === 'IEEE 315'
  const spots = []
  p.start()

  const body = (x, y, half = X.half) => {
    if (!ieee) { p.put('rect', {class: 'body', x: x - half, y: y - 6.5 * k, width: 2 * half, height: 13 * k}); return }
    const u = half / 6, h = 7 * k
    p.path(`M${x - half} ${y}H${x + half}`, {class: 'blot'})
    p.line(`M${x - half} ${y}l${u} ${-h}l${2 * u} ${2 * h}l${2 * u} ${-2 * h}l${2 * u} ${2 * h}l${2 * u} ${-2 * h}l${2 * u} ${2 * h}l${u} ${-h}`)
  }
  const upright = (x, y, long = 34 * k) => {
    if (!ieee) { p.put('rect', {class: 'body', x: x - 6.5 * k, y, width: 13 * k, height: long}); return }
    const u = long / 12, h = 7 * k
    p.path(`M${x} ${y}v${long}`, {class: 'blot'})
    p.line(`M${x} ${y}l${h} ${u}l${-2 * h} ${2 * u}l${2 * h} ${2 * u}l${-2 * h} ${2 * u}l${2 * h} ${2 * u}l${-2 * h} ${2 * u}l${h} ${u}`)
  }
  const ground = (x, y) => p.line(`M${x - 9} ${y}h18M${x - 5.5} ${y + 4}h11M${x - 2} ${y + 8}h4`)
  const arrow = (x, y, dir) => p.path(`M${x + 5 * dir} ${y}l${-10 * dir} -4.2v8.4z`, {class: 'tip'})
  const arrowUp = (x, y, up) => p.path(`M${x} ${y}l-4.2 ${up ? 10 : -10}h8.4z`, {class: 'tip'})
  // under half a picoampere is the arithmetic's own grain
  const still = i => Math.abs(i) < 5e-13
  const current = (x, y, i, anchor = 'middle') =>
    p.text(x, y, still(i) ? `0${THIN}A` : engineering(Math.abs(i), 'A'), {class: 'soft halo', 'text-anchor': anchor})
  const part = (key, x, y, text, label, how = 'above') => spots.push({key, x, y, text, label, how})

  // the legs: each row's strip runs on into its resistor
  for (const r of L.rows) {
    const cell = L.cells[r.c], data = s.cells[r.c]
    const [, text, tied] = (r.node === 'minus' ? data.minus : data.plus).find(leg => leg[0] === r.source)
    const out = s.unplugged.includes(r.source)
    const i = data.legs[r.source] ?? 0
    const end = r.node === 'minus' && r.y === cell.ym ? cell.xm : cell.bus
    p.line(`M${out ? 10 : 0} ${r.y}H${end}`)
    if (!tied) {
      body(X.r, r.y)
      part(`${r.c}/${r.node}/${r.source}`, X.r, r.y, text, `resistor, ${r.source}`)
    }
    if (out) p.text(X.text, r.y - 6 * k, 'open', {class: 'soft', 'text-anchor': 'middle'})
    else { current(X.text, r.y - 6 * k, i); if (!still(i)) arrow(X.arrow, r.y, i >= 0 ? 1 : -1) }
  }

  s.cells.forEach((data, c) => drawCell(c, data))

  function drawCell(c, data) {
    const cell = L.cells[c], last = c === s.cells.length - 1
    const {bus, xm, tri, tip, out, ym, yp, mid, half, yf, yc} = cell
    const clip = data.clipped !== 'no'

    // minus node: its rows, then across to the input
    const rowsM = cell.minus.map(L.y)
    const topM = Math.min(...rowsM, ym), lowM = Math.max(...rowsM, ym)
    if (rowsM.length > 1 || (rowsM.length === 1 && rowsM[0] !== ym)) {
      const span = [Math.min(...rowsM), Math.max(...rowsM)]
      if (rowsM.includes(ym)) p.line(`M${bus} ${span[0]}V${span[1]}`)
      else { p.line(`M${bus} ${span[0]}V${span[1]}M${bus} ${nearest(rowsM, ym)}H${xm}`) }
      for (const yy of rowsM) if (rowsM.length > 1) p.dot(bus, yy)
    }
    const upTo = data.feedback === null ? topOf(cell, topM) : yf
    const from = rowsM.length && !rowsM.includes(ym) ? nearest(rowsM, ym) : ym
    p.line(`M${xm} ${Math.min(upTo, from, ym)}V${Math.max(from, ym)}M${xm} ${ym}H${tri}`)
    p.dot(xm, ym)

    // plus node
    const rowsP = cell.plus.map(L.y)
    if (rowsP.length) {
      const ends = [...rowsP, ...(cell.jog ? [] : [yp]), ...(cell.plusGround === 'left' ? [cell.yPlusGround] : [])]
      const top = Math.min(...rowsP)
      p.line(`M${bus} ${Math.min(...ends)}V${Math.max(...ends)}` + (cell.jog ? `M${bus} ${top}H${cell.jog}V${yp}H${tri}` : `M${bus} ${yp}H${tri}`))
      for (const yy of new Set(cell.jog ? rowsP : [...rowsP, yp])) if (ends.length > 1) p.dot(bus, yy)
    }

    // links from earlier cells: on the line of that cell's output
    for (const node of ['minus', 'plus']) for (const [source, text] of data[node]) {
      const from = /^cell (\d+)$/.exec(source)
      if (!from) continue
      const before = L.cells[from[1] - 1]
      const x0 = before.out, to = node === 'minus' ? xm : bus
      const xr = x0 + 29 * L.q, target = node === 'minus' ? ym : yp
      p.line(`M${x0} ${before.mid}H${to}V${target}`)
      body(xr, before.mid, 18 * k)
      part(`${c}/${node}/${source}`, xr, before.mid, text, `resistor, ${source} to cell ${c + 1}`)
      current(xr, before.mid + 37 * k, data.legs[source] ?? 0)
      if (node === 'minus' && before.mid !== ym) p.dot(to, target)
    }

    // grounds of the nodes
    if (cell.plusGround === 'tied' && !rowsP.length) {
      const x = tri - 13 * k
      p.line(`M${tri} ${yp}H${x}V${yp + 12 * k}`)
      ground(x, yp + 12 * k)
    } else if (cell.plusGround === 'left') {
      const yg = cell.yPlusGround
      p.line(`M4 ${yg + 7}V${yg}H${bus}`)
      ground(4, yg + 7)
      body(X.r, yg)
      p.dot(bus, Math.max(...rowsP))
      current(X.text, yg - 6 * k, data.ipg)
      arrow(X.arrow, yg, data.ipg >= 0 ? -1 : 1)
      part(`${c}/plus_ground`, X.r, yg, data.plus_ground, 'resistor, plus node to ground')
    } else if (cell.plusGround === 'down') {
      const x = rowsP.length ? bus : tri - 13 * k
      const y0 = rowsP.length ? Math.max(...rowsP, yp) : yp
      if (!rowsP.length) p.line(`M${tri} ${yp}H${x}`)
      p.line(`M${x} ${y0}v${10 * k}M${x} ${y0 + 40 * k}v${6 * k}`)
      upright(x, y0 + 10 * k, 30 * k)
      ground(x, y0 + 46 * k)
      part(`${c}/plus_ground`, x + (rowsP.length || L.many ? 12 : -12) * k, y0 + (rowsP.length || L.many ? 25 : 32) * k, data.plus_ground, `resistor, plus node of cell ${c + 1} to ground`, rowsP.length || L.many ? 'right' : 'left')
    }
    if (cell.minusGround === 'left') {
      const yg = cell.yMinusGround, to = rowsM.length ? bus : xm
      p.line(`M4 ${yg + 7}V${yg}H${to}` + (rowsM.length ? `M${bus} ${yg}V${topM}` : ''))
      ground(4, yg + 7)
      body(X.r, yg)
      if (rowsM.length) p.dot(bus, topM); else p.dot(xm, yg)
      current(X.text, yg - 6 * k, data.img)
      arrow(X.arrow, yg, data.img >= 0 ? -1 : 1)
      part(`${c}/minus_ground`, X.r, yg, data.minus_ground, 'resistor, minus node to ground')
    } else if (cell.minusGround === 'down') {
      p.line(`M${xm} ${lowM}v${10 * k}M${xm} ${lowM + 40 * k}v${6 * k}`)
      upright(xm, lowM + 10 * k, 30 * k)
      ground(xm, lowM + 46 * k)
      part(`${c}/minus_ground`, xm + 10 * k, lowM + 26 * k, data.minus_ground, `resistor, minus node of cell ${c + 1} to ground`, 'right')
    }

    // the op amp
    p.path(`M${tri} ${mid - half}V${mid + half}L${tip} ${mid}Z`, {class: 'body heavy'})
    p.line(`M${tri + 6 * k} ${ym}h${10 * k}M${tri + 6 * k} ${yp}h${10 * k}m${-5 * k} ${-5 * k}v${10 * k}`)
    const w = tip - tri, rx = tri + w * .35, ry = half * .65
    if (last && !L.many) {
      p.line(`M${rx} ${mid - ry}V${mid - half - k}M${rx - 7} ${mid - half - k}h14M${rx} ${mid + ry}V${mid + half + 4 * k}M${rx - 7} ${mid + half + 4 * k}h14`)
      s.supply.forEach((rail, i) => p.text(rx + 12, mid + (i ? half + 8 * k : 6 * k - half), railText(rail, out - rx - 16, L.type), {class: 'halo'}))
    }
    if (L.many) p.text(tri + w * .52, mid + 5 * k, String(c + 1), {class: 'soft', 'text-anchor': 'middle'})

    // feedback, and the capacitor across it
    if (data.feedback !== null) {
      const xr = (xm + out) / 2, wide = Math.min(X.half, (out - xm) / 2 - 12 * k)
      p.line(`M${xm} ${yf}H${out}V${mid}`)
      body(xr, yf, wide)
      p.dot(out, mid)
      // inside the loop of two cells the node's voltage needs the room
      const aside = L.many && !cell.onTop && data.cf
      part(`${c}/feedback`, aside ? out + 3 : xr, yf, data.feedback, L.many ? `resistor, feedback of cell ${c + 1}` : 'resistor, feedback', aside ? 'right' : L.many ? data.cf ? 'under' : 'above' : 'below')
      if (data.cf) {
        const a = xm + Math.min(20 * k, (out - xm) * .14), b = out - Math.min(20 * k, (out - xm) * .14)
        p.line(`M${a} ${yf}V${yc}H${xr - 3}M${xr + 3} ${yc}H${b}V${yf}`)
        p.path(`M${xr - 3} ${yc - 8 * k}v${16 * k}M${xr + 3} ${yc - 8 * k}v${16 * k}`, {class: 'wire heavy'})
        p.dot(a, yf); p.dot(b, yf)
      }
      part(`${c}/cf`, data.cf ? xr + 9 : xr + wide + 4, data.cf ? yc - 9 * k : yf - 9 * k, data.cf, `capacitor across the feedback of cell ${c + 1}, farads`, 'right')
      const lift = clip && last ? 32 * k : 0
      if (!still(data.ifb)) arrowUp(out, mid - (L.many ? 26 : 50) * k - lift / 2 + (data.ifb > 0 ? 5 : -5), data.ifb <= 0)
      // between two cells: in the middle of the gap
      if (L.many && !last) current((out + L.cells[c + 1].xm) / 2, mid - 36 * k, data.ifb)
      else current(out + 8, mid - (L.many ? 36 : 46) * k - lift, data.ifb, 'start')
    }

    // node voltages
    const virtual = cell.plusGround === 'tied' && !rowsP.length && !clip && data.feedback !== null
    const red = clip ? ' red' : ''
    if (virtual && !L.many) { p.text(xm + 5 * k, ym - 21 * k, 'virtual', {class: 'node halo'}); p.text(xm + 5 * k, ym - 6 * k, 'ground', {class: 'node halo'}) }
    else p.text(xm + (L.many ? 4 : 5) * k, L.many ? mid - half - 3 * k : ym - 6 * k, `${fixed(data.vm)}${THIN}V`, {class: 'node halo' + red})
    if (rowsP.length || (cell.plusGround === 'down' && !L.many)) p.text(cell.jog ? tri - 4 : L.many ? xm + 5 * k : rowsP.length ? xm - 6 * k : tri - 24 * k, yp + 17 * k, `${fixed(data.vp)}${THIN}V`, {class: 'node halo', 'text-anchor': (L.many || rowsP.length) && !cell.jog ? 'start' : 'end'})
    if (!last) {
      p.line(`M${tip} ${mid}H${out}`)
      const before = L.cells[c + 1].xm - 3
      p.text(before, mid + 22 * k, `${fixed(data.vo)}${THIN}V`, {class: 'node halo' + red, 'text-anchor': 'end'})
      if (clip) p.text(before, mid + (cell.plusGround === 'down' ? 71 : 53) * k, data.limited ? 'current limit' : `clipped ${data.clipped}`, {class: 'node red halo', 'text-anchor': 'end'})
    }
  }

  // output and load
  const end = L.cells[L.cells.length - 1], W = L.inner, mid = end.mid
  const clip = s.clipped !== 'no'
  p.line(`M${end.tip} ${mid}H${W - 9}`)
  const xl = L.many ? Math.max(end.out + 10 * k, W - 66 * k) : Math.min(W - 62 * k, end.out + 24 * k + (W - end.out) * .12)
  if (s.load.fitted) {
    const y0 = mid + 14 * k
    p.line(`M${xl} ${mid}V${y0}M${xl} ${y0 + 34 * k}v${9 * k}`)
    if (s.load.resistance) upright(xl, y0); else p.line(`M${xl} ${y0}v${13 * k}M${xl - 9} ${y0 + 13 * k}h18M${xl - 9} ${y0 + 19 * k}h18M${xl} ${y0 + 19 * k}v${15 * k}`)
    ground(xl, y0 + 43 * k)
    p.dot(xl, mid)
    p.text(xl + 13 * k, y0 + 12 * k, 'load', {class: 'soft'})
    if (s.load.resistance) current(xl + 13 * k, y0 + 30 * k, s.load.i, 'start')
  }
  p.put('circle', {cx: W - 5, cy: mid, r: 4, class: 'terminal'})
  const shown = fixed(s.output), fits = name => shown.length * px(name) * .556 <= W - 13 * k - end.out - 6
  p.put('text', {x: W - 13 * k, y: mid - 11 * k, 'text-anchor': 'end', class: 'out-volts halo' + (clip ? ' red' : '') + (!L.many && fits('--t-5') ? '' : fits('--t-4') ? ' less' : ' least')}, shown)
  p.text(W, mid - 11 * k, 'V', {'text-anchor': 'end', class: 'halo'})
  if (clip) {
    p.text(W, mid - (L.many ? 48 : 56) * k, s.cells[s.cells.length - 1].limited ? 'current limit' : 'clipped ' + s.clipped, {'text-anchor': 'end', class: 'node red halo'})
    p.text(W, mid - (L.many ? 33 : 40) * k, `by ${volts(s.over)}${THIN}V`, {'text-anchor': 'end', class: 'node red halo'})
  }
  p.end()
  return spots
}

// a rail's volts, with decimals where they fit before the feedback
const railText = (volts, room, type) => {
  const text = `${signed(volts, 2)}${THIN}V`
  return text.length * type * .54 <= room ? text : text.replace(/\.?0+(?=\u202f)/, '')
}
const nearest = (list, y) => list.reduce((a, b) => Math.abs(b - y) < Math.abs(a - y) ? b : a)
const topOf = (cell, top) => Math.min(cell.ym, top)

// ---------------------------------------------------------------- the values on it

function place(spots, s) {
  keyed(values, spots.map(p => p.key), key => {
    const spot = spots.find(p => p.key === key)
    const cap = key.endsWith('/cf')
    const blank = new Blank(sheet, {
      field: 'part ' + key, label: spot.label, cls: cap ? 'rv cap' : 'rv', unit: cap ? 'F' : '',
      send: text => cap ? {do: 'capacitor', cell: Number(key.split('/')[0]), text} : {do: 'part', part: key, text},
    })
    if (cap) blank.node.placeholder = '+ C'
    return blank
  }, blanks)
  for (const spot of spots) {
    const blank = blanks.get(spot.key), node = blank.node
    blank.set(spot.text)
    const wide = Math.max(4, Math.min(9, spot.text.length + 1))
    if (node.__wide !== wide) { node.style.width = `${wide}ch`; node.__wide = wide; node.__size = [node.offsetWidth, node.offsetHeight] }
    node.__size ??= [node.offsetWidth, node.offsetHeight]
    const [w, h] = node.__size
    const k = placed.k
    const left = spot.how === 'right' ? spot.x : spot.how === 'left' ? spot.x - w : spot.x - w / 2
    const top = spot.how === 'below' ? spot.y + 8 * k : spot.how === 'under' ? spot.y + 6 * k : spot.how === 'right' || spot.how === 'left' ? spot.y - h / 2 : spot.y - (7 * k + h + 1)
    const at = `${Math.round(left)}px,${Math.round(top)}px`
    if (node.__at !== at) { node.style.transform = `translate(${at})`; node.__at = at }
  }
}
