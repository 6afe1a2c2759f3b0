// Test points as the page writes them: each value with as many digits as its
// uncertainty leaves sense.

import type { Num, TestValue } from './frames';
import { type Scale, type UnitSet, fixed, scaleOf, signed } from './units';

/** The decimals at which an uncertainty has two digits [JCGM 100 7.2.6]; without one, those at which the value has five. */
export function digits(u: Num, value: Num): number {
  const [size, wanted] = u !== null && u > 0 ? [u, 1] : [Math.abs(value ?? 0), 4];
  return size > 0 ? Math.min(9, Math.max(0, wanted - Math.floor(Math.log10(size)))) : 0;
}

/** Values that are written with their sign. */
const differences: readonly string[] = ['choke_margin_percent', 'flow_balance_kg_s'];

export interface Shown { value: string; u95: string; typeA: string; typeB: string; effective: string; sign: string }

/** A value of a point in a viewer's units; Type A and B with a digit more than U95. */
export function shownValue(v: TestValue, set: UnitSet): Shown {
  const s: Scale = scaleOf(set, v.unit, v.name);
  const of = (x: Num): Num => (x === null ? null : s.of(x));
  const half = (x: Num): Num => (x === null ? null : s.span(x));
  const d = digits(half(v.u95), of(v.value));
  return {
    value: (differences.includes(v.name) ? signed : fixed)(of(v.value), d), u95: fixed(half(v.u95), d), typeA: fixed(half(v.type_a), d + 1), typeB: fixed(half(v.type_b), d + 1),
    effective: fixed(v.effective_samples, 0), sign: s.sign,
  };
}

/** What the list shows of each point; the rest is told on demand. */
export const headline = [
  ['npr', 'NPR'], ['choke_margin_percent', 'Margin'], ['mass_flow_kg_s', 'W8'], ['flow_balance_kg_s', 'Flow balance'], ['effective_area_m2', 'Effective area'],
  ['gross_thrust_n', 'Thrust'], ['egt_indicated_k', 'EGT'], ['speed_rpm', 'Speed'],
] as const;

/** A value of the list with its U95: "1.912 ± 0.011"; "–" where the point has none. */
export function brief(p: { values?: TestValue[] | null }, name: string, set: UnitSet): string {
  const v = p.values?.find((x) => x.name === name);
  if (!v || v.value === null) return '–';
  const s = shownValue(v, set);
  return s.u95 === '–' ? s.value : `${s.value} ± ${s.u95}`;
}
