import assert from 'node:assert/strict';
import { test } from 'node:test';
import type { SeriesReply } from '../src/frames';
import { Decimator, Ring, type Window, chokedSpans, columns, periods, seriesRows } from '../src/ring';

const row = (npr: number, choked = 0): number[] => [npr, ...new Array<number>(columns.length - 1).fill(NaN), choked];
function filled(n: number, dt: number, f: (i: number) => number): Ring {
  const ring = new Ring();
  for (let i = 0; i < n; i++) ring.push(i * dt, row(f(i)));
  return ring;
}

const decimate = (ring: Ring, wanted: string[], t0: number, t1: number, buckets: number): Window => new Decimator(wanted, (v) => v).window(ring, t1, t1 - t0, buckets);

test('the ring keeps the newest rows in order and refuses older ones', () => {
  const ring = filled(40_000, 0.05, (i) => i);
  assert.equal(ring.size, 32_768);
  assert.equal(ring.value(0, ring.size - 1), 39_999);
  assert.equal(ring.value(0, 0), 40_000 - 32_768);
  ring.push(1, row(7));
  assert.equal(ring.size, 32_768);
  assert.equal(ring.value(0, ring.size - 1), 39_999);
});

test('lower finds the first row at or after a time', () => {
  const ring = filled(100, 1, (i) => i);
  assert.equal(ring.lower(-5), 0);
  assert.equal(ring.lower(41.5), 42);
  assert.equal(ring.lower(42), 42);
  assert.equal(ring.lower(1e9), 100);
});

test('fill puts rows in front and into gaps only', () => {
  const ring = new Ring();
  for (const t of [10, 10.05, 20, 20.05]) ring.push(t, row(t));
  ring.fill([5, 9.9, 10.02, 15, 30].map((t) => ({ t, row: row(-t) })));
  const times = Array.from({ length: ring.size }, (_, i) => ring.t(i));
  // 9.9 lies in front of the first row; 10.02 is covered; 30 is the link's to bring.
  assert.deepEqual(times, [5, 9.9, 10, 10.05, 15, 20, 20.05]);
});

test('cut forgets what is after a time', () => {
  const ring = filled(10, 1, (i) => i);
  ring.cut(4.5);
  assert.equal(ring.size, 5);
  ring.push(4.7, row(1));
  assert.equal(ring.t(5), 4.7);
});

test('few rows are drawn as they are', () => {
  const w = decimate(filled(50, 0.05, (i) => i), ['npr'], 0, 2.45, 400);
  assert.equal(w.t.length, 50);
  assert.deepEqual(w.y[0]?.slice(0, 3), [0, 1, 2]);
});

test('a spike of one scan survives any thinning', () => {
  for (const buckets of [7, 40, 300]) {
    for (const spike of [1, 4567, 11_998]) {
      const ring = filled(12_000, 0.05, (i) => (i === spike ? 99 : i === spike + 1 ? -99 : Math.sin(i)));
      const y = decimate(ring, ['npr'], 0, 600, buckets).y[0] as number[];
      assert.equal(Math.max(...y), 99);
      assert.equal(Math.min(...y), -99);
      assert.ok(y.length <= 2 * (buckets + 2), `${y.length} points for ${buckets} buckets`);
    }
  }
});

test('lowest and highest come in the order of their occurrence', () => {
  const rising = decimate(filled(1000, 0.05, (i) => i), ['npr'], 0, 50, 10).y[0] as number[];
  for (let i = 1; i < rising.length; i++) assert.ok((rising[i] as number) > (rising[i - 1] as number));
});

test('the picture does not shimmer: buckets stay put while the window slides', () => {
  const ring = filled(12_000, 0.05, (i) => Math.sin(i * 0.7));
  const [a, b] = [decimate(ring, ['npr'], 100, 400, 100), decimate(ring, ['npr'], 100.35, 400.35, 100)];
  const inside = a.t.slice(4, -4);
  assert.ok(inside.every((t) => b.t.includes(t)));
});

