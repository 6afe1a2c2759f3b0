import assert from 'node:assert/strict';
import { test } from 'node:test';
import { clock, duration, rfc3339, seconds } from '../src/time';
import { age, bytes, celsius, fixed, inUnit, kN, kPa, plain, signed, significant } from '../src/units';
import { stateLook, uncertainty } from '../src/words';
import { point, t0 } from './samples';

test('conversions from SI', async (t) => {
  const rows: { si: number; unit: string; dimension: string; want: number; source: string }[] = [
    { si: 273.15, unit: 'degC', dimension: 'temperature', want: 0, source: 'definition' },
    { si: 10, unit: 'degC', dimension: 'temperature difference', want: 10, source: 'definition: a difference has no offset' },
    { si: 373.15, unit: 'degF', dimension: 'temperature', want: 212, source: 'definition' },
    { si: 101325, unit: 'psi', dimension: 'pressure', want: 14.695948775513, source: '1 lbf = 4.4482216152605 N, 1 in = 25.4 mm, exact' },
    { si: 101325, unit: 'inHg', dimension: 'pressure', want: 29.92125, source: 'conventional mercury 13595.1 kg/m³, ISO 80000-4' },
    { si: 101325, unit: 'hPa', dimension: 'pressure', want: 1013.25, source: 'definition' },
    { si: 0.1, unit: 'kg/h', dimension: 'mass flow', want: 360, source: 'definition' },
    { si: 0.45359237, unit: 'lb/s', dimension: 'mass flow', want: 1, source: 'avoirdupois pound, exact' },
    { si: 350, unit: 'rpm', dimension: 'frequency or speed of rotation', want: 21000, source: 'definition' },
    { si: 0.005, unit: 'mm/s', dimension: 'velocity', want: 5, source: 'definition' },
  ];
  for (const r of rows) {
    await t.test(`${r.si} in ${r.unit}, ${r.dimension} (${r.source})`, () => {
      assert.ok(Math.abs(inUnit(r.si, r.unit, r.dimension).value - r.want) < 1e-5 * Math.max(1, Math.abs(r.want)));
    });
  }
  assert.deepEqual(inUnit(5, 'furlong', 'pressure'), { value: 5, sign: 'Pa' }, 'an unknown unit is shown in SI, and says so');
  assert.deepEqual([celsius(1000), kPa(2500), kN(4200)], [726.85, 2.5, 4.2]);
});

test('numbers', () => {
  assert.equal(fixed(-12.345, 1), '−12.3');
  assert.equal(fixed(-0.04, 1), '0.0', 'no minus zero');
  assert.equal(fixed(null, 1), '–');
  assert.equal(fixed(NaN, 1), '–');
  assert.equal(fixed(undefined, 1), '–');
  assert.equal(signed(3.26, 1), '+3.3');
  assert.equal(signed(0.01, 1), '0.0');
  assert.equal(signed(-3, 1), '−3.0');
  assert.equal(significant(0, 4), '0.000');
  assert.equal(significant(1234.5678, 5), '1234.6');
  assert.equal(significant(0.0123456, 5), '0.0123');
  assert.equal(plain(1100), '1100');
  assert.equal(plain(-40.15), '−40.15');
  assert.equal(bytes(4_812_000), '4.8 MB');
  assert.equal(age(0.034), '0.03 s');
  assert.equal(age(200), '3 min');
  assert.equal(age(null), '–');
});

test('times', () => {
  assert.equal(seconds('2026-12-01T09:00:00.25Z'), t0 + 0.25);
  assert.equal(seconds('2026-12-01T09:00:00Z'), t0);
  assert.ok(Math.abs(seconds('2026-12-01T09:00:00.123456789Z') - (t0 + 0.123456789)) < 1e-6);
  assert.ok(Number.isNaN(seconds('soon')));
  assert.ok(Number.isNaN(seconds(null)));
  assert.equal(seconds(rfc3339(t0 + 0.5)), t0 + 0.5);
  assert.equal(clock(t0 + 3661), '10:01:01');
  assert.equal(duration(3725.9), '1:02:05');
  assert.equal(duration(NaN), '–');
});

test('words of the choke state are never a guess', () => {
  assert.equal(stateLook(null).word, 'unknown');
  assert.equal(stateLook(point(t0, { choke_state: 'unknown', cause: 'p7_2 stale' })).cause, 'p7_2 stale');
  assert.equal(stateLook(point(t0, { choke_state: 'no_flow' })).word, 'no flow');
  assert.ok(stateLook(point(t0, { choke_marginal: true })).marginal);
  assert.equal(new Set(['choked', 'unchoked', 'no_flow', 'unknown'].map((s) => stateLook(point(t0, { choke_state: s as 'choked' })).shape)).size, 4, 'a shape each');
});

test('uncertainty is a half width, an interval, or nothing', () => {
  assert.equal(uncertainty(1.25, 1), '± 1.3');
  assert.equal(uncertainty(null, 1, -2, 3.5), '−2.0 … +3.5');
  assert.equal(uncertainty(null, 1, null, 3), '');
});
