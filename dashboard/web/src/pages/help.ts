// Help: what each number means, where it comes from and where it ends.

import { type View, h } from '../dom';

const terms: [string, string][] = [
  ['NPR', 'p8 / back pressure, where p8 is the nozzle total pressure p7 of the rake less the duct loss. The rake value p7 / back pressure is published beside it.'],
  ['Critical NPR, choke NPR', 'Critical NPR: the pressure ratio at which one-dimensional flow of this gas, at this temperature and composition, reaches Mach 1 in the throat. Choke NPR: the one used for the state; the critical NPR unless a nozzle calibration gives another. Its origin is written under it.'],
  ['Choke margin', 'NPR / choke NPR − 1 in percent, positive when choked. For the one-dimensional choke NPR it equals (p* − back pressure) / back pressure. ± is the 95 % uncertainty (U95); where the interval is not symmetric both ends are given.'],
  ['Choke state', 'Choked or unchoked by the best estimate, with hysteresis. Marginal: the uncertainty does not decide. No flow: NPR below the resolution floor of the probes, stated in the rig file. Unknown: an input is missing, and the cause is named.'],
  ['Flow parameter', 'W √(R T0) / (A p0), without dimension. It rises with NPR and stays constant past the critical NPR.'],
  ['Hollow and solid point', 'The hollow point is computed from pressures and temperature and lies on the curve by construction: it proves nothing about the flow. The solid point is drawn only where air flow and fuel flow are measured; its region holds 95 % if the errors of the two axes are independent, which a shared pressure makes only nearly true. The figure beside it is the 95 % uncertainty of its flow, for a region that the point covers.'],
  ['Choke line and its band', 'The dashed line is the choke NPR. The band around it is the 95 % uncertainty of the margin: while the point stands in it, the state is not decided by the measurement.'],
  ['P(choked)', 'The probability that the throat is choked, from the uncertainty of the margin; on the Rig page. It is not given unless the uncertainty of the nozzle model is stated or the choke NPR calibrated. Marginal means between 2.5 and 97.5 %.'],
  ['W8', 'Nozzle flow Cd · A8 · φ · p0 / √(R T0), φ the ideal flow parameter of this gas.'],
  ['Referred flow', 'W8 √θ / δ with the total temperature and pressure of station 2 against the ISO 2533 sea level: flows of different days become comparable.'],
  ['Steadiness', 'Steady means: over the window of the rig file the slope is within its limit, the ratio of variances shows no swing or step, and both have lasted for the dwell time. The data is thinned to values that are independent of each other. Otherwise the first reason is named: window filling, data gaps, slow noise (too few independent values), trend, scatter (it hides a trend of the size of the limit), swing or step, settling.'],
  ['Choke loss, EGT limit: forecasts', 'The time to the loss of choke, or to the next EGT limit, if the present trend goes on; in brackets the 95 % interval. There is none outside a steady phase, beyond twice the window, or toward a limit that a levelling trend does not reach. A forecast is a note, not an alarm.'],
  ['Stand-ins', 'Notes in the throat plane name what stands in for the first source of a value: p7 from the wall static pressure and the ratio learned in steady phases, T7 from the heat balance or the EGT, back pressure from the barometer less the cell depression.'],
  ['Gross thrust, computed', 'Momentum plus pressure thrust of the nozzle by the thrust basis in the rig file. It is not the load-cell reading.'],
  ['Indicated EGT', 'The harness value as the engine’s limits are written for it, without recovery or lag correction. Only it is held against the bands; the nozzle’s own gas temperature is a different number.'],
  ['Bands and allowance', 'A band is a limit with the time for which it may be exceeded. Start bands hold until idle is first reached, run bands always. An excursion ends only when EGT has been below the limit less the deadband for the re-arm time. Time that was not seen while the last good value was above the limit is counted and marked assumed.'],
  ['Excursions and exceedances', 'An excursion is one stay above the limit of a band. It exceeds when it lasts longer than the allowance. Under the bands stand those of this run; the Record of a run lists each with its beginning, duration, assumed part, peak and the time above the other bands.'],
  ['Test points', 'Stretches in which the engine was steady, or the 30 s after a mark, reduced to one value each. Type A is the uncertainty by the scatter of the scans and their effective number, Type B that by the systematic errors of the channels; U95 is both together. What is doubtful about a point stands under it.'],
  ['Two runs beside each other', 'Choose two on Runs. A run and its reduction are compared scan by scan; others by time from light-off or a mark, or over NPR or referred speed against the curve of the old run with twice its scatter. A departure is marked where it is larger than its uncertainty.'],
  ['Traces', 'What is drawn is chosen with “Traces…”: quantities and channels, two of one unit to a plot, at most eight plots; the choice is kept in this browser. Drawn with the mouse, a stretch fills the axis and stands still until “Reset zoom” or a double click. However far it is drawn together, the lowest and highest value of each place are kept, so that no spike is lost.'],
  ['Test card', 'An engineer loads it; its points are taken in their order. A point is stabilised when every target is inside its tolerance, every channel that it needs is good and the engine was steady for the soak. The values taken are means over the averaging time with their U95. A rejected point is taken again under a new number; no number is given twice.'],
  ['Checks before and after', 'Measured with the engine at rest: zero of each pressure against its port, thermocouples against each other, signals, calibration, clock, broker, disk, files; and what is ticked by hand under a name. After the run the zeros again, with their shift. They are checks of the data system: no result of them is a clearance to start.'],
  ['Cool-down', 'While the engine cools, the time since the fuel is off and what is left of the cool-down that the rig file asks for stand in the place of the forecasts.'],
  ['Life of the engine and of the nozzle', 'Counted per serial number as far as it was watched here: a start is a light-off below idle, a cycle ends with a shutdown after idle was reached, hours are those with a flame.'],
  ['Spread', 'Hottest less coldest probe; none for a harness wired in parallel.'],
  ['Choke watch', 'The unchoke alarm acts only while the choke watch is armed, by rotor speed or by the test card.'],
  ['Findings of a channel', 'What seems to be wrong with a sensor: open, short, stuck, slow, blocked, drift, zero shift, leak, a hot or cold streak (which may be the gas). Proven: the signal itself shows it, and the channel is left out. Suspected: it departs from what the other channels tell; it is shown and still counts. “Recorded only”: no rule or limit looks at this channel.'],
  ['Take back, swap', 'An engineer can take a probe back that was left out; with proof of failure it is refused. A sensor swap notes the new serial number and from when on it counts. Both stand in the log with their reason.'],
  ['Uncertainty budget', 'Which share of the variance of a result comes from which input, and which channels are behind it.'],
  ['Alarms put aside', 'Shelved: not annunciated for a chosen time, with a reason; never a warning. One that has returned is put aside in the history. Suppressed by design: the rule does not apply in this phase. Out of service: by an engineer, only with the engine off. An alarm that follows from another stands under it.'],
  ['Cannot be judged', 'A rule whose input is bad or missing is unknown, never silently false. Their number stands in the upper strip.'],
  ['Alarm figures', 'How often alarms came and stood in this run, against published targets; the source stands below. Runs shorter than an hour are not graded.'],
  ['Sound', 'A browser gives sound only after a press: “armed” means that warnings and cautions are heard at this page until acknowledged. A mute covers the warnings that stand when it begins; a new warning breaks it. The test tone tells that the loudspeaker works.'],
  ['Files and approval', 'Limits and rules are those of the files whose hash is shown. A change is taken only with the engine off, from an engineer, and names who approved it; a refused one leaves the old files in force.'],
  ['Units', 'SI or US customary, chosen in the upper strip and kept in this browser. Everything is stored in SI. Alarm texts keep the units in which they were recorded; raw values are as they were received.'],
  ['Operator', 'The name in the upper strip goes with every acknowledgement, mark and run that is started or ended from this page. Without one it is “console”. It is a note, not a proof of identity. Where the server knows its users, the name and role are those of the login.'],
  ['Data age', 'Time since the newest measured value. The dash beside it moves once a second with the server: if it stands still, the page is not fed.'],
];

