// How numbers are written: tabular figures, a true minus, a narrow no-break space before the unit, zero without a sign.
// The numbers come from the server; here they are only written down.

export const THIN = '\u202f'
const minus = text => text.replace('-', '\u2212')
const missing = x => x === null || x === undefined || !Number.isFinite(x)

export function fixed(x, decimals = 3) {
  if (missing(x)) return '–'
  return minus((Math.abs(x) < 0.5 * 10 ** -decimals ? 0 : x).toFixed(decimals))
}

// volts where they stand in a column: three decimals, fewer where the number is large
export const volts = (x, write = fixed) => write(x, Math.abs(x) < 999.9995 ? 3 : Math.abs(x) < 99999.95 ? 1 : 0)
// volts where there is room for so many characters: fewer decimals rather than over the edge
export const within = (x, characters, decimals = 2, write = fixed) => {
  let text = write(x, decimals)
  for (let d = decimals; text.length > characters && d; text = write(x, --d)) { /* one less */ }
  return text
}
// a weight: four decimals; a large one in four figures
export const weight = x => missing(x) || Math.abs(x) < 99.99995 ? signed(x, 4) : (x > 0 ? '+' : '') + engineering(x, '', 4).replace(THIN, '')

export const signed = (x, decimals = 3) => (x >= 0.5 * 10 ** -decimals ? '+' : '') + fixed(x, decimals)

const PREFIX = {'-15': 'f', '-12': 'p', '-9': 'n', '-6': 'µ', '-3': 'm', 0: '', 3: 'k', 6: 'M', 9: 'G', 12: 'T'}

export function engineering(x, unit = '', figures = 3) {
  if (missing(x)) return '–'
  if (!x) return '0' + THIN + unit
  const [, exponent] = x.toExponential(figures - 1).split('e')
  const power = Math.max(-15, Math.min(12, Math.floor(exponent / 3) * 3))
  const decimals = Math.max(0, Math.min(12, figures - 1 - (exponent - power)))
  return minus((x / 10 ** power).toFixed(decimals)) + THIN + PREFIX[power] + unit
}

// A margin in its unit: volts with three decimals as everywhere, degrees whole, the rest in three figures.
export function margin(x, unit) {
  if (missing(x)) return 'not given'
  const plus = x > 0 ? '+' : ''
  if (unit === 'V') return Math.abs(x) < 0.02 || Math.abs(x) >= 1e4 ? plus + engineering(x, 'V') : signed(x) + THIN + 'V'
  if (unit === '°') return signed(x, Math.abs(x) < 1 ? 1 : 0) + '°'
  if (unit === '°C' || unit === 'K') return signed(x, 0) + THIN + unit
  if (unit === '') return plus + engineering(x, '').replace(THIN, '')
  if (unit === '%') return (Math.abs(x) < 1e5 ? signed(x, 2) : plus + minus(x.toExponential(1).replace('e+', 'e'))) + THIN + '%'
  return plus + engineering(x, unit)
}

// The verdict, two decimals or two figures, without a sign: "0.68 V".
export function verdict(x, unit) {
  const size = Math.abs(x)
  if (unit === 'V' && size >= 9999.5) return engineering(size, 'V')
  if (unit === '%' && size >= 1e5) return size.toExponential(1).replace('e+', 'e') + THIN + '%'
  if (['V', '%'].includes(unit) && size >= 99.95) return fixed(size, 0) + THIN + unit
  if (unit === 'V') return size >= 0.0995 ? fixed(size, 2) + THIN + 'V' : engineering(size, 'V', 2)
  if (unit === '°') return fixed(size, size < 1 ? 1 : 0) + '°'
  if (unit === '°C' || unit === 'K') return fixed(size, 0) + THIN + unit
  if (unit === '%') return fixed(size, 2) + THIN + '%'
  return engineering(size, unit, 2).trimEnd()
}
