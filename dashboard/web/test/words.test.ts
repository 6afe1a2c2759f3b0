import assert from 'node:assert/strict';
import { test } from 'node:test';
import { calibrationText, coolDownText, findingText, forecastText, sensorAt, sensorText, speakingText, standIns, steadyText } from '../src/words';
import type { Channel, Sensor } from '../src/frames';
import { point, t0 } from './samples';

test('a calibration is in date, waived or expired, by the sensor of the time', () => {
  const sensor = (body: Partial<Sensor>): Sensor => ({ valid_from: null, serial: 'A1', certificate: 'C 7', calibrated: '2025-11-30', due: '2026-11-30', waiver: null, ...body });
  const first = sensor({});
  const second = sensor({ valid_from: '2026-12-01T09:00:10Z', serial: 'A2', due: '', waiver: { who: 'R. Sorrel', why: 'spare', until: '2026-12-24' } });
  const c: Channel = { id: 'p', title: '', unit: '', dimension: '', reference: '', low: null, high: null, recorded_only: false, station: '', sensor: first, swaps: [second] };
  assert.equal(sensorAt(c, t0), first);
  assert.equal(sensorAt(c, t0 + 10), second);
  assert.equal(sensorAt({ ...c, sensor: null, swaps: [] }, t0), null);
  assert.equal(calibrationText(first, 'in_date'), 'due 2026-11-30');
  assert.equal(calibrationText(first, 'expired'), '▲ expired 2026-11-30');
  assert.equal(calibrationText(second, 'waived'), '△ waived by R. Sorrel');
  assert.equal(calibrationText(null, 'not_on_file'), 'not on file');
  assert.equal(calibrationText(null, undefined), '–', 'an older server');
  assert.equal(sensorText(second), 'serial A2, certificate C 7, calibrated 2025-11-30, waived by R. Sorrel: spare, until 2026-12-24');
  assert.equal(sensorText(null), 'nothing is on file');
});

test('the cool-down is counted down, and promises nothing', () => {
  assert.equal(coolDownText(80.2, null), '0:01:21 left');
  assert.equal(coolDownText(0, 300), 'its time is over');
  assert.equal(coolDownText(null, 65), 'at rest for 0:01:05');
  assert.equal(coolDownText(undefined, null), 'rotor turns');
});

test('steadiness names its reason, and nothing where it is not told', () => {
  assert.equal(steadyText(point(t0, { steady: true, steady_reason: null })), '● steady');
  assert.equal(steadyText(point(t0, { steady: false, steady_reason: 'swing' })), '○ not steady: swing or step');
  assert.equal(steadyText(point(t0, { steady: false, steady_reason: 'a_new_one' })), '○ not steady: a new one', 'a reason of a newer server');
  assert.equal(steadyText(point(t0)), '–', 'a run of an older build');
  assert.equal(steadyText(null), '–');
});

test('a forecast is a time with its 95 % bounds, or the reason why there is none', () => {
  assert.equal(forecastText(40.2, 25, 60, null), 'in 40 s (25–60)');
  assert.equal(forecastText(40.2, 25, null, null), 'in 40 s (25 or later)');
  assert.equal(forecastText(12, null, null, null), 'in 12 s');
  assert.equal(forecastText(null, null, null, 'levelling'), 'levels off before');
  assert.equal(forecastText(undefined, undefined, undefined, undefined), '–');
});

test('what is wrong with a sensor is proven or suspected', () => {
  const v = { value: 1, raw: 1, quality: 'good', age_s: 0 };
  assert.equal(findingText({ ...v, finding: 'open', proven: true }), 'open (proven)');
  assert.equal(findingText({ ...v, finding: 'hot_streak', proven: false }), 'hot streak (suspected)');
  assert.equal(findingText({ ...v, finding: '', proven: false }), '');
  assert.equal(findingText(v), '', 'a server that does not tell');
});

test('what stands in is named, each once', () => {
  assert.deepEqual(standIns(point(t0, { total_pressure_from: 'rake' })), []);
  assert.deepEqual(standIns(point(t0, { back_pressure_from: 'barometer', total_pressure_from: 'wall_static', total_temperature_from: 'heat_balance' })),
    ['back pressure from barometer', 'p7 from wall static', 'T7 from heat balance']);
  assert.deepEqual(standIns(point(t0, { total_temperature_from: 'egt_factor' })), ['T7 from EGT × factor']);
  assert.deepEqual(standIns(null), []);
});

test('of two watches the one that speaks is named, and whether this one sounds', () => {
  const s = { watch: 'alpha', name: 'alpha', since: '2026-06-01T09:00:00Z', other: 'beta', why: '' };
  assert.deepEqual(speakingText(undefined), { text: '', here: true, bad: false }, 'a watch that is alone');
  assert.deepEqual(speakingText(s), { text: 'watch alpha speaks · beta stands by', here: true, bad: false });
  assert.deepEqual(speakingText({ ...s, other: null }), { text: 'watch alpha speaks · no other watch is heard', here: true, bad: true });
  assert.deepEqual(speakingText({ ...s, name: 'beta' }), { text: 'watch alpha is silent · beta speaks and sounds', here: false, bad: false });
  assert.deepEqual(speakingText({ ...s, name: null, other: null, why: 'the broker does not answer' }),
    { text: 'watch alpha is SILENT · none is heard that speaks: the broker does not answer', here: true, bad: true });
});