const limits = [
  'One-dimensional, frozen, thermally perfect gas, valid from 200 to 1800 K; outside it the operating point says so in its warnings.',
  'Back pressure from the barometer less an entered cell depression is less certain than an exit-plane measurement; it is named wherever it is used.',
  'With reheat lit or a throat area that is not known the state is unknown, never a guess.',
  'A probe is left out only on proof of failure. A probe that reads hot without such proof counts: a real hot streak is not voted away.',
  'Alarms whose event is more than 5 s old when they are judged are listed as past and do not sound.',
];

export function helpPage(): View {
  return {
    el: h('div', { class: 'page help' },
      h('h1', {}, 'Help'),
      h('section', { class: 'safety' }, h('h2', {}, 'What this is not'),
        h('p', {}, 'throatwatch only watches. It commands nothing and trips nothing. Facility safety procedures, hard-wired protection and licensed practice come first. This display is not protection. No page of it is a clearance to start.')),
      h('section', {}, h('h2', {}, 'The numbers'), h('dl', { class: 'terms' }, ...terms.flatMap(([k, v]) => [h('dt', {}, k), h('dd', {}, v)]))),
      h('section', {}, h('h2', {}, 'Limits of the method'), h('ul', {}, ...limits.map((l) => h('li', {}, l)))),
      h('section', {}, h('h2', {}, 'Signs'), h('ul', {},
        h('li', {}, '■ warning: immediate awareness and response. ▲ caution: immediate awareness, later response. ◆ advisory: awareness. ● note.'),
        h('li', {}, 'Hatched or dimmed with “–”: not present, or not to be believed; the cause is written beside it.'),
        h('li', {}, 'Grey page with large letters: the data link is gone. Thick frame and REPLAY: a stored run, not the rig.'))),
      h('section', {}, h('h2', {}, 'Keys'), h('p', {}, 'Tab and Enter reach every control. On Watch: M writes a mark, Enter sets it; A goes to Acknowledge, there and on Alarms. With the plots in focus + and − zoom, ← and → move the stretch, Home and End go to its ends, 0 shows all, shift with an arrow leads the cursor; T opens the choice of traces. On Alarms and Runs: / goes to the search. Escape closes a question. In replay: space plays and pauses, ← and → step by scan, page up and page down jump to the next alarm or mark.'))),
    update: () => undefined,
    destroy: () => undefined,
  };
}
