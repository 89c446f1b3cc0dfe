// Help on hover and on focus: what a quantity is, its unit, and where its figure comes from. The words are put on a
// blank when the pointer or the focus first reaches it, so that a frame never carries them.

const SHEET = 'your data sheet'
const LIMIT = 'A limit without a stated distribution counts as rectangular (JCGM 101:2008, 6.4.2).'

const OP_AMP = {
  open_loop_gain: ['Open-loop gain at DC', 'V/V', `${SHEET}: large-signal voltage gain; 100 dB is 100k`],
  gain_bandwidth: ['Gain-bandwidth product: where the gain would be 1 with one pole', 'Hz', SHEET],
  second_pole: ['Second pole of the open-loop gain; empty for none', 'Hz', `${SHEET}: from the phase at crossover`],
  slew_rate: ['Fastest the output can move, both ways', 'V/s', `${SHEET}; 13 V/µs is 13M`],
  dropout_high: ['Least distance of the output below the + rail, unloaded', 'V', `${SHEET}: output swing`],
  dropout_low: ['Least distance of the output above the − rail, unloaded', 'V', `${SHEET}: output swing`],
  dropout_resistance: ['Extra dropout for each ampere of load', 'Ω', `${SHEET}: swing at two loads, difference over current`],
  output_current: ['Most the output can source or sink', 'A', `${SHEET}: short-circuit or output current`],
  output_resistance: ['Output resistance, loop open', 'Ω', SHEET],
  common_mode_high: ['Least distance of the inputs below the + rail; negative: beyond it', 'V', `${SHEET}: common-mode range`],
  common_mode_low: ['Least distance of the inputs above the − rail; negative: beyond it', 'V', `${SHEET}: common-mode range`],
  input_resistance: ['Resistance between the two inputs', 'Ω', SHEET],
  differential_capacitance: ['Capacitance between the inputs', 'F', SHEET],
  common_mode_capacitance: ['Capacitance from each input to ground', 'F', SHEET],
  offset_voltage: ['Offset voltage, limit to either side', 'V', `${SHEET}, the maximum. ${LIMIT}`],
  offset_drift: ['Change of the offset voltage with temperature, limit to either side', 'V/K', SHEET],
  bias_current: ['Mean current into the inputs, limit to either side', 'A', SHEET],
  offset_current: ['Difference of the currents into the inputs, limit to either side', 'A', SHEET],
  cmrr: ['Common-mode rejection', 'V/V', `${SHEET}; 80 dB is 10k`],
  psrr: ['Rejection of a change of the total supply', 'V/V', `${SHEET}; 80 dB is 10k`],
  noise_voltage: ['Voltage noise density, white part', 'V/√Hz', SHEET],
  noise_voltage_corner: ['Frequency where 1/f noise equals the white part', 'Hz', `${SHEET}: from two points of the curve`],
  noise_current: ['Current noise density of each input, white part', 'A/√Hz', SHEET],
  noise_current_corner: ['Frequency where 1/f noise equals the white part', 'Hz', SHEET],
  supply_least: ['Least total supply it works on', 'V', SHEET],
  supply_most: ['Most total supply it works on', 'V', SHEET],
  supply_current: ['Supply current of each amplifier', 'A', SHEET],
  thermal_resistance: ['Thermal resistance, junction to ambient; empty if not known', 'K/W', SHEET],
  junction_most: ['Most the junction may reach', '°C', SHEET],
  per_package: ['Amplifiers in one package; they heat each other', 'count', SHEET],
}
const FIGURES = {
  'supply high': ['The + rail, nominal', 'V', 'your supply'],
  'supply low': ['The − rail, nominal; 0 for a single supply', 'V', 'your supply'],
  'supply tolerance': ['Tolerance of each rail', '%', `your supply. ${LIMIT}`],
  'load resistance': ['Resistance the output drives; empty for none', 'Ω', 'what is connected'],
  'load capacitance': ['Capacitance the output drives: cable, converter input', 'F', 'about 100 pF a metre of cable (common practice)'],
  'target low': ['Lower end of the window the output must keep to', 'V', 'what is asked'],
  'target high': ['Upper end of the window the output must keep to', 'V', 'what is asked'],
  'target accuracy': ['How far the output may be off, to either side, at 95 %', 'V', 'what is asked'],
  'target noise': ['Most noise at the output over the noise band', 'V RMS', 'what is asked'],
  'target bandwidth': ['Bandwidth asked of every signal', 'Hz', 'what is asked'],
  'reference voltage': ['Voltage of the reference that makes the offset', 'V', 'its data sheet'],
  'reference tolerance': ['Tolerance of the reference', '%', `its data sheet. ${LIMIT}`],
  'reference source_resistance': ['Resistance of the reference, in series with its leg', 'Ω', 'its data sheet'],
  'ambient low': ['Coldest it gets', '°C', 'the place'], 'ambient high': ['Hottest it gets', '°C', 'the place'],
  'ambient nominal': ['Temperature the values are stated at', '°C', 'usually 25 °C'],
  'resistor least': ['Least resistor to be used', 'Ω', 'the drawer'], 'resistor most': ['Most resistor to be used', 'Ω', 'the drawer'],
  'resistor tolerance': ['Tolerance of each resistor, to either side', '%', `its marking (IEC 60062). ${LIMIT}`],
  'resistor temperature_coefficient': ['Temperature coefficient of each resistor, limit to either side', 'ppm/K', 'its data sheet'],
  'resistor power': ['Rating of each resistor at 70 °C, falling to zero at 155 °C', 'W', 'its data sheet'],
  'signal low': ['Lower end of the signal’s range', 'V', 'the source'], 'signal high': ['Upper end of the signal’s range', 'V', 'the source'],
  'signal value': ['Where the signal is just now', 'V', 'your hand'],
  'signal source_resistance': ['Resistance of the source, in series with its leg; it counts in the weight', 'Ω', 'the source’s data sheet'],
  'signal frequency': ['Highest frequency that matters for this signal', 'Hz', 'the job'],
  'band 0': ['Lower end of the band the RMS noise is taken over', 'Hz', 'the job'], 'band 1': ['Upper end of the band the RMS noise is taken over', 'Hz', 'the job'],
  stray: ['Capacitance of the board at each inverting node', 'F', '2 pF to 5 pF for a tidy board (common practice)'],
}
const STARTS = {
  value: ['Where the signal is just now', 'V', 'your hand, or the slider’s'],
  weight: ['What the output shall change by per volt of the signal', 'V/V', 'what is asked; below it, what the resistors make'],
  part: ['A fitted resistor: type 4k7, 4.7k or 0R47 (IEC 60062)', 'Ω', 'what is fitted; Choices finds preferred values (IEC 60063)'],
  name: ['What the signal is called', 'words', 'the job'],
}
const CAPACITOR = ['Capacitor across the feedback: type 22p or 4p7; empty for none', 'F', 'what is fitted; the margin Phase margin says how much it wants']
const REFERENCE = {
  value: ['Voltage of the reference that makes the offset', 'V', 'its data sheet'],
  weight: ['Offset: where the output shall be with every signal at 0 V', 'V', 'what is asked; below it, what the resistors make'],
}
// what is no blank, by its name
const CONTROLS = {
  'Arrangement': 'Where the legs go: which op amps, which inputs. Taking another one realises the same weights anew.',
  'Take an op amp from the list': 'Every figure of it at once; each can still be typed over.',
  'Add a signal': 'One strip more, with a leg; its weight and range can be typed.',
  'Reorder': 'Move signals up and down among the rows of their input, or remove them.',
  'Dark': 'Dark paper, for a dark lab', 'Light': 'Light paper',
  'IEC 60617': 'Resistors as rectangles', 'IEEE 315': 'Resistors as zigzags',
  'Title of the sheet': 'What the sheet is called, in the notebook and on reports',
  'op amp, every figure': 'Take another op amp, or type its figures',
  'resistors, series and limits': 'Series, tolerance, temperature coefficient, rating, least and most value',
  'target window, accuracy, noise and bandwidth': 'What is asked of the output: window, accuracy, noise, bandwidth',
  'rails, ambient and what is asked of the output': 'Tolerance of the rails, ambient, reference, load, board',
}
const MARGINS = {
  'Swing to': 'Room between the output and its limit at the extreme corner, rails at their least favourable tolerance',
  'Window': 'Room between the output at the extreme corner and the window that is asked',
  'Inputs to': 'Room between the inputs and the end of their common-mode range at the extreme corner',
  'Output current': 'Room between the largest output current over all corners and what the op amp gives',
  'Supply': 'Whether the op amp works on this total supply, tolerance included',
  'Weights': 'Worst relative error of the made weights against half of the accuracy that is asked',
  'Accuracy': 'Known shift and 95 % uncertainty together against the accuracy that is asked (JCGM 100:2008)',
  'Noise': 'RMS noise at the output over the noise band against what is asked',
  'Bandwidth': 'Where the slowest signal is 3 dB down against what is needed',
  'Full-power band': 'Highest sine of the output’s whole swing that does not slew, against what is needed',
  'Phase margin': '180° plus the loop’s phase where its gain is 1, against 45° (common practice)',
  'Resistor heat': 'Worst dissipation of a resistor against its rating at the hottest ambient',
  'Junction': 'Worst junction temperature against what the part may reach',
}

