import assert from 'node:assert/strict';
import { test } from 'node:test';
import type { Frame } from '../src/frames';
import { Link, type Socket, backoff, liveURL, longestWait, restartCode, silenceLimit } from '../src/link';

test('the wait doubles up to 2 s and is never longer', () => {
  assert.deepEqual([0, 1, 2, 3, 4, 5, 50].map((n) => backoff(n, 0)), [100, 200, 400, 800, 1600, longestWait, longestWait]);
  for (let n = 0; n < 40; n++) {
    const wait = backoff(n, 0.999);
    assert.ok(wait <= longestWait && wait >= 0.8 * backoff(n, 0) - 1e-9);
  }
});

test('the address carries rig, channels, rate and the position', () => {
  const url = new URL(liveURL('http://rig.example:8189/sub/index.html#/watch', 'cell 4', '3.1201'));
  assert.equal(url.protocol, 'ws:');
  assert.equal(url.pathname, '/sub/live');
  assert.equal(url.hash, '');
  assert.deepEqual(Object.fromEntries(url.searchParams), { rig: 'cell 4', channels: '*', rate: '20', from: '3.1201' });
  assert.equal(new URL(liveURL('https://h/', 'a', '')).protocol, 'wss:');
  assert.equal(new URL(liveURL('http://h/', 'a', '')).searchParams.get('from'), null);
});

/** Sockets and timers under the test's hand. */
function bench() {
  const opened: { url: string; socket: Socket; closed: boolean }[] = [];
  const timers = new Map<number, { ms: number; f: () => void }>();
  let id = 0;
  const frames: Frame[] = [];
  let changes = 0;
  let position = '';
  const link = new Link({
    open(url) {
      const entry: (typeof opened)[number] = { url, closed: false, socket: { onopen: null, onmessage: null, onclose: null, close: () => { entry.closed = true; } } };
      opened.push(entry);
      return entry.socket;
    },
    after(ms, f) {
      timers.set(++id, { ms, f });
      return id;
    },
    cancel: (t) => timers.delete(t as number),
    random: () => 0,
  }, (afresh) => `ws://x/${afresh ? '' : position}`, (f) => frames.push(f), () => { changes++; });
  const fire = (ms: number): void => {
    const [key, timer] = [...timers].find(([, t]) => t.ms === ms) ?? [];
    assert.ok(key !== undefined && timer, `a timer of ${ms} ms is set, have ${[...timers.values()].map((t) => t.ms)}`);
    timers.delete(key);
    timer.f();
  };
  const last = () => opened[opened.length - 1] as (typeof opened)[number];
  return { link, opened, timers, frames, fire, last, changes: () => changes, at: (p: string) => { position = p; } };
}
const nothing = undefined as never;

test('a lost link comes back at the position of its last frame', () => {
  const b = bench();
  b.link.start();
  b.last().socket.onopen?.(nothing);
  assert.ok(b.link.connected);
  b.last().socket.onmessage?.({ data: '{"kind":"reset","reason":"epoch"}' });
  assert.equal(b.frames.length, 1);
  b.at('3.17');
  b.last().socket.onclose?.({ code: 1006 });
  assert.ok(!b.link.connected);
  assert.equal(b.changes(), 2);
  b.fire(100);
  assert.equal(b.last().url, 'ws://x/3.17');
});

test('after a change of configuration it begins afresh until a frame has come', () => {
  const b = bench();
  b.at('3.17');
  b.link.start();
  b.last().socket.onclose?.({ code: restartCode });
  b.fire(100);
  assert.equal(b.last().url, 'ws://x/');
  b.last().socket.onmessage?.({ data: '{"kind":"reset","reason":"x"}' });
  b.last().socket.onclose?.({ code: 1006 });
  b.fire(100);
  assert.equal(b.last().url, 'ws://x/3.17');
});

test('tries come at growing waits until a frame, not merely an open socket', () => {
  const b = bench();
  b.link.start();
  b.last().socket.onclose?.({ code: 1006 });
  b.fire(100);
  b.last().socket.onopen?.(nothing);
  b.last().socket.onclose?.({ code: 1006 });
  b.fire(200);
  b.last().socket.onclose?.({ code: 1006 });
  b.fire(400);
  b.last().socket.onopen?.(nothing);
  b.last().socket.onmessage?.({ data: '{"kind":"reset","reason":"x"}' });
  b.last().socket.onclose?.({ code: 1006 });
  b.fire(100);
  assert.equal(b.opened.length, 5);
});

test('a socket that stays silent is given up even when it never reports a close', () => {
  const b = bench();
  b.link.start();
  b.last().socket.onopen?.(nothing);
  b.fire(silenceLimit);
  assert.ok(b.opened[0]?.closed);
  assert.ok(!b.link.connected);
  b.fire(100);
  assert.equal(b.opened.length, 2);
  b.opened[0]?.socket.onclose?.({ code: 1006 }); // the late close of the old one
  b.opened[0]?.socket.onmessage?.({ data: '{"kind":"reset","reason":"late"}' });
  assert.equal(b.opened.length, 2);
  assert.equal(b.frames.length, 0);
});

test('a broken frame is passed over', () => {
  const b = bench();
  b.link.start();
  b.last().socket.onmessage?.({ data: '{"kind":' });
  assert.equal(b.frames.length, 0);
});

test('stop means stop', () => {
  const b = bench();
  b.link.start();
  b.link.stop();
  b.opened[0]?.socket.onclose?.({ code: 1006 });
  assert.equal(b.timers.size, 0);
  assert.ok(b.opened[0]?.closed);
});
