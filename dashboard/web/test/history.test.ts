import assert from 'node:assert/strict';
import { test } from 'node:test';
import type { Frame, HelloFrame, SeriesReply } from '../src/frames';
import { type Source, firstChunk, opening, reach, rowsOf } from '../src/history';
import { apply, newModel, recall } from '../src/state';
import { rfc3339 } from '../src/time';
import { alarm, hello, point, t0 } from './samples';

const never = new AbortController().signal;
const n = (t: number): number => Math.round(t * 20);

/**
 * A run with 20 scans/s up to `age`, of which [0, stored) is in closed chunks; the
 * position of second t is epoch.20 t.
 */
function server(age: number, stored: number, epochs: { hello: number; series: number } = { hello: 1, series: 1 }) {
  const asked: string[] = [];
  const frame = (t: number): Frame => point(t0 + t, { epoch: epochs.hello, n: n(t) });
  const source: Source = {
    async hello(): Promise<HelloFrame> {
      return hello(t0 + age, { epoch: epochs.hello, n: n(age), host_time: rfc3339(t0 + age) });
    },
    async series(_run, _names, from, to): Promise<SeriesReply> {
      asked.push(`series ${from}-${to}`);
      if (stored === 0) throw new Error('no series stored yet');
      const t = Array.from({ length: Math.ceil((Math.min(to, stored) - from) * 2) }, (_, i) => from + i / 2);
      return { through: `${epochs.series}.${n(stored)}`, series: { npr: { unit: '', t, min: t.map(() => 2), max: t.map(() => 2.2), last: t.map(() => 2.1), n: t.map(() => 10), cause: null } } };
    },
    async messages(_run, from, to, kinds, _signal, onFrame) {
      asked.push(`${kinds || 'all'} ${from.toFixed(1)}-${to}`);
      if (kinds) {
        onFrame({ kind: 'alarm', epoch: 1, n: 1, t: rfc3339(t0), alarm: alarm() });
        onFrame({ kind: 'mark', epoch: 1, n: 2, t: rfc3339(t0 + 1), mark: { text: 'point 1', by: 'x' } });
        return;
      }
      onFrame(hello(t0 + from));
      for (let i = Math.ceil(from * 20); i < Math.min(to, age) * 20; i++) onFrame(frame(i / 20));
    },
  };
  return { source, asked };
}
const at = (rows: { t: number }[], i: number): number => Math.round(((rows.at(i)?.t ?? NaN) - t0) * 1000) / 1000;

test('in the first minute the records are stepped again, from the start of the run', async () => {
  const { source, asked } = server(30, 0);
  const o = await opening(source, 'cell', never);
  assert.deepEqual([at(o.rows, 0), at(o.rows, -1), o.rows.length], [0, 29.95, 600]);
  assert.equal(o.from, '1.599', 'the link goes on behind the last frame');
  assert.ok(!asked.some((a) => a.startsWith('series')), 'no series is asked for while none can be there');
});

test('later the stored part is fetched and the link brings what is behind it', async () => {
  const { source, asked } = server(200, 180);
  const o = await opening(source, 'cell', never);
  assert.equal(o.from, `1.${n(180)}`);
  assert.ok(at(o.rows, -1) >= 179 && at(o.rows, -1) < 181);
  assert.ok(!asked.some((a) => a.startsWith('all')));
});

test('a long run is fetched as far back as the traces reach', async () => {
  const { source, asked } = server(5000, 4980);
  await opening(source, 'cell', never);
  assert.ok(asked.includes(`series ${5001 - reach}-5001`));
});

test('after a restart within the run the rest is stepped again, for the link has it not', async () => {
  const { source } = server(200, 150, { hello: 2, series: 1 });
  const o = await opening(source, 'cell', never);
  assert.equal(o.from, `2.${n(199.95)}`);
  assert.equal(at(o.rows, -1), 199.95);
  for (let i = 1; i < o.rows.length; i++) assert.ok((o.rows[i]?.t ?? NaN) - (o.rows[i - 1]?.t ?? NaN) <= 1.001, `a hole before row ${i}`);
});

test('between runs the link goes on behind the hello', async () => {
  const { source, asked } = server(30, 0);
  const o = await opening({ ...source, hello: async () => hello(t0, { run: null, epoch: 4, n: 77 }) }, 'cell', never);
  assert.deepEqual([o.from, o.rows.length, asked.length], ['4.77', 0, 0]);
});

test('rows of a stretch: stored as far as they are, stepped from there on', async () => {
  const whole = server(300, 300);
  assert.ok((await rowsOf(whole.source, 'r', t0, 0, 300, false, never)).length > 300);
  assert.ok(!whole.asked.some((a) => a.startsWith('all')), 'nothing is stepped where all is stored');
  const part = server(300, 250);
  assert.equal(at(await rowsOf(part.source, 'r', t0, 0, 300, false, never), -1), 299.95);
  const young = server(firstChunk - 1, 0);
  assert.equal(at(await rowsOf(young.source, 'r', t0, 0, 60, true, never), -1), 59.95);
});

test('stored events and the link overlap without doubling', () => {
  const m = newModel();
  const raised: Frame = { kind: 'alarm', epoch: 1, n: 5, t: rfc3339(t0), alarm: alarm() };
  const acknowledged: Frame = { kind: 'alarm', epoch: 1, n: 9, t: rfc3339(t0 + 3), alarm: alarm({ state: 'acknowledged', revision: 2 }) };
  const gone: Frame = { kind: 'alarm', epoch: 1, n: 12, t: rfc3339(t0 + 5), alarm: alarm({ state: 'normal', revision: 3 }) };
  apply(m, hello(t0 + 4, { alarms: [alarm({ state: 'acknowledged', revision: 2 })] }), 0);
  recall(m, [raised, acknowledged] as never);
  for (const f of [raised, acknowledged, gone]) apply(m, f, 1);
  assert.deepEqual(m.history.map((e) => `${e.from}>${e.to}`), ['normal>unacknowledged', 'unacknowledged>acknowledged', 'acknowledged>normal']);
  assert.equal(m.flags.length, 1);
  assert.equal(m.alarms.size, 0);
});
