// Budget: error terms with their share, the boards as a histogram in the allowed band, and what can be done about it.

import {el, setAttr, setClass, setText} from '../dom.js'
import {THIN, engineering, fixed, margin, signed} from '../format.js'
import {Figure, saveText, table, takers, words} from './figures.js'

export const styles = true

const mV = (x, decimals = 2) => fixed(x * 1e3, decimals)
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
      t.set(s.terms.map((r, i) => {
        const known = r[1] === 'rounding' || r[1] === 'source resistance' || r[1] === 'finite gain'
        if (known) return [r[0], ['', 'r'], ['', 'r'], `known, ${signed(r[5] * 1e3, 2)}${THIN}mV`]
        bars[i] ??= (() => { const bar = el('div', {class: 'bar'}), text = el('span', {class: 'n'}); return {bar, text, node: el('div', {class: 'share'}, bar, text)} })()
        const width = `${(r[4] / most * 58).toFixed(1)}%`
        if (bars[i].bar.style.width !== width) bars[i].bar.style.width = width
        setText(bars[i].text, percent(r[4]))
        return [r[0], [mV(r[2]), 'r'], [mV(r[3]), 'r'], [bars[i].node, '']]
      }))
    }}
  }

  const tighten = () => {
    const told = el('p', {class: 'note'}), rest = el('p', {class: 'soft'})
    const t = table([{text: 'resistor'}, {text: 'fit one of', class: 'r'}, {text: 'coefficient', class: 'r'}], 'Resistors to tighten')
    const trims = table([{text: 'after'}, {text: '|shift| + 95 %, mV', class: 'r'}], 'What remains')
    const all = el('p', {}, 'All resistors at ', ...[[0.01, '1'], [0.005, '0.5'], [0.001, '0.1'], [0.0001, '0.01']].flatMap(([v, text]) => [
      el('button', {class: 'act', text: `${text}${THIN}%`, onclick: () => sheet.fold({do: 'tolerance', tolerance: v})}), ' ']))
    const slopes = table([{text: 'sensitivity'}, {text: 'for', class: 'r'}, {text: 'output moves, mV', class: 'r'}], 'Sensitivities')
    return {node: el('div', {}, told, t.node, rest, all, el('h3', {text: 'Sensitivities'}), slopes.node, el('h3', {text: 'What remains'}), trims.node,
      el('p', {class: 'soft', text: 'Trimmed at nominal temperature and supply, offset with the signals at 0 V, gain at the farthest corner. Software corrects every weight.'})),
    update(s) {
      const m = s.more, plan = m.plan
      t.node.hidden = !plan?.changes?.length
      if (plan) {
        const worst = Math.max(...Object.values(plan.errors))
        setText(told, !plan.possible ? `Better resistors alone do not reach ±${mV(plan.wanted)}${THIN}mV: ${mV(worst)} would be left. In the way: ${plan.obstacle}.`
          : plan.changes.length ? `${plan.changes.length === 1 ? 'One better resistor is' : `${plan.changes.length} better resistors are`} enough for ±${mV(plan.wanted)}${THIN}mV: ${mV(worst)} would be left.`
            : `±${mV(plan.wanted)}${THIN}mV is met as it is: ${mV(worst)} at the worst point.`)
        t.set(plan.changes.map(c => [c.part, grade(c.tolerance), `${fixed(c.temperature_coefficient * 1e6, 0)}${THIN}ppm/K`]).map(r => [r[0], [r[1], 'r'], [r[2], 'r']]))
        setText(rest, plan.possible && plan.changes.length ? `Costs about ${fixed(plan.extra_cost, 1)} more 1${THIN}% resistors: representative prices, ask your supplier.` : '')
      } else { setText(told, m.problem); setText(rest, '') }
      slopes.set(m.slopes.map(q => [q.part, [q.per, 'r'], [signed(q.volts * 1e3, 3), 'r']]))
      const trim = m.trim
      trims.set([['nothing', trim.untrimmed], ['an offset trim', trim.offset], ['offset and gain', trim.offset_and_gain], ['software correction', trim.software]]
        .map(([name, v]) => [name, [mV(v), s.accuracy !== null && v > s.accuracy ? 'r bad' : 'r']]))
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
    const head = el('h3'), about = el('p', {class: 'soft'}), figures = table([{text: 'figure'}, {text: 'value', class: 'r'}, {text: 'source'}], 'Figures and their sources')
    const back = el('button', {class: 'act', text: 'Back to the table', onclick: () => sheet.fold({do: 'entry', name: head.textContent})})
    const card = el('div', {}, el('p', {class: 'heads'}, head, about, back), figures.node)
    return {wide: true, node: el('div', {class: 'op-amps'}, el('p', {class: 'heads'}, told, el('label', {class: 'act'}, 'Your own list, CSV', file),
      el('button', {class: 'act', text: 'CSV', 'aria-label': 'This table as CSV', onclick: () => sheet.fold({do: 'csv', what: 'op amps'})})), card, t.node,
      el('p', {class: 'soft', text: 'Classes are invented and representative; types are from published or remembered figures. Check your data sheet before you build.'})),
    update(s) {
      const m = s.more
      setText(told, m.tried < m.of ? `${m.tried} of ${m.of} tried` : `${m.of} tried in this stage; the fewest that fall short first`)
      t.heads(['op amp', '', 'short', 'tight', ...m.columns.map(c => c[1])])
      t.set(m.rows.map(r => [
        [look(r.name), r.name === m.now ? 'now' : ''], [take(r.name), ''], [String(r.short), r.short ? 'r short' : 'r'], [String(r.tight), r.tight ? 'r tight' : 'r'],
        ...m.columns.map(([key]) => { const c = r.checks[key]; return c ? [c[1] === 'unknown' ? '–' : c[2] === null ? c[1] : `${margin(c[2], c[3])}${c[1] === 'clear' ? '' : ` ${c[1]}`}`, `r ${c[1]}`] : ['', ''] }),
      ]))
      card.hidden = !m.entry
      if (m.entry) {
        setText(head, m.entry.name); setText(about, m.entry.note)
        figures.set(m.entry.rows.map(([name, value, unit, source]) => [name, [value === null ? 'none' : ['°C', 'K/W', 'V/V', ''].includes(unit) ? `${+value.toPrecision(4)}${THIN}${unit}`.replace('-', '−') : engineering(value, unit), 'r'], source]))
      }
      m.rows.forEach((r, i) => setAttr(t.body.rows[i], 'title', [r.note, m.sources[r.name]].filter(Boolean).join('. ')))
    }}
  }

  const heat = () => {
    const hot = table([{text: 'part'}, {text: 'most', class: 'r'}, {text: 'of its rating', class: 'r'}], 'Dissipation')
    const caution = el('p', {class: 'note'})
    const mishaps = table([{text: 'mishap'}, {text: 'what it does'}], 'Mishaps')
    return {node: el('div', {}, hot.node, caution, el('h3', {text: 'Mishaps'}), mishaps.node,
      el('p', {class: 'soft', text: 'Estimated with silicon junctions of 0.6 V at the inputs; 10 mA is the usual most into an input. The data sheet in hand decides.'})),
    update(s) {
      const m = s.more, rows = m.heat.resistors.map(r => [r.name, r.dissipation_most, r.rating]).sort((a, b) => b[1] - a[1])
      const amps = m.heat.op_amps.map(a => [`op amp, ${a.name}`, [engineering(a.dissipation_most, 'W'), 'r'],
        a.junction === null ? ['junction: thermal resistance not given', 'r soft'] : [`junction ${fixed(a.junction, 0)}${THIN}°C`, m.junction_most !== null && a.junction > m.junction_most ? 'r bad' : 'r']])
      hot.set([...amps, ...rows.slice(0, 8).map(([n, w, most]) => [n, [engineering(w, 'W'), 'r'], [most > 0 ? percent(w / most) : 'none left', w > most ? 'r bad' : w > most / 2 ? 'r tight' : 'r']])])
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
      t.set(m.rows.map(([title, unit, old, was, now, is, d]) => [title, [margin(old, unit), `r ${was}`], [margin(now, unit), `r ${is}`], [d === null ? '–' : margin(d, unit), 'r']]))
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
    setText(caption, `Error ${WHERE[s.point]}, mV: ${s.boards.draws.toLocaleString('en').replaceAll(',', THIN)} boards${s.accuracy === null ? '' : ', allowed band'}`)
    const share = Math.round(100 * s.boards.draws / s.boards.wanted)
    progress.firstChild.style.width = `${Math.min(100, share)}%`
    setAttr(progress, 'aria-valuenow', Math.min(100, share))
    setText(ran, `95${THIN}% of them from ${signed(s.boards.low * 1e3, 2)} to ${signed(s.boards.high * 1e3, 2)}${THIN}mV${s.holds ? '' : `; the first-order ±${mV(s.budget.expanded)} is not good to two figures here`}`)
    stop.disabled = !s.running
    setText(facts['known shift'], `${signed(s.budget.shift * 1e3, 2)}${THIN}mV`)
    setText(facts['95 %'], `±${mV(s.budget.expanded)}${THIN}mV`)
    setText(facts['worst case'], `${mV(s.budget.worst)}${THIN}mV`)
    setText(facts.yield, s.boards.yield === null ? 'type an accuracy' : `${percent(s.boards.yield, 2)} in ±${mV(s.accuracy)}${THIN}mV`)
  }

  return {update, heard(reply) { if (reply?.csv !== undefined) saveText(reply.csv, reply.name) }}
}
