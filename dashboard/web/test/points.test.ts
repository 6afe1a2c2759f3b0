import assert from 'node:assert/strict';
import { test } from 'node:test';
import type { TestPoint, TestValue } from '../src/frames';
import { brief, digits, shownValue } from '../src/points';
import { unitSets } from '../src/units';

const value = (name: string, unit: string, v: number | null, u95: number | null): TestValue => ({ name, unit, value: v, type_a: u95 === null ? null : u95 / 10, type_b: u95 === null ? null : u95 / 2, u95, coverage_factor: 2, effective_samples: 41.3, standard_deviation: null });

test('an uncertainty keeps two digits, its value as many decimals [JCGM 100 7.2.6]', () => {
  for (const [u, v, want] of [[0.0113, 1.9, 3], [0.38, 12, 2], [4.2, 640, 1], [57, 20_100, 0], [1300, 20_100, 0], [null, 1.9, 4], [0, 0.02, 6], [null, null, 0]] as const) assert.equal(digits(u, v), want, `${u} of ${v}`);
});

test('values are in the viewer’s units, half widths without an offset', () => {
  const egt = value('egt_indicated_k', 'K', 973.15, 4);
  assert.deepEqual(shownValue(egt, unitSets.si), { value: '700.0', u95: '4.0', typeA: '0.40', typeB: '2.00', effective: '41', sign: '°C' });
  assert.deepEqual([shownValue(egt, unitSets.us).value, shownValue(egt, unitSets.us).u95], ['1292.0', '7.2']);
  assert.equal(shownValue(value('egt_spread_k', 'K', 30, 2), unitSets.si).value, '30.0', 'a difference of temperatures');
  assert.equal(shownValue(value('effective_area_m2', 'm²', 0.0251, 0.0002), unitSets.si).value, '251.0');
});

test('a line tells value and U95, a difference with its sign, what is missing as –', () => {
  const p = { number: 1, values: [value('npr', '', 1.91234, 0.0113), value('choke_margin_percent', '%', 2.5, 0.6), value('speed_rpm', 'rpm', 20_123.4, null), value('mass_flow_kg_s', 'kg/s', null, null)] } as TestPoint;
  assert.equal(brief(p, 'npr', unitSets.si), '1.912 ± 0.011');
  assert.equal(brief(p, 'choke_margin_percent', unitSets.si), '+2.50 ± 0.60');
  assert.equal(brief(p, 'speed_rpm', unitSets.si), '20123');
  assert.equal(brief(p, 'mass_flow_kg_s', unitSets.si), '–');
  assert.equal(brief(p, 'gross_thrust_n', unitSets.si), '–');
});
