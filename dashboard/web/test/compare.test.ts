import assert from 'node:assert/strict';
import { test } from 'node:test';
import { changeText, drawn, familiesOf, valueAt } from '../src/compare';
import type { RunSummary } from '../src/frames';

const run = (id: string, parent: string | null = null): RunSummary => ({ id, parent }) as RunSummary;

test('a reduction stands behind its parent, that of a reduction behind it; without one it stands for itself', () => {
  const list = [run('c'), run('b-r2', 'b'), run('b-r1', 'b'), run('b'), run('b-r1-r1', 'b-r1'), run('x-r1', 'x')];
  assert.deepEqual(familiesOf(list).map((r) => r.id), ['c', 'b', 'b-r1', 'b-r1-r1', 'b-r2', 'x-r1']);
});

test('a bucket is drawn by its lowest and highest value, a gap as one, from the zero on', () => {
  const s = { unit: 'K', t: [10, 11, 12, 20], min: [1, 2, null, 4], max: [5, 6, null, 4], n: [9, 9, 0, 1], cause: null };
  assert.deepEqual(drawn(s, 10, (v) => v * 2), { t: [0, 0.5, 1, 1.5, 2, 6, 10], y: [2, 10, 4, 12, null, null, 8] });
  assert.deepEqual(drawn(undefined, 0, (v) => v), { t: [], y: [] });
});

test('the value under the cursor is that of the nearest place within reach', () => {
  const d = { t: [0, 1, 2], y: [5, null, 7] };
  assert.deepEqual([-0.4, 0.6, 1.6, 2.9, 3.5].map((t) => valueAt(d, t, 1)), [5, null, 7, 7, null]);
  assert.equal(valueAt({ t: [], y: [] }, 0, 1), null);
});

test('what became of an alarm is told from the old run to the new', () => {
  const a = { rule: 'r', title: 'T' };
  assert.equal(changeText({ ...a, change: 'appears', a_s: null, b_s: 125.25, moved_s: null }), 'only in the new run, at 0:02:05.2');
  assert.equal(changeText({ ...a, change: 'vanishes', a_s: 60, b_s: null, moved_s: null }), 'only in the old run, at 0:01:00.0');
  assert.equal(changeText({ ...a, change: 'moves', a_s: 60, b_s: 58.7, moved_s: -1.3 }), '0:01:00.0 in the old, 0:00:58.7 in the new: 1.30 s earlier');
});
