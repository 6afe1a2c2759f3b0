// The engineer's view of the present operating point: every number with its 95 %
// uncertainty, where it comes from, and how sure the choke state is.

import type { Display } from '../context';
import { type View, attr, h, text } from '../dom';
import type { PointFrame, Quantity } from '../frames';
import { probability } from '../interval';
import { believable } from '../state';
import { type Scale, type UnitSet, shown, signed, width } from '../units';
import { causeWord, sourceWord, uncertainty } from '../words';

interface Line {
  name: string;
  value: (p: PointFrame, u: UnitSet) => string;
  note?: (p: PointFrame, u: UnitSet) => string;
}

type Pick = (u: UnitSet) => Scale;

/** A quantity in a viewer's unit, with its half width where it has one. */
const line = (name: string, key: Quantity, pick: Pick, u95?: Quantity, note?: (p: PointFrame) => string): Line => ({
  name,
  value: (p, u) => {
    const s = pick(u);
    const text_ = shown(s, p[key]);
    return text_ === '–' ? text_ : [text_, s.sign, u95 ? uncertainty(width(s, p[u95]), s.decimals) : ''].filter(Boolean).join(' ');
  },
  ...(note ? { note } : {}),
});

/** A plain number. */
const plain = (name: string, key: Quantity, decimals: number, u95?: Quantity, note?: (p: PointFrame) => string): Line =>
  line(name, key, () => ({ sign: '', decimals, of: (v) => v, span: (v) => v }), u95, note);

const groups: [string, Line[]][] = [
  ['Choke', [
    { name: 'P(choked)', value: (p) => probability(p.p_choked), note: (p) => (typeof p.p_choked === 'number' ? (p.choke_marginal ? 'marginal: between 2.5 and 97.5 %' : '') : 'not known: needs the nozzle-model uncertainty or a calibrated choke NPR') },
    { name: 'Choke margin', value: (p) => (typeof p.choke_margin_percent === 'number' ? `${signed(p.choke_margin_percent, 2)} % ${uncertainty(p.choke_margin_percent_u95, 2)}` : '–'),
      note: (p) => (typeof p.choke_margin_percent_low95 === 'number' && typeof p.choke_margin_percent_high95 === 'number' ? `95 %: ${signed(p.choke_margin_percent_low95, 2)} … ${signed(p.choke_margin_percent_high95, 2)} %` : '') },
    line('p* − back pressure', 'choke_margin_pa', (u) => u.pressure),
    plain('NPR', 'npr', 4, 'npr_u95'),
    plain('NPR of the rake', 'npr_rake', 4),
    plain('Critical NPR', 'critical_npr', 4),
    plain('Choke NPR', 'choke_npr', 4, undefined, (p) => sourceWord(p.choke_npr_from)),
    plain('Throat Mach number', 'throat_mach', 4),
  ]],
  ['Gas and nozzle', [
    line('Nozzle total pressure p8', 'total_pressure_pa', (u) => u.pressure, undefined, (p) => (p.total_pressure_from === 'wall_static' ? 'wall static: no rake' : `${p.rake_probes_used} rake probes`)),
    line('Back pressure', 'back_pressure_pa', (u) => u.pressure, undefined, (p) => sourceWord(p.back_pressure_from)),
    line('Barometer', 'barometer_pa', (u) => u.pressure),
    line('Nozzle gas temperature T8', 'total_temperature_k', (u) => u.temperature, undefined, (p) => sourceWord(p.total_temperature_from)),
    plain('Fuel-air ratio', 'fuel_air_ratio', 5),
    plain('Humidity ratio', 'humidity_ratio', 5),
    plain('Water-air ratio', 'water_air_ratio', 5),
    line('Throat area, hot', 'throat_area_m2', (u) => u.area),
    plain('Discharge coefficient', 'discharge_coefficient', 4),
  ]],
  ['Flow and thrust', [
    line('Nozzle flow W8', 'mass_flow_kg_s', (u) => u.flow, 'mass_flow_kg_s_u95'),
    line('Air + fuel flow', 'independent_flow_kg_s', (u) => u.flow, 'independent_flow_kg_s_u95'),
    line('Air + fuel less W8', 'flow_balance_kg_s', (u) => u.flow),
    line('Fuel flow', 'fuel_flow_kg_s', (u) => u.fuel),
    line('Referred flow W√θ/δ', 'referred_flow_kg_s', (u) => u.flow),
    line('Gross thrust, computed', 'gross_thrust_n', (u) => u.force, 'gross_thrust_n_u95'),
    line('Load-cell thrust', 'measured_thrust_n', (u) => u.force, undefined, () => 'uncorrected'),
    line('Throat velocity V8', 'exit_velocity_m_s', (u) => u.velocity),
  ]],
];

export function engineerView(d: Display): View {
  const warnings = h('p', { class: 'extra warnings' });
  const rows: { line: Line; value: HTMLElement; note: HTMLElement }[] = [];
  const el = h('div', { class: 'engineer' }, ...groups.map(([title, lines]) => h('div', {}, h('h3', { class: 'grouptitle' }, title), h('dl', {}, ...lines.map((l) => {
      const row = { line: l, value: h('span', { class: 'value', ...(l.name === 'P(choked)' ? { 'data-q': 'p-choked' } : {}) }), note: h('span', { class: 'extra' }) };
      rows.push(row);
      return h('div', { class: 'pair' }, h('dt', {}, l.name), h('dd', {}, row.value, row.note));
    })))), warnings);
  return {
    el,
    update(now) {
      const p = believable(d.fresh(now)) ? d.model().point : null;
      const u = d.units();
      for (const r of rows) {
        const value = p ? r.line.value(p, u) : '–';
        text(r.value, value);
        attr(r.value.parentElement as HTMLElement, 'data-none', value === '–');
        const note = (p && r.line.note?.(p, u)) || (p && value === '–' ? causeWord(p.cause) : '');
        text(r.note, note);
        attr(r.note, 'title', note || null);
      }
      text(warnings, p?.warnings?.length ? `Note: ${p.warnings.join('; ')}.` : '');
    },
    destroy: () => undefined,
  };
}
