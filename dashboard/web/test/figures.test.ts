import assert from 'node:assert/strict';
import { test } from 'node:test';
import { exceedanceSummary, exceedanceWord } from '../src/exceedance';
import { figureLines } from '../src/figures';
import type { AlarmFigures, Exceedance } from '../src/frames';
import { pathParts } from '../src/path';
import { rfc3339 } from '../src/time';
import { unitSets } from '../src/units';
import { status, t0 } from './samples';

const figures: AlarmFigures = {
  from: rfc3339(t0), to: rfc3339(t0 + 7200), seconds: 7200, graded: true, why_not: null, raised: 12, per_10_min: 1, peak_10_min: 9, peak_at: rfc3339(t0 + 600), standing_now: 2, standing_peak: 4, standing_mean: 1.26,
  chattering: [{ rule: 'egt_probe_lost', times: 4 }], shelved: 1, out_of_service: 0, acknowledged_after_s_median: null, by_priority: { warning: { raised: 1, share: 0.083 } },
  targets: [{ figure: 'per_10_min', target: 1, met: true, source: 'A' }, { figure: 'share_warning', target: 0.05, met: false, source: 'B' }, { figure: 'later', target: 5, met: null, source: 'C' }],
};

test('figures stand beside their targets', () => {
  const lines = new Map(figureLines(figures).map((l) => [l.name, l]));
  assert.deepEqual(lines.get('Alarms in 10 min, mean'), { name: 'Alarms in 10 min, mean', value: '1.0', target: '≤ 1', met: true, source: 'A' });
  assert.deepEqual(lines.get('■ Warnings'), { name: '■ Warnings', value: '1 (8 %)', target: 'about 5 %', met: false, source: 'B' });
  assert.equal(lines.get('Alarms in 10 min, most')?.value, '9 at 09:10:00');
  assert.equal(lines.get('Chattering rules')?.value, 'egt_probe_lost 4×');
  assert.ok(!lines.has('Stale: standing for long'), 'what the server does not tell is left out');
  assert.equal(lines.get('Acknowledged after, median')?.value, '–');
  assert.equal(lines.get('later')?.target, '≤ 5', 'a target of a newer server is shown');
});

test('excursions above EGT limits', () => {
  const e: Exceedance = { band: 'run_max', kind: 'run', limit_k: 993.15, allowance_s: 5, began: rfc3339(t0), ended: rfc3339(t0 + 12), duration_s: 9.4, assumed_s: 0, peak_k: 1011.15, exceeded: true, above: null };
  assert.equal(exceedanceWord(e), '■ exceeded (of 5.0 s)');
  assert.equal(exceedanceWord({ ...e, exceeded: false, allowance_s: 0 }), 'within (none allowed)');
  assert.equal(exceedanceSummary([], unitSets.si), '');
  assert.equal(exceedanceSummary([e, { ...e, exceeded: false }], unitSets.si), '1 of 2 excursions exceeded: run max at 09:00:00, 9.4 s, peak 738 °C');
  assert.match(exceedanceSummary([{ ...e, ended: null }], unitSets.si), /run max at 09:00:00, goes on$/, 'its length stands in the bands');
  assert.match(exceedanceSummary([{ ...e, exceeded: false }], unitSets.us), /^0 of 1 excursion exceeded: .* peak 1360 °F$/);
});

test('the path of the data names what does not work', () => {
  const said = (body: Parameters<typeof status>[1]): string[] => pathParts(status(t0, body), 0.05, []).filter((p) => p.bad).map((p) => `${p.name}: ${p.said}`);
  assert.deepEqual(said({}), []);
  assert.deepEqual(pathParts(status(t0), 0.05, []).map((p) => p.name), ['Broker', 'Sources', 'Archive', 'Clock'], 'what the server does not tell of is left out');
  assert.deepEqual(said({ input_path: false }), ['Broker: deaf: the probe message does not return']);
  assert.deepEqual(said({ sessions: [{ filter: 'a', connected: true }, { filter: 'b', connected: false }] }), ['Broker: 1 of 2 sessions not connected']);
  assert.deepEqual(said({ recording: false, not_recording_since: rfc3339(t0) }), ['Archive: not recording since 09:00:00 UTC']);
  assert.deepEqual(said({ disk: { since: rfc3339(t0), why: '2.1 GB free, enough for about 3 h as it fills now', behind: 2.1 } }), ['Disk: soon full, since 09:00:00 UTC: 2.1 GB free, enough for about 3 h as it fills now']);
  assert.deepEqual(said({ webhook: { since: rfc3339(t0), why: 'connection refused', behind: 3 }, database: null }), ['Webhook: fails since 09:00:00 UTC: connection refused; 3 waiting']);
  assert.deepEqual(pathParts(status(t0, { database: null, webhook: null }), 0.05, ['webhook']).slice(3, 5).map((p) => p.said), ['none is set up', 'no failure']);
  assert.deepEqual(said({ sources: [{ topic: 't', age_s: 9, messages: 1, skew_s: 0, alive: false }] }), ['Sources: 1 silent']);
});
