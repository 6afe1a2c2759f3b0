import assert from 'node:assert/strict';
import { test } from 'node:test';
import type { ChannelValue } from '../src/frames';
import { Sparks, sparkSpan } from '../src/spark';

const v = (value: number | null): ChannelValue => ({ value, raw: value, quality: value === null ? 'stale' : 'good', age_s: 0 });

test('the last minute of each channel, thinned to two values a second', () => {
  const s = new Sparks();
  for (let i = 0; i < 20 * 200; i++) s.push(i / 20, { a: v(i) });
  const { t, v: values } = s.of('a');
  assert.equal(t.length, values.length);
  assert.equal(t.length, 2 * sparkSpan + 1);
  assert.equal(t[t.length - 1], 199.5);
  assert.equal(values[values.length - 1], 199.5 * 20);
});

test('a hole stays a hole, and a channel that comes later has no past', () => {
  const s = new Sparks();
  s.push(0, { a: v(1) });
  s.push(1, { a: v(null), b: v(5) });
  s.push(2, { b: v(6) });
  assert.deepEqual([...s.of('a').v], [1, null, null]);
  assert.deepEqual([...s.of('b').v], [null, 5, 6]);
  assert.deepEqual([...s.of('unknown').v], []);
});

test('an older time, or none, is passed over', () => {
  const s = new Sparks();
  s.push(5, { a: v(1) });
  s.push(4, { a: v(2) });
  s.push(NaN, { a: v(3) });
  assert.deepEqual([...s.of('a').v], [1]);
});
