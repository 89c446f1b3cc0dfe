// A signal's colour, dash and marker: the same three wherever it is drawn, so that colour is never alone.

import {svg} from './dom.js'

const DASHES = ['', '9 3', '3 3', '12 3 3 3', '6 3', '2 2', '12 3 2 3 2 3']
const MARKERS = ['disc', 'square', 'diamond', 'up', 'down', 'cross', 'ring']
export const REFERENCE = {colour: 'var(--s-ref)', dash: '2 2', marker: 'ring'}

export function style(k) {
  if (k === undefined || k === null) return REFERENCE
  const turn = Math.floor(k / 7)
  return {colour: `var(--s${k % 7 + 1})`, dash: DASHES[(k + turn) % 7], marker: MARKERS[(k + 2 * turn) % 7]}
}

// The outline of a marker around x, y.
export function markerPath(marker, x, y, r = 4.6) {
  switch (marker) {
    case 'square': return `M${x - r * .9} ${y - r * .9}h${r * 1.8}v${r * 1.8}h${-r * 1.8}z`
    case 'diamond': return `M${x} ${y - r * 1.3}l${r * 1.2} ${r * 1.3}l${-r * 1.2} ${r * 1.3}l${-r * 1.2} ${-r * 1.3}z`
    case 'up': return `M${x} ${y - r * 1.25}l${r * 1.25} ${r * 2.2}h${-r * 2.5}z`
    case 'down': return `M${x} ${y + r * 1.25}l${r * 1.25} ${-r * 2.2}h${-r * 2.5}z`
    case 'cross': return `M${x - r} ${y - r}L${x + r} ${y + r}M${x - r} ${y + r}L${x + r} ${y - r}`
    default: return `M${x - r} ${y}a${r} ${r} 0 1 0 ${2 * r} 0a${r} ${r} 0 1 0 ${-2 * r} 0z`
  }
}

export function markerAttributes(s, x, y, r = 4.6) {
  const open = s.marker === 'ring'
  const line = s.marker === 'cross' || open
  return {
    d: markerPath(s.marker, x, y, open ? r - .8 : r), fill: open ? 'var(--paper)' : line ? 'none' : s.colour,
    stroke: line ? s.colour : 'var(--paper)', 'stroke-width': line ? 2.2 : 1.2,
  }
}

export function swatch(s) {
  return svg('svg', {width: 22, height: 14, 'aria-hidden': 'true', class: 'swatch'},
    svg('path', {d: 'M0 7H22', stroke: s.colour, 'stroke-width': 2.4, 'stroke-dasharray': s.dash}),
    svg('path', markerAttributes(s, 11, 7)))
}
