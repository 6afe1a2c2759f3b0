import assert from 'node:assert/strict';
import { test } from 'node:test';
import type { Frame } from '../src/frames';
import { Player, windowLength } from '../src/player';
import { columns } from '../src/ring';
import { apply, newModel } from '../src/state';
import { seconds } from '../src/time';
import { Run, runLength, scanRate } from './sim.mjs';

const start = Date.parse('2026-11-30T09:12:00Z');

/** A whole made-up run, with a hello before each second. */
function recorded() {
  const run = new Run('r1', 1, start, 5);
  const hellos = [run.hello()];
  const frames: Frame[] = [];
  while (!run.done) {
    frames.push(...run.next());
    if (Math.round(run.time * scanRate) % scanRate === 0) hellos.push(run.hello());
  }
  const at = (f: Frame): number => ('t' in f ? seconds(f.t) - start / 1000 : NaN);
  const asked: [number, number][] = [];
  const store = {
    async window(from: number, to: number): Promise<Frame[]> {
      asked.push([from, to]);
      return [hellos[Math.min(Math.floor(from), hellos.length - 1)] as Frame, ...frames.filter((f) => at(f) >= from && at(f) < to)];
    },
    async before(to: number): Promise<{ t: number; row: number[] }[]> {
      return to > 0 ? [{ t: start / 1000, row: new Array<number>(columns.length + 1).fill(1) }] : [];
    },
  };
  return { frames, store, asked, at };
}
const settle = (): Promise<void> => new Promise((r) => setImmediate(r));

test('playing a whole run gives the same as folding all its frames', async () => {
  const { frames, store, asked } = recorded();
  const p = new Player(store, start / 1000, runLength);
  await p.seek(0, 0);
  p.playing = true;
  p.speed = 20;
  for (let i = 0; i < 400 && p.playing; i++) {
    p.advance(0.02, i);
    await settle();
  }
  const m = newModel(true);
  for (const f of frames) apply(m, f, 0);
  assert.equal(p.position, runLength);
  assert.ok(!p.playing, 'it stops at the end');
  assert.deepEqual(p.model.point, m.point);
  assert.deepEqual([...p.model.alarms.values()], [...m.alarms.values()]);
  assert.deepEqual(p.model.ledgers, m.ledgers);
  assert.equal(p.model.ring.size, m.ring.size);
  for (let i = 1; i < asked.length; i++) assert.equal(asked[i]?.[0], asked[i - 1]?.[1], 'windows join without a hole');
});

test('position follows the page clock times the speed', async () => {
  const { store } = recorded();
  const p = new Player(store, start / 1000, runLength);
  await p.seek(10, 0);
  p.playing = true;
  p.speed = 5;
  for (let i = 0; i < 10; i++) p.advance(0.1, i);
  assert.ok(Math.abs(p.position - 15) < 1e-9);
  assert.ok(Math.abs(seconds(p.model.point?.t ?? '') - start / 1000 - 15) <= 1 / scanRate);
  p.playing = false;
  p.advance(1, 99);
  assert.ok(Math.abs(p.position - 15) < 1e-9, 'a pause holds');
});

test('it waits for frames rather than running ahead of them', async () => {
  const { store } = recorded();
  let release = (): void => undefined;
  let slow = false;
  const p = new Player({
    ...store,
    window: async (from, to) => {
      if (slow) await new Promise<void>((r) => { release = r; });
      return store.window(from, to);
    },
  }, start / 1000, runLength);
  await p.seek(0, 0);
  slow = true;
  p.playing = true;
  p.speed = 10;
  for (let i = 0; i < 5; i++) p.advance(1, i);
  assert.equal(p.position, windowLength(10));
  assert.ok(p.waiting);
  release();
  await settle();
  p.advance(0.1, 9);
  assert.ok(p.position > windowLength(10));
});

test('a seek shows the alarms and ledgers as they were', async () => {
  const { store } = recorded();
  const p = new Player(store, start / 1000, runLength);
  await p.seek(43, 0);
  assert.deepEqual([...p.model.alarms.values()].map((a) => a.rule).sort(), ['egt_run_720', 'probe_lost', 'unchoke_armed']);
  assert.ok(p.model.ledgers[0]?.exceeded);
  assert.ok(p.model.point, 'an operating point is shown at once');
  assert.equal(p.model.ring.t(0), start / 1000, 'the traces reach back');
});

test('steps forward and back are one scan each, across windows too', async () => {
  const { store } = recorded();
  const p = new Player(store, start / 1000, runLength);
  await p.seek(windowLength(1) - 0.5, 0);
  await settle();
  p.playing = true;
  p.speed = 1;
  for (let i = 0; i < 400; i++) {
    p.advance(0.1, i);
    await settle();
  }
  p.playing = false;
  const scan = p.model.point?.scan as number;
  assert.ok(p.step(0));
  assert.equal(p.model.point?.scan, scan + 1);
  for (let i = 1; i <= 240; i++) {
    assert.ok(p.back(0), `step ${i} back`);
    assert.equal(p.model.point?.scan, scan + 1 - i);
    assert.equal(p.model.ring.t(p.model.ring.size - 1), seconds(p.model.point?.t ?? ''));
  }
});

test('a failed window stops the replay and says why; play tries again', async () => {
  const { store } = recorded();
  let broken = true;
  const p = new Player({ ...store, window: (from, to) => (broken ? Promise.reject(new Error('the server was not reached')) : store.window(from, to)) }, start / 1000, runLength);
  await p.seek(0, 0);
  assert.match(p.problem, /not reached/);
  broken = false;
  p.playing = true;
  p.advance(0, 0);
  await settle();
  p.advance(0.2, 1);
  assert.equal(p.problem, '');
  assert.ok(p.model.point);
});

test('a later seek wins over an earlier one that is still on its way', async () => {
  const { store } = recorded();
  const p = new Player(store, start / 1000, runLength);
  const first = p.seek(5, 0);
  const second = p.seek(40, 0);
  await Promise.all([first, second]);
  assert.ok(Math.abs(seconds(p.model.point?.t ?? '') - start / 1000 - 40) < 0.2);
});