export function helpFor(field) {
  const words = field.replace(/^(drawer|plate) /, '')
  const [group, ...rest] = words.split(' ')
  const found = (group === 'part' && words.endsWith('/cf') && CAPACITOR) || (rest[0] === 'reference' && rest.length === 2 && REFERENCE[group]) || (group === 'op_amp' && OP_AMP[rest.join(' ')]) || FIGURES[words] || STARTS[group]
  return found ? `${found[0]}. In ${found[1]}. From ${found[2]}.`.replace('..', '.') : ''
}

function help(e) {
  const node = e.target.closest?.('input.blank, input[type=range], button, select.blank, input#title')
  if (!node || node.title) return
  const words = node.blank && node.id !== 'title' ? helpFor(node.blank.field)
    : node.type === 'range' ? 'Where the signal is just now. In V. From your hand: arrows move it by 1/500 of its range, with Shift ten times that, Home and End to its ends.'
    : !node.matches('.chk') ? CONTROLS[node.getAttribute('aria-label') ?? node.textContent] ?? ''
    : Object.entries(MARGINS).find(([start]) => node.querySelector('.t')?.textContent.startsWith(start))?.[1] ?? ''
  if (words) node.title = words
}

document.addEventListener('pointerover', help)
document.addEventListener('focusin', help)
