import assert from 'node:assert/strict';
import { test } from 'node:test';
import { askedFor, awaiting, currentPoint, distance, howTaken, standing, withFrame, withPoint } from '../src/card';
import type { Card, CardNow, CardPoint, CardTarget, TakenPoint } from '../src/frames';
import { unitSets } from '../src/units';
import { rfc3339 } from '../src/time';
import { t0 } from './samples';

const target = (body: Partial<CardTarget>): CardTarget => ({ quantity: 'speed_rpm', title: 'Rotor speed', unit: 'rpm', text: '92 % ± 0.3 %', target: null, tolerance: null, low: null, high: null, ...body });
const pressure = target({ quantity: 'total_pressure_pa', title: 'p8', unit: 'Pa', text: 'above 250 kPa', low: 250_000 });
const point: CardPoint = { name: 'just choked', targets: [target({ target: 20_240, tolerance: 66 }), pressure], soak_s: 10, average_s: 12, automatic: false, good: [], expect_choke: 'armed' };
const now = (body: Partial<CardNow> = {}): CardNow => ({
  t: rfc3339(t0), targets: [], held_since: null, soak_left_s: null, stabilised: false, why: 'target', quantity: 'speed_rpm', channel: '', steady_reason: '', slope: null, averaging: false, averaging_left_s: null, armed: false, ...body,
});
const taken = (number: number, body: Partial<TakenPoint> = {}): TakenPoint => ({
  number, point: 0, name: 'just choked', card: 'TC-1 A', run: 'r1', from: rfc3339(t0), to: rfc3339(t0 + 12), scans: 240, steady: 1, automatic: false, status: 'taken', by: 'M. Alder', judged_by: '', judged: null, reason: '', doubts: [], ...body,
});
const card = (body: Partial<Card> = {}): Card => ({
  title: 'Choking line', number: 'TC-1', revision: 'A', by: 'R. Sorrel', for: 'E 1', hash: 'ab', loaded: rfc3339(t0), loaded_by: 'R. Sorrel', points: [point], progress: [{ status: 'open', numbers: [], reason: '', by: '' }], current: 0, now: null, taken: [], ...body,
});

test('what is asked for, and how far off it is, in either system of units', () => {
  assert.equal(askedFor(target({ target: 20_240, tolerance: 66 }), unitSets.si), '20240 ± 66 rpm');
  assert.equal(askedFor(pressure, unitSets.si), 'above 250 kPa');
  assert.equal(askedFor(pressure, unitSets.us), 'above 36.2594 psi');
  assert.equal(askedFor(target({ high: 5, unit: '%' }), unitSets.si), 'below 5 %');
  assert.equal(askedFor(target({ low: 1, high: 2, unit: '' }), unitSets.si), '1 … 2');
  const speed = target({ target: 20_240, tolerance: 66 });
  assert.deepEqual(distance(speed, { value: 20_310, off: 70, off_tolerances: 1.06, inside: false }, unitSets.si), { value: '20310 rpm', off: '+70, 1.1 × tolerance' });
  assert.deepEqual(distance(speed, { value: 20_250, off: 10, off_tolerances: 0.15, inside: true }, unitSets.si), { value: '20250 rpm', off: 'inside' });
  assert.deepEqual(distance(pressure, { value: 240_000, off: -10_000, off_tolerances: null, inside: false }, unitSets.us), { value: '34.81 psi', off: '−1.45' });
  assert.deepEqual(distance(speed, undefined, unitSets.si), { value: '–', off: 'not known' });
});

test('what hinders a point is named', async (t) => {
  const rows: [name: string, now: CardNow | null, want: string][] = [
    ['no scan', null, 'no data'],
    ['off its target', now(), '○ Rotor speed is outside its target'],
    ['a channel', now({ why: 'channel', channel: 'fuel_flow' }), '○ fuel_flow is not good'],
    ['soaking', now({ why: 'soak', soak_left_s: 4.5 }), '○ soaking: 5 s left'],
    ['not steady, with its slope', now({ why: 'unsteady', quantity: 'total_pressure_pa', steady_reason: 'trend', slope: 1200 }), '○ p8 is not steady: trend, +1.20 kPa/s'],
    ['not steady in what the card does not ask for', now({ why: 'unsteady', quantity: 'rake_pressure_pa', steady_reason: 'scatter' }), '○ rake pressure pa is not steady: scatter'],
    ['stabilised', now({ stabilised: true, why: '' }), '● stabilised'],
    ['being averaged', now({ stabilised: true, why: '', averaging: true, averaging_left_s: 6.2 }), '● stabilised, averaging: 6 s left'],
  ];
  for (const [name, n, want] of rows) await t.test(name, () => assert.equal(standing(point, n, unitSets.si), want));
});

test('a card keeps the values of its points, and takes a verdict', () => {
  const values = [{ name: 'npr', unit: '', value: 2.1, type_a: 0.001, type_b: 0.002, u95: 0.0045, coverage_factor: 2, effective_samples: 40, standard_deviation: 0.01 }];
  let c: Card | null = withPoint(card(), taken(12, { values }));
  c = withPoint(c, taken(11));
  assert.deepEqual(c?.taken?.map((p) => p.number), [11, 12]);
  c = withFrame(c, card({ taken: [taken(11), taken(12)] }));
  assert.equal(c?.taken?.[1]?.values, values, 'a frame of kind card has none');
  assert.deepEqual(awaiting(c as Card).map((p) => p.number), [11, 12]);
  c = withPoint(c, taken(12, { status: 'rejected', reason: 'bleed open' }));
  assert.deepEqual(awaiting(c as Card).map((p) => p.number), [11]);
  assert.equal(withFrame(c, null), null);
  assert.equal(withPoint(null, taken(1)), null);
  assert.equal(currentPoint(card({ current: -1 })), null, 'nothing is left');
  assert.equal(howTaken(point), 'soak 10 s, average 12 s, taken by hand, choke watch armed');
});
