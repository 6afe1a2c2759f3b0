import assert from 'node:assert/strict';
import { test } from 'node:test';
import { asideSteps, grouped, needsAcknowledge, nextStep, occurrence, pageTitle, passes, sounds, standing } from '../src/alarms';
import type { Alarm } from '../src/frames';
import { rfc3339 } from '../src/time';
import { alarm, t0 } from './samples';

const a = (id: string, body: Partial<Alarm>): Alarm => alarm({ id, ...body });

test('most urgent first', async (t) => {
  // Expected orders: 14 CFR 25.1322 priorities; unacknowledged before acknowledged within awareness.
  const rows: { name: string; list: Alarm[]; want: string[] }[] = [
    { name: 'by priority', list: [a('n', { priority: 'note' }), a('c', { priority: 'caution' }), a('w', {}), a('d', { priority: 'advisory' })], want: ['w', 'c', 'd', 'n'] },
    { name: 'a new caution before an acknowledged warning', list: [a('w', { state: 'acknowledged' }), a('c', { priority: 'caution' })], want: ['c', 'w'] },
    { name: 'an acknowledged warning before a new advisory', list: [a('d', { priority: 'advisory' }), a('w', { state: 'acknowledged' })], want: ['w', 'd'] },
    { name: 'present before returned', list: [a('r', { state: 'returned_unacknowledged', raised: rfc3339(t0 + 9) }), a('p', {})], want: ['p', 'r'] },
    { name: 'first out before its followers', list: [a('late', { raised: rfc3339(t0 + 1) }), a('first', { first_out: true })], want: ['first', 'late'] },
    { name: 'newest first among equals', list: [a('old', {}), a('new', { raised: rfc3339(t0 + 1) })], want: ['new', 'old'] },
    { name: 'past last', list: [a('past', { past: true }), a('n', { priority: 'note' })], want: ['n', 'past'] },
    { name: 'shelved, suppressed, out of service and normal do not stand', list: [a('s', { state: 'shelved' }), a('d', { state: 'suppressed_by_design' }), a('o', { state: 'out_of_service' }), a('x', { state: 'normal' }), a('w', {})], want: ['w'] },
  ];
  for (const r of rows) {
    await t.test(r.name, () => {
      assert.deepEqual(standing(r.list).map((x) => x.id), r.want);
      assert.deepEqual(standing([...r.list].reverse()).map((x) => x.id), r.want, 'whatever the order of arrival');
    });
  }
});

test('only a present, unacknowledged warning or caution sounds', () => {
  assert.ok(sounds(alarm()));
  assert.ok(!sounds(alarm({ state: 'acknowledged' })));
  assert.ok(!sounds(alarm({ state: 'returned_unacknowledged' })));
  assert.ok(!sounds(alarm({ past: true })));
  assert.ok(!sounds(alarm({ priority: 'note' })));
  assert.ok(needsAcknowledge(alarm({ state: 'latched_unacknowledged' })));
  assert.ok(!needsAcknowledge(alarm({ state: 'latched_acknowledged' })));
  assert.equal(nextStep(alarm({ state: 'latched_unacknowledged' }))?.path, 'acknowledge');
  assert.equal(nextStep(alarm({ state: 'latched_acknowledged' }))?.path, 'reset');
  assert.equal(nextStep(alarm({ state: 'acknowledged' })), null);
});

test('what puts an alarm aside: never a warning on the shelf', () => {
  const paths = (body: Partial<Alarm>): string[] => asideSteps(alarm(body)).map((s) => s.path);
  assert.deepEqual(paths({}), ['out-of-service'], 'a warning is not shelved [ISA-18.2 leaves it to the philosophy; here never]');
  assert.deepEqual(paths({ priority: 'caution' }), ['shelve', 'out-of-service']);
  assert.deepEqual(paths({ priority: 'caution', state: 'shelved' }), ['unshelve', 'out-of-service']);
  assert.deepEqual(paths({ state: 'out_of_service' }), ['in-service']);
  assert.deepEqual(paths({ priority: 'advisory', state: 'suppressed_by_design' }), ['out-of-service']);
  assert.deepEqual(paths({ state: 'normal', priority: 'caution' }), ['shelve', 'out-of-service'], 'one of the history');
});

test('consequences stand under their cause', () => {
  const list = [a('source', { priority: 'caution' }), a('probes', { priority: 'advisory', under: 'source' }), a('choke', { priority: 'caution', under: 'source', state: 'acknowledged' }), a('egt', { state: 'acknowledged' }), a('orphan', { priority: 'note', under: 'gone' })];
  const want = ['source', '>choke', '>probes', 'egt', 'orphan'];
  for (const l of [list, [...list].reverse()]) assert.deepEqual(grouped(l).map((b) => (b.under ? '>' : '') + b.alarm.id), want);
  const worse = [a('cause', { priority: 'advisory', state: 'acknowledged' }), a('effect', { under: 'cause' }), a('other', { priority: 'caution' })];
  assert.deepEqual(grouped(worse).map((b) => b.alarm.id), ['cause', 'effect', 'other'], 'a tree stands where its most urgent alarm would');
});

test('the title of the page carries the most urgent alarm', () => {
  const egt = a('w', { title: 'EGT beyond 720 °C' });
  const probe = a('d', { priority: 'advisory', title: 'EGT probe lost' });
  assert.equal(pageTitle([], false, 'Cell 2', ''), 'Cell 2 – throatwatch');
  assert.equal(pageTitle([egt], false, 'Cell 2', ''), '■ EGT beyond 720 °C – Cell 2');
  assert.equal(pageTitle([egt, probe], false, 'Cell 2', ''), '■ EGT beyond 720 °C (+1) – Cell 2');
  assert.equal(pageTitle([egt], true, 'Cell 2', ''), 'NO DATA LINK – Cell 2', 'what is shown is not present then');
  assert.equal(pageTitle([], false, 'Cell 2', 'r7'), 'REPLAY r7 – throatwatch');
  assert.equal(pageTitle([egt], false, 'Cell 2', 'r7'), 'live: ■ EGT beyond 720 °C – REPLAY r7', 'an alarm of the rig is not taken for one of the replay');
});

test('the filter of the history', () => {
  const x = a('w', { rule: 'egt_run_max_over', title: 'Indicated EGT above 720 °C', priority: 'caution' });
  assert.ok(passes(x, { priority: '', words: '' }));
  assert.ok(passes(x, { priority: 'caution', words: 'egt 720' }));
  assert.ok(passes(x, { priority: '', words: 'RUN_MAX' }));
  assert.ok(!passes(x, { priority: 'warning', words: '' }));
  assert.ok(!passes(x, { priority: '', words: 'egt oil' }));
});

test('an alarm that asks again is another occurrence', () => {
  assert.notEqual(occurrence(alarm()), occurrence(alarm({ changed: rfc3339(t0 + 60) })));
});
