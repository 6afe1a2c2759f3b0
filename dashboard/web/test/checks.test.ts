import assert from 'node:assert/strict';
import { test } from 'node:test';
import { byKind, figure, kindWord, stateText, withSet } from '../src/checks';
import type { CheckItem, CheckSet } from '../src/frames';
import { rfc3339 } from '../src/time';
import { unitSets } from '../src/units';
import { t0 } from './samples';

const item = (id: string, body: Partial<CheckItem> = {}): CheckItem => ({ id, kind: id.split('.')[0] as string, channel: id.split('.')[1] ?? '', title: '', passed: true, text: '', value: null, limit: null, u95: null, unit: '', by: '', ...body });
const set = (body: Partial<CheckSet> = {}): CheckSet => ({
  phase: 'before', state: 'done', why: '', run: '', began: rfc3339(t0), ended: rfc3339(t0 + 10), warmth: 'cold', by: 'M. Alder', note: '', planned_s: null, passed: 2, of: 3,
  summary: 'Data-system checks passed 2 of 3. Not a clearance to start.', config_hash: '', limits_version: '', items: [], ...body,
});

test('a check that goes on stands beside the last results until it is done', () => {
  let c = withSet(null, set({ state: 'running', summary: '' }));
  assert.deepEqual([c.before, c.running?.state], [null, 'running']);
  c = withSet(c, set());
  assert.deepEqual([c.before?.passed, c.running], [2, null]);
  c = withSet(c, set({ phase: 'after', state: 'broken_off', why: 'the engine cranks' }));
  assert.deepEqual([c.before?.passed, c.after?.state], [2, 'broken_off']);
});

test('the sentence is that of the server, to the letter', () => {
  assert.equal(stateText(set()), 'Data-system checks passed 2 of 3. Not a clearance to start.');
  assert.equal(stateText(set({ state: 'running' })), 'The check goes on.');
  assert.equal(stateText(set({ state: 'broken_off', why: 'the engine cranks' })), 'The check was broken off: the engine cranks.');
});

test('items stand by kind in their order; what did not pass is not moved', () => {
  const groups = byKind([item('zero.p1'), item('zero.p2', { passed: false }), item('clock'), item('zero.p3')]);
  assert.deepEqual(groups.map((g) => [kindWord(g.kind), ...g.items.map((i) => i.channel)]), [['Zero', 'p1', 'p2', 'p3'], ['Clock', '']]);
  assert.equal(kindWord('new_kind'), 'new kind');
});

test('an error of zero is small: pascal in SI, digits enough in psi; a temperature is a difference', () => {
  const zero = item('zero.p1', { unit: 'Pa' });
  assert.equal(figure(zero, 3.14159, unitSets.si), '3.14 Pa');
  assert.equal(figure(zero, 139, unitSets.us), '0.0202 psi');
  assert.equal(figure(item('temperature.t1', { unit: 'K' }), 1.5, unitSets.si), '1.50 K');
  assert.equal(figure(item('temperature.t1', { unit: 'K' }), 1.5, unitSets.us), '2.70 °F');
  assert.equal(figure(item('disk', { unit: 'Gb' }), 12, unitSets.si), '12.0 Gb');
  assert.equal(figure(zero, null, unitSets.si), '–');
});
