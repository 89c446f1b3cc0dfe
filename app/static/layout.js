// Where everything of the schematic stands: rows at the strips' heights, op amps from left to right.
// All lengths are pixels; `k` is the size of symbols, `q` spreads them where there is width.
//
// A later cell's rows stand above an earlier one's, so the last op amp, which makes the output, is at the top right
// whatever the arrangement: output, load and the plate under them stay where they are.
// A feedback leaves over its op amp: in the room above the first row, or on the line of its cell's first row.

export function layout({width, row, head, foot, type, cells, rows}) {
  const k = Math.max(.85, Math.min(1.35, row / 40))
  const many = cells.length > 1
  const y = i => head + (i + .5) * row
  const shown = Math.max(6, rows.length)
  const q = Math.max(k, Math.min(width / 436, k * 1.45))
  const L = {k, q, y, row, type, many, width, cells: [], rows: [], bottom: head + shown * row + foot, shownRows: shown}

  // columns
  const X = many
    ? {r: 24 * q, half: 20 * k, text: 73 * q, arrow: 101 * q, bus: 107 * q}
    : {r: 48 * q, half: 24 * k, text: 114 * q, arrow: 146 * q + 8 * k, bus: 176 * q}
  L.x = X
  let x = X.bus
  for (let c = 0; c < cells.length; c++) {
    const bus = x
    const xm = bus + (many ? 6 * k : 16 * k)
    const tri = xm + (many ? 36 * q : Math.max(56 * k, 3.85 * type))
    const tip = tri + (many ? 42 * k : 74 * k)
    const out = tip + (many ? 8 * q : 23 * k)
    L.cells.push({bus, xm, tri, tip, out, half: (many ? 36 : 42) * k})
    x = out + 54 * q
  }
  // a window too narrow for it scrolls the drawing
  L.inner = Math.max(width, L.cells[L.cells.length - 1].out + 80 * q)

  // heights
  for (let c = cells.length - 1; c >= 0; c--) {
    const cell = L.cells[c]
    const mine = rows.map((r, i) => [r, i]).filter(([r]) => r[1] === c)
    const minus = mine.filter(([r]) => r[2] === 'minus').map(([, i]) => i)
    const plus = mine.filter(([r]) => r[2] === 'plus').map(([, i]) => i)
    const first = mine.length ? mine[0][1] : 0
    const onTop = first === 0
    let pin
    if (onTop) pin = first
    else pin = Math.max(first + 1, minus.length && plus.length ? minus[minus.length - 1] : 0)
    Object.assign(cell, {minus, plus, first, onTop, ym: y(pin), yp: y(pin + 1), mid: y(pin) + row / 2})
    const over = cell.mid - Math.max(74 * k, cell.half + 32 * k)
    cell.yf = onTop && pin === first ? Math.min(over, head - 34 * k) : !many ? over : Math.min(y(first), cell.mid - cell.half - 20 * k)
    if (onTop && many) cell.yf = head - (cells[c].cf ? 42 : 34) * k
    cell.yc = cell.yf - 27 * k
    cell.minusGround = cells[c].minus_ground === null ? null : many ? 'down' : 'left'
    cell.plusGround = cells[c].plus_ground === null ? null
      : cells[c].plus_ground === '0' ? 'tied' : plus.length && !many ? 'left' : 'down'
    // more than one minus row: the + wire goes round the lowest of them
    cell.jog = minus.length > 1 && plus.length && !many ? cell.bus + 8 * k : null
    if (cell.minusGround === 'left') {
      cell.yMinusGround = (minus.length ? Math.min(y(minus[0]), cell.ym) : cell.ym) - 42 * k
      if (minus.length && minus[0] === 0) cell.yMinusGround = head - 22 * k
    }
    if (cell.plusGround === 'left') cell.yPlusGround = y(shown - 1) + Math.max(row / 2 + 15 * k, Math.min(row, row / 2 + foot - 18))
  }
  for (let i = 0; i < rows.length; i++) {
    const [source, c, node] = rows[i]
    L.rows.push({source, c, node, y: y(i)})
  }

  // where the plate fits: under all the op amps, or under the last one alone, beside what hangs from its + input
  const last = L.cells[L.cells.length - 1]
  const load = cell => cell === last ? 60 * k : 0
  const hangs = cell => cell.plusGround === 'down' ? row / 2 + 56 * k : cell.plusGround === 'tied' && !cell.plus.length ? row / 2 + 26 * k : 0
  const low = cell => cell.mid + Math.max(cell.half, load(cell), hangs(cell)) + 4
  L.free = {bottom: L.bottom - 6, places: L.inner <= width ? [{left: L.cells[0].bus + 16 * k, top: Math.max(...L.cells.map(low))}] : []}
  if (many && L.inner <= width) L.free.places.push({left: last.bus + 10 * k, top: low(last)})
  if (!many && L.inner <= width) L.free.places.push({left: last.tri + 4 * k, top: last.mid + load(last) + 4})
  return L
}