test('what a decimator keeps is what a new one reads', () => {
  const ring = new Ring();
  const kept = new Decimator(['npr', 'speed_rpm'], (v) => 2 * v);
  const rising = (v: number): number => 2 * v;
  let t = 1_700_000_000;
  for (let i = 0; i < 60_000; i++) { // the ring overflows
    t += i % 997 === 0 ? 5 : 0.05; // with gaps
    ring.push(t, [Math.sin(i * 0.7), ...new Array<number>(5).fill(NaN), i % 89 === 0 ? NaN : Math.cos(i * 0.01), NaN, 0]);
    if (i % 31 === 0) ring.amend(t, 'npr', 5);
    if (i === 30_000) ring.cut(t - 20);
    if (i === 40_000) ring.fill([{ t: ring.t(0) - 1, row: row(3) }]);
    if (i % 53 !== 0) continue;
    const end = i % 371 === 0 ? t - 30 : t; // a stretch is being drawn: the axis stands
    const [a, b] = [kept.window(ring, end, 600, 250), new Decimator(['npr', 'speed_rpm'], rising).window(ring, end, 600, 250)];
    const from = a.t.length - b.t.length; // the first bucket may reach before the window
    assert.ok(from >= 0 && from <= 1, `${from} more`);
    assert.deepEqual(a.t.slice(from + 2), b.t.slice(2));
    assert.deepEqual(a.y.map((y) => y.slice(from + 2)), b.y.map((y) => y.slice(2)));
  }
});

test('a gap and a missing value break the line', () => {
  const ring = new Ring();
  for (const t of [0, 0.05, 5, 5.05]) ring.push(t, row(1));
  ring.push(5.1, row(NaN));
  const w = decimate(ring, ['npr'], 0, 6, 100);
  assert.deepEqual(w.y[0], [1, 1, null, 1, 1, null]);
  const thin = new Ring();
  for (let i = 0; i < 2000; i++) if (i < 500 || i > 900) thin.push(i * 0.05, row(1));
  assert.ok(decimate(thin, ['npr'], 0, 100, 20).y[0]?.includes(null));
});

test('no NaN and no infinity reaches a chart', () => {
  const w = decimate(filled(5000, 0.05, (i) => (i % 3 === 0 ? NaN : i)), ['npr', 'speed_rpm'], 0, 250, 50);
  for (const y of w.y) assert.ok(y.every((v) => v === null || Number.isFinite(v)));
});

test('choked periods end at gaps and at the last row', () => {
  const ring = new Ring();
  [[0, 1], [0.5, 1], [1, 0], [1.5, 1], [2, 1], [9, 1], [9.5, 1]].forEach(([t, c]) => ring.push(t as number, row(2, c)));
  assert.deepEqual(chokedSpans(ring, 0, 10), [[0, 1], [1.5, 2], [9, 9.5]]);
  ring.push(9.6, row(2, 1));
  ring.push(20, row(NaN, NaN)); // the first row after a gap does not know the state: the gap stays unshaded
  assert.deepEqual(chokedSpans(ring, 0, 30), [[0, 1], [1.5, 2], [9, 9.6]]);
});

test('stored series become rows that keep both extremes and the recorded state', () => {
  const reply: SeriesReply = {
    through: '1.9',
    series: {
      npr: { unit: '', t: [0, 10, 20], min: [1, 1.5, null], max: [1.2, 2.4, null], last: [1.1, 2, null], n: [200, 200, 0], cause: null },
      choke_state: { unit: '', t: [0, 12], state: ['unchoked', 'choked'], cause: null },
    },
  };
  const rows = seriesRows(reply, 1000);
  assert.deepEqual(rows.map((r) => [r.t, r.row[0], r.row[columns.length]]), [[1000, 1, 0], [1005, 1.2, 0], [1010, 1.5, 0], [1015, 2.4, 1], [1020, NaN, 1]]);
});

test('the extremes of a bucket before a gap are not put into the gap', () => {
  const reply: SeriesReply = { through: '1.9', series: { npr: { unit: '', t: [0, 0.3, 0.6, 40], min: [1, 1, 1, 1], max: [2, 2, 2, 2], last: [1, 1, 1, 1], n: [6, 6, 6, 6], cause: null } } };
  const times = seriesRows(reply, 0).map((r) => Math.round(r.t * 100) / 100);
  assert.deepEqual(times, [0, 0.15, 0.3, 0.45, 0.6, 0.75, 40, 40.15]);
});

test('transitions become periods up to the end of the run', () => {
  const s = { unit: '', t: [0, 3, 17.5], state: ['no_flow', 'unchoked', 'choked'], cause: null };
  assert.deepEqual(periods(s, 60), [{ from: 0, to: 3, word: 'no_flow' }, { from: 3, to: 17.5, word: 'unchoked' }, { from: 17.5, to: 60, word: 'choked' }]);
  assert.deepEqual(periods(undefined, 60), []);
  assert.deepEqual(periods({ unit: '', t: [], cause: 'no rows' }, 60), []);
});
