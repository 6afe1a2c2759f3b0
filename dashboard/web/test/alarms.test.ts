import assert from 'node:assert/strict';
import { test } from 'node:test';
import { needsAcknowledge, nextStep, sounds, standing } from '../src/alarms';
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
