import assert from 'node:assert/strict';
import { test } from 'node:test';
import { clock, dateClock, day, duration, facility, rfc3339, seconds, signedClock } from '../src/time';
import { Settings } from '../src/settings';
import { type Scale, age, alarmValue, bytes, celsius, fixed, inUnit, plain, shown, signed, significant, unitSets, width } from '../src/units';
import { causeWord, stateLook, uncertainty } from '../src/words';
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
  assert.equal(celsius(1000), 726.85);
});

test('both sets of units', async (t) => {
  // Expectations from the exact definitions: 1 lb = 0.45359237 kg, 1 lbf = 4.4482216152605 N,
  // 1 in = 25.4 mm, °F = K · 9/5 − 459.67.
  const rows: { name: string; pick: (u: typeof unitSets.si) => Scale; si: number; want: [string, string]; span: [number, number] }[] = [
    { name: 'pressure', pick: (u) => u.pressure, si: 250e3, want: ['250.0 kPa', '36.26 psi'], span: [250, 36.2594344] },
    { name: 'temperature', pick: (u) => u.temperature, si: 993.15, want: ['720 °C', '1328 °F'], span: [993.15, 1787.67] },
    { name: 'difference of temperatures', pick: (u) => u.difference, si: 20, want: ['20 K', '36 °F'], span: [20, 36] },
    { name: 'flow', pick: (u) => u.flow, si: 7.25, want: ['7.250 kg/s', '15.98 lb/s'], span: [7.25, 15.9835140] },
    { name: 'fuel flow', pick: (u) => u.fuel, si: 0.1, want: ['360.0 kg/h', '793.7 lb/h'], span: [360, 793.664144] },
    { name: 'force', pick: (u) => u.force, si: 4400, want: ['4.40 kN', '989 lbf'], span: [4.4, 989.159351] },
    { name: 'area', pick: (u) => u.area, si: 0.025, want: ['250.00 cm²', '38.750 in²'], span: [250, 38.7500775] },
    { name: 'velocity', pick: (u) => u.velocity, si: 340, want: ['340.0 m/s', '1115.5 ft/s'], span: [340, 1115.48556] },
  ];
  for (const r of rows) {
    await t.test(r.name, () => {
      [unitSets.si, unitSets.us].forEach((u, i) => {
        const s = r.pick(u);
        assert.equal(`${shown(s, r.si)} ${s.sign}`, r.want[i]);
        assert.ok(Math.abs((width(s, r.si) ?? NaN) / (r.span[i] as number) - 1) < 1e-7, `half width ${width(s, r.si)}`);
        assert.ok(Math.abs(s.of(r.si + 1) - s.of(r.si) - s.span(1)) < 1e-9, 'a difference is scaled as the value is');
      });
    });
  }
  assert.equal(shown(unitSets.us.flow, null), '–');
  assert.equal(width(unitSets.us.flow, undefined), null);
});

test('a channel changes its unit with the system, and back to the same', () => {
  const { si, us } = unitSets;
  const pairs = { 'kPa': 'psi', 'hPa': 'psi', 'Pa': 'psi', 'degC': 'degF', 'kg/s': 'lb/s', 'kg/h': 'lb/h', 'kN': 'lbf', 'N': 'lbf', 'mm/s': 'in/s', 'mm': 'in', 'mm2': 'in2', 'm/s': 'ft/s' };
  for (const [name, other] of Object.entries(pairs)) {
    assert.equal(si.channel(name), name, 'the unit of the rig file stays in its own system');
    assert.equal(us.channel(name), other, 'the same dimension in the other');
  }
  for (const name of ['psi', 'degF', 'lb/s', 'lb/h', 'lbf', 'in']) {
    assert.equal(us.channel(name), name);
    assert.notEqual(si.channel(name), name);
  }
  for (const name of ['%', 'rpm', '1/s', 'V', 's']) assert.deepEqual([si.channel(name), us.channel(name)], [name, name], 'used in both');
  assert.ok(Math.abs(inUnit(101325, us.channel('kPa')).value - 14.6959488) < 1e-6);
  assert.ok(Math.abs(inUnit(0.1, us.channel('kg/h')).value - 793.664144) < 1e-5);
});

