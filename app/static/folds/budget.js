// Budget: error terms with their share, the boards as a histogram in the allowed band, and what can be done about it.

import {el, setAttr, setClass, setText} from '../dom.js'
import {THIN, engineering, fixed, margin} from '../format.js'
import {Figure, column, saveText, table, takers, words} from './figures.js'

export const styles = true

const volts = (x, figures = 3) => engineering(x, 'V', figures)
const percent = (x, decimals = 1) => `${fixed(x * 100, decimals)}${THIN}%`
const grade = x => `±${+(x * 100).toPrecision(3)}${THIN}%`.replace('-', '−')
const WHERE = {present: 'where the signals are', highest: 'at the highest corner', lowest: 'at the lowest corner'}

export function mount(node, sheet) {
  node.className = 'budget'
  let shown = null
  const figure = new Figure(sheet, 'budget', 'boards')
  const pages = words('What to look at', [['terms', 'Terms'], ['tighten', 'What to tighten'], ['op amps', 'Which op amp'], ['heat', 'Heat and mishaps'], ['compare', 'Compare']],
    page => sheet.fold({do: 'page', page}))
  const points = words('Where', [['present', 'present'], ['highest', 'highest'], ['lowest', 'lowest']], point => sheet.fold({do: 'point', point}))
  const page = el('div', {class: 'page', tabindex: 0, role: 'region', 'aria-label': 'Budget, details'})
  const caption = el('span', {class: 'cap'})
  const progress = el('div', {class: 'prog', role: 'progressbar', 'aria-label': 'Boards drawn', 'aria-valuemin': 0, 'aria-valuemax': 100}, el('i'))
  const ran = el('span', {role: 'status'})
  const stop = el('button', {class: 'act', text: 'Stop', onclick: () => sheet.fold({do: 'stop'})})
  const sizes = words('Boards to draw', [[20000, '20k'], [200000, '200k'], [1000000, '1M']], size => sheet.fold({do: 'size', size}))
  const sum = el('p', {class: 'sum-line'})
  const facts = Object.fromEntries(['known shift', '95 %', 'worst case', 'yield'].map(k => [k, el('b')]))
  sum.append(...Object.entries(facts).map(([k, b]) => el('span', {}, `${k.replace(' %', THIN + '%')} `, b)), points.node)
  const drawn = el('div', {class: 'drawn'},
    el('div', {class: 'capline'}, caption, takers(sheet, () => figure, 'boards', 'Histogram')),
    el('div', {class: 'figure', role: 'img', 'aria-label': 'Histogram of the boards\' errors over the allowed band; the line under it says where 95 % of them lie'}, figure.slot), progress,
    el('div', {class: 'ran'}, ran, el('span', {}, sizes.node, ' ', stop)))
  node.append(el('div', {class: 'left'}, el('div', {class: 'heads'}, pages.node), page), drawn, sum)

  // ---------------------------------------------------------------- pages, each built once

  const built = {}
  const terms = () => {
    const t = table([{text: 'term'}, {text: 'limit, mV', class: 'r'}, {text: 'u, mV', class: 'r'}, {text: 'share of variance'}], 'Error terms')
    t.node.querySelectorAll('th')[3].style.width = '34%'
    const csv = el('button', {class: 'act', text: 'CSV', 'aria-label': 'Terms as CSV', onclick: () => sheet.fold({do: 'csv', what: 'terms'})})
    const bars = []
    return {node: el('div', {}, t.node, el('p', {}, csv)), update(s) {
      const most = s.terms[0]?.[4] || 1
      const v = column(s.terms.flatMap(r => [r[2], r[3]]), 'V', {least: 2, most: 2})
      t.heads(['term', v.head('limit'), v.head('u'), 'share of variance'])
      t.set(s.terms.map((r, i) => {
        const known = r[1] === 'rounding' || r[1] === 'source resistance' || r[1] === 'finite gain'
        if (known) return [r[0], ['', 'r'], ['', 'r'], `known, ${r[5] > 0 ? '+' : ''}${volts(r[5])}`]
        bars[i] ??= (() => { const bar = el('div', {class: 'bar'}), text = el('span', {class: 'n'}); return {bar, text, node: el('div', {class: 'share'}, bar, text)} })()
        const width = `${(r[4] / most * 58).toFixed(1)}%`
        if (bars[i].bar.style.width !== width) bars[i].bar.style.width = width
        setText(bars[i].text, percent(r[4]))
        return [r[0], [v.write(r[2]), 'r'], [v.write(r[3]), 'r'], [bars[i].node, '']]
      }))
    }}
  }

  const tighten = () => {
    const told = el('p', {class: 'note'}), rest = el('p', {class: 'soft'})
    const t = table([{text: 'resistor'}, {text: 'fit one of', class: 'r'}, {text: 'coefficient', class: 'r'}], 'Resistors to tighten')
    const trims = table([{text: 'after'}, {text: '|shift| + 95 %', class: 'r'}], 'What remains')
    const all = el('p', {}, 'All resistors at ', ...[[0.01, '1'], [0.005, '0.5'], [0.001, '0.1'], [0.0001, '0.01']].flatMap(([v, text]) => [
      el('button', {class: 'act', text: `${text}${THIN}%`, onclick: () => sheet.fold({do: 'tolerance', tolerance: v})}), ' ']))
    const slopes = table([{text: 'quantity'}, {text: 'for', class: 'r'}, {text: 'output moves', class: 'r'}], 'Sensitivities')
    const places = el('p', {class: 'soft'})
    return {node: el('div', {}, told, t.node, rest, all, el('h3', {text: 'What remains after a trim'}), trims.node, places,
      el('h3', {text: 'Sensitivities'}), slopes.node),
    update(s) {
      const m = s.more, plan = m.plan
      t.node.hidden = !plan?.changes?.length
      if (plan) {
        const [at, worst] = Object.entries(plan.errors).reduce((a, b) => b[1] > a[1] ? b : a)
        const left = `${volts(worst)} ${WHERE[at]}`
        setText(told, !plan.possible ? `Better resistors alone do not reach ±${volts(plan.wanted)}: ${left} would be left. In the way: ${plan.obstacle}.`
          : plan.changes.length ? `${plan.changes.length === 1 ? 'One better resistor is' : `${plan.changes.length} better resistors are`} enough for ±${volts(plan.wanted)}: ${left} would be left.`
            : `±${volts(plan.wanted)} is met as it is: |shift| + 95${THIN}% is ${left}.`)
        t.set(plan.changes.map(c => [c.part, grade(c.tolerance), `${fixed(c.temperature_coefficient * 1e6, 0)}${THIN}ppm/K`]).map(r => [r[0], [r[1], 'r'], [r[2], 'r']]))
        setText(rest, plan.possible && plan.changes.length ? `Costs about ${fixed(plan.extra_cost, 1)} more 1${THIN}% resistors: representative prices, ask your supplier.` : '')
      } else { setText(told, m.problem); setText(rest, '') }
      const d = column(m.slopes.map(q => q.volts), 'V', {plus: true})
      slopes.heads(['quantity', 'for', d.head('output moves')])
      slopes.set(m.slopes.map(q => [q.part, [q.per.replace(' ', THIN), 'r'], [d.write(q.volts), 'r']]))
      const trim = m.trim, v = column(Object.values(trim), 'V')
      trims.heads(['after', v.head(`|shift| + 95${THIN}%`)])
      trims.set([['no trim', trim.untrimmed], ['an offset trim', trim.offset], ['offset and gain', trim.offset_and_gain], ['software correction', trim.software]]
        .map(([name, x]) => [name, [v.write(x), s.accuracy !== null && x > s.accuracy ? 'r bad' : 'r']]))
      setText(places, `The worst over both corners, either with one signal at its other end, and where the signals are: after a trim the corners alone say too little, and without one it can be more than at the three points above. Trimmed at nominal temperature and supply, offset with the signals at 0${THIN}V, gain at the farthest corner; software corrects every weight.`)
    }}
  }

  const opAmps = () => {
    const t = table([{text: ''}], 'Op amps against the checks')
    const told = el('p', {class: 'soft', role: 'status'})
    const file = el('input', {type: 'file', accept: '.csv,text/csv', class: 'file', 'aria-label': 'Your own list of op amps, CSV', onchange: async () => {
      if (file.files[0]) sheet.fold({do: 'own', text: await file.files[0].text()})
      file.value = ''
    }})
    const buttons = new Map()
    const take = name => { if (!buttons.has(name)) buttons.set(name, el('button', {class: 'act', text: 'take', 'aria-label': `take ${name}`, onclick: () => sheet.fold({do: 'take', name})})); return buttons.get(name) }
    const names = new Map()
    const look = name => { if (!names.has(name)) names.set(name, el('button', {class: 'act', text: name, 'aria-label': `figures of ${name} and their sources`, onclick: () => sheet.fold({do: 'entry', name})})); return names.get(name) }
    // columns that tell the op amps apart; what is clear or alike with every one is said in a sentence
    let every = false, rows = null
    const wide = el('button', {class: 'act', 'aria-pressed': 'false', text: 'all checks', onclick: () => { every = !every; setAttr(wide, 'aria-pressed', String(every)); drawRows() }})
    const alike = el('p', {class: 'soft'}), scroll = el('div', {class: 'sideways', tabindex: 0, role: 'region', 'aria-label': 'Op amps against the checks'}, t.node)
    const MARK = {tight: '△', short: '✕'}
    function drawRows() {
      const m = rows, seen = m.columns.map(([key, title]) => {
        const all = m.rows.map(r => r.checks[key] ?? null), margins = all.map(c => c?.[2] ?? null).filter(x => x !== null)
        const statuses = new Set(all.map(c => c?.[1] ?? ''))
        const spread = margins.length ? Math.max(...margins) - Math.min(...margins) : 0, size = Math.max(0, ...margins.map(Math.abs))
        const unit = all.find(Boolean)?.[3] ?? ''
        return {key, title, clear: statuses.size === 1 && statuses.has('clear'), same: statuses.size === 1 && spread <= .03 * size, status: [...statuses][0],
          margin: margins[0] ?? null, unit, col: column(margins, unit, {plus: true, most: unit === '°' ? 1 : unit === '°C' ? 0 : 3})}
      })
      const shown = every || m.rows.length < 2 ? seen : seen.filter(c => !c.clear && !c.same)
      const clear = seen.filter(c => c.clear).map(c => c.title.toLowerCase()), same = seen.filter(c => c.same && !c.clear)
      setText(alike, every || m.rows.length < 2 ? '' : [clear.length ? `Clear with every one: ${clear.join(', ')}.` : '',
        same.length ? `The same with every one: ${same.map(c => `${c.title.toLowerCase()} ${c.margin === null ? c.status : `${margin(c.margin, c.unit)} (${c.status})`}`).join(', ')}.` : ''].filter(Boolean).join(' '))
      t.heads(['op amp', '', 'short ✕', 'tight △', ...shown.map(c => c.col.head(c.title))])
      t.set(m.rows.map(r => [
        [look(r.name), r.name === m.now ? 'now' : ''], [take(r.name), ''], [String(r.short), r.short ? 'r short' : 'r'], [String(r.tight), r.tight ? 'r tight' : 'r'],
        ...shown.map(({key, col}) => { const c = r.checks[key]; return c ? [c[1] === 'unknown' ? '–' : c[2] === null ? c[1] : `${MARK[c[1]] ? `${MARK[c[1]]} ` : ''}${col.write(c[2])}`, `r ${c[1]}`] : ['', ''] }),
      ]))
      m.rows.forEach((r, i) => setAttr(t.body.rows[i], 'title', [r.note, m.sources[r.name]].filter(Boolean).join('. ')))
    }
    const head = el('h3'), about = el('p', {class: 'soft'}), figures = table([{text: 'figure'}, {text: 'value', class: 'r'}, {text: 'source'}], 'Figures and their sources')
    const back = el('button', {class: 'act', text: 'Back to the table', onclick: () => sheet.fold({do: 'entry', name: head.textContent})})
    const card = el('div', {}, el('p', {class: 'heads'}, head, about, back), figures.node)
    return {wide: true, node: el('div', {class: 'op-amps'}, el('p', {class: 'heads'}, told, wide, el('label', {class: 'act'}, 'Your own list, CSV', file),
      el('button', {class: 'act', text: 'A list to fill in', title: 'Your own op amps, or the one on the sheet, with every column that a list needs', onclick: () => sheet.fold({do: 'csv', what: 'list'})}),
      el('button', {class: 'act', text: 'CSV', 'aria-label': 'This table as CSV', onclick: () => sheet.fold({do: 'csv', what: 'op amps'})})), card, alike, scroll,
      el('p', {class: 'soft', text: 'Classes are invented and representative; types are from published or remembered figures. Check your data sheet before you build.'})),
    update(s) {
      const m = s.more
      setText(told, m.tried < m.of ? `${m.tried} of ${m.of} tried` : `${m.of} tried in this stage; the fewest that fall short first`)
      rows = m
      drawRows()
      card.hidden = !m.entry
      if (m.entry) {
        setText(head, m.entry.name); setText(about, m.entry.note)
        figures.set(m.entry.rows.map(([name, value, unit, source]) => [name, [value === null ? 'none' : asPrinted(value, unit), 'r'], source]))
      }
    }}
  }

  // a gain in decibels, a slew rate by the microsecond, as data sheets give them
  const asPrinted = (value, unit) => unit === 'V/V' ? `${fixed(20 * Math.log10(value), 0)}${THIN}dB` : unit === 'V/s' ? `${+(value / 1e6).toPrecision(3)}${THIN}V/µs`
    : ['°C', 'K/W', ''].includes(unit) ? `${+value.toPrecision(4)}${THIN}${unit}`.replace('-', '−').trimEnd() : engineering(value, unit)

  const heat = () => {
    const hot = table([{text: 'part'}, {text: 'most', class: 'r'}, {text: 'of its rating', class: 'r'}], 'Dissipation')
    const caution = el('p', {class: 'note'})
    const mishaps = table([{text: 'mishap'}, {text: 'what it does'}], 'Mishaps')
    return {node: el('div', {}, hot.node, caution, el('h3', {text: 'Mishaps'}), mishaps.node,
      el('p', {class: 'soft', text: 'Estimated with silicon junctions of 0.6 V at the inputs; 10 mA is the usual most into an input. The data sheet in hand decides.'})),
    update(s) {
      const m = s.more, rows = m.heat.resistors.map(r => [r.name, r.dissipation_most, r.rating]).sort((a, b) => b[1] - a[1])
      const w = column([...m.heat.op_amps.map(a => a.dissipation_most), ...rows.slice(0, 8).map(r => r[1])], 'W')
      hot.heads(['part', w.head('most'), 'of its rating'])
      const amps = m.heat.op_amps.map(a => [`op amp, ${a.name}`, [w.write(a.dissipation_most), 'r'],
        a.junction === null ? ['junction: thermal resistance not given', 'r soft'] : [`junction ${fixed(a.junction, 0)}${THIN}°C`, m.junction_most !== null && a.junction > m.junction_most ? 'r bad' : 'r']])
      hot.set([...amps, ...rows.slice(0, 8).map(([n, p, most]) => [n, [w.write(p), 'r'], [most > 0 ? percent(p / most) : 'none left', p > most ? 'r bad' : p > most / 2 ? 'r tight' : 'r']])])
      const burns = rows.filter(r => r[1] > r[2] / 2)
      setText(caution, burns.length ? `Caution, burns: ${burns.map(r => r[0]).join(', ')} ${burns.length > 1 ? 'pass' : 'passes'} half the derated rating.` : '')
      const mA = x => engineering(x, 'A')
      mishaps.set([
        ['output shorted to ground', `${mA(m.short.current)}, ${engineering(m.short.dissipation, 'W')} in the op amp${m.short.junction === null ? '' : `, junction ${fixed(m.short.junction, 0)}${THIN}°C`}`],
        ...m.inputs.map(x => [`${x.state}, signals at their worst`, [`${mA(x.current)} into the ${x.pin === 'minus' ? '−' : '+'} input of cell ${x.cell + 1}, from ${x.signals.join(', ')}`, x.current > 0.01 ? 'bad' : '']]),
        ...(m.inputs.length ? [] : [['unpowered, or a rail missing', 'no input is driven past a junction']]),
        ...m.past.map(x => [`${x.name} at ${fixed(x.volts, 1)}${THIN}V`, x.clipped === 'no' ? `output ${fixed(x.output)}${THIN}V, within its limits` : `output stops ${x.clipped} at ${fixed(x.output)}${THIN}V; the others' currents change by up to ${mA(x.others)}`]),
      ])
    }}
  }

  const compare = () => {
    const t = table([{text: 'margin'}, {text: 'held', class: 'r'}, {text: 'now', class: 'r'}, {text: 'difference', class: 'r'}], 'Margins held and now')
    const told = el('p', {class: 'note'})
    const acts = el('p', {class: 'heads'}, el('button', {class: 'act', text: 'Hold this stage', onclick: () => sheet.fold({do: 'hold'})}), el('button', {class: 'act', text: 'Let go', onclick: () => sheet.fold({do: 'let go'})}))
    return {node: el('div', {}, acts, told, t.node), update(s) {
      const m = s.more
      setText(told, m.held === null ? 'Hold a stage, change it, and see here and in the plots of Response what moved.' : `Held: ${m.held}`)
      t.node.hidden = m.held === null
      t.set(m.rows.map(([title, unit, old, was, now, is, d]) => {
        const v = column([old, now], unit, {plus: true, most: unit === '°' ? 1 : unit === '°C' ? 0 : 3}), said = (x, status) => status === 'unknown' ? 'not given' : v.say(x)
        return [title, [said(old, was), `r ${was}`], [said(now, is), `r ${is}`], [v.say(d), 'r']]
      }))
    }}
  }
  const makers = {terms, tighten, 'op amps': opAmps, heat, compare}

  function update(s) {
    shown = s
    const W = node.clientWidth
    if (!W) return
    const top = node.getBoundingClientRect().top + scrollY
    const H = Math.max(320, Math.min(640, innerHeight - top - sum.offsetHeight - 14))
    pages.set(s.page); points.set(s.point); sizes.set(s.size)
    built[s.page] ??= makers[s.page]()
    const now = built[s.page]
    if (page.firstChild !== now.node) page.replaceChildren(now.node)
    setClass(node, 'wide', !!now.wide)
    const height = `${Math.round(H - pages.node.parentNode.offsetHeight - 4)}px`
    if (page.style.maxHeight !== height) page.style.maxHeight = height
    now.update(s)
    const right = drawn.clientWidth
    if (right) figure.fit(right, Math.max(200, H - drawn.firstChild.offsetHeight - drawn.lastChild.offsetHeight - 14), {left: 12, bottom: 32, right: 12})
    setText(caption, `Error ${WHERE[s.point]}, ${s.unit}: ${s.boards.draws.toLocaleString('en').replaceAll(',', THIN)} boards${s.accuracy === null ? '' : ', allowed band'}`)
    const share = Math.round(100 * s.boards.draws / s.boards.wanted)
    progress.firstChild.style.width = `${Math.min(100, share)}%`
    setAttr(progress, 'aria-valuenow', Math.min(100, share))
    const ends = column([s.boards.low, s.boards.high], 'V', {plus: true})
    setText(ran, `95${THIN}% of them from ${ends.write(s.boards.low)} to ${ends.say(s.boards.high)}${s.holds ? '' : `; the first-order ±${volts(s.budget.expanded)} is not good to two figures here`}`)
    stop.disabled = !s.running
    setText(facts['known shift'], (s.budget.shift > 0 ? '+' : '') + volts(s.budget.shift))
    setText(facts['95 %'], `±${volts(s.budget.expanded)}`)
    setText(facts['worst case'], volts(s.budget.worst))
    setText(facts.yield, s.boards.yield === null ? 'type an accuracy' : `${percent(s.boards.yield, 2)} in ±${volts(s.accuracy)}`)
  }

  return {update, heard(reply) { if (reply?.csv !== undefined) saveText(reply.csv, reply.name); if (reply?.said) sheet.note(reply.said) }}
}