test('the value of an alarm', () => {
  const { si, us } = unitSets;
  assert.deepEqual([alarmValue(si, 993.9, 'K', 'egt_run_max_over'), alarmValue(us, 993.9, 'K', 'egt_run_max_over')], ['720.8 °C', '1329 °F']);
  assert.deepEqual([alarmValue(si, 45, 'K', 'egt_spread'), alarmValue(us, 45, 'K', 'egt_spread')], ['45 K', '81 °F']);
  assert.equal(alarmValue(si, 250, 'K', 'EGT spread wide'), '250 K', 'a large difference says so');
  assert.deepEqual([alarmValue(si, 250, 'K', 'EGT', 'temperature_difference'), alarmValue(si, 150.45, 'K', 'T2', 'temperature')], ['250 K', '−122.7 °C'], 'the dimension decides where it is told');
  assert.deepEqual([alarmValue(si, 30e3, 'Pa', ''), alarmValue(us, 30e3, 'Pa', '')], ['30 kPa', '4.351 psi']);
  assert.deepEqual([alarmValue(si, 20124, 'rpm', ''), alarmValue(us, 20124, 'rpm', '')], ['20124 rpm', '20124 rpm']);
  assert.equal(alarmValue(si, 5.05, 's', ''), '5.050 s');
  assert.equal(alarmValue(us, -11.4, '%', ''), '−11.40 %');
  assert.equal(alarmValue(us, 12.5, 'rpm/s', ''), '12.50 rpm/s', 'an unknown unit is passed on');
});

test('choices are kept, also where the browser keeps nothing', () => {
  const kept = new Map<string, string>();
  const keeper = { getItem: (k: string) => kept.get(k) ?? null, setItem: (k: string, v: string) => void kept.set(k, v) };
  const a = new Settings(keeper);
  assert.deepEqual([a.system, a.operator], ['si', '']);
  a.setSystem('us');
  a.setOperator('  M. Alder ');
  const b = new Settings(keeper);
  assert.deepEqual([b.system, b.operator], ['us', 'M. Alder']);
  b.setSystem('si');
  a.reload();
  assert.equal(a.system, 'si', 'another tab has chosen');
  kept.set('throatwatch.units', 'furlongs');
  assert.equal(new Settings(keeper).system, 'si', 'an unknown choice is none');
  const refusing = { getItem: (): never => { throw new Error('denied'); }, setItem: (): never => { throw new Error('denied'); } };
  for (const k of [null, refusing]) {
    const c = new Settings(k);
    c.setSystem('us');
    c.setOperator('x');
    assert.deepEqual([c.system, c.operator], ['us', 'x']);
  }
  a.setOperator('n'.repeat(99));
  assert.equal(a.operator.length, 40);
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

test('a cause keeps the id of its channel', () => {
  assert.equal(causeWord('p7_2 out_of_range'), 'p7_2 out of range');
  assert.equal(causeWord('not_enough_probes'), 'not enough probes');
  assert.equal(causeWord(null), '');
});

test('uncertainty is a half width, an interval, or nothing', () => {
  assert.equal(uncertainty(1.25, 1), '± 1.3');
  assert.equal(uncertainty(null, 1, -2, 3.5), '−2.0 … +3.5');
  assert.equal(uncertainty(null, 1, null, 3), '');
});

// Zurich is UTC + 1 in winter and + 2 in summer from 2026-03-29 01:00 UTC, Kolkata + 5:30 all year [IANA tz database].
test('times are those of the facility, with its offset', () => {
  const at = (s: string): number => Date.parse(s) / 1000;
  facility.set('Europe/Zurich', at('2026-03-02T09:00:00Z'));
  assert.equal(facility.sign(), '+01:00');
  assert.equal(clock(at('2026-03-02T09:00:05Z')), '10:00:05');
  assert.equal(clock(at('2026-03-29T01:00:00Z')), '03:00:00 +02:00', 'another offset than that of the head');
  assert.equal(signedClock(at('2026-03-02T09:00:05Z')), '10:00:05 +01:00');
  assert.equal(dateClock(at('2026-03-02T23:30:00Z')), '2026-03-03 00:30:00 +01:00');
  assert.notEqual(day(at('2026-03-02T22:30:00Z')), day(at('2026-03-02T23:30:00Z')));
  facility.set('Asia/Kolkata', 0);
  assert.equal(signedClock(at('2026-03-02T18:45:00Z')), '00:15:00 +05:30');
  facility.set('America/St_Johns', at('2026-01-01T00:00:00Z'));
  assert.equal(signedClock(at('2026-01-01T00:00:00Z')), '20:30:00 −03:30');
  for (const zone of [undefined, '', 'UTC', 'Etc/UTC', 'No/Where']) {
    facility.set(zone, 0);
    assert.deepEqual([facility.sign(), clock(at('2026-03-02T09:00:00Z')), dateClock(NaN)], ['UTC', '09:00:00', '–']);
  }
});
