import assert from 'node:assert/strict';
import { test } from 'node:test';
import type { Frame } from '../src/frames';
import { apply, believable, dataAge, freshness, hostNow, newModel, runSeconds } from '../src/state';
import { rfc3339 } from '../src/time';
import { alarm, hello, point, status, t0 } from './samples';

function fold(...frames: [Frame, number][]): ReturnType<typeof newModel> {
  const m = newModel();
  for (const [f, now] of frames) apply(m, f, now);
  return m;
}
const alarmFrame = (a: ReturnType<typeof alarm>, t = t0, n = 2): Frame => ({ kind: 'alarm', epoch: 1, n, t: rfc3339(t), alarm: a });

test('an operating point becomes the present one and a row of the traces', () => {
  const m = fold([hello(t0), 0], [point(t0 + 1, { n: 7 }), 10]);
  assert.equal(m.point?.npr, 2.1);
  assert.equal(m.ring.size, 1);
  assert.equal(m.ring.choked(0), 1);
  assert.deepEqual([m.epoch, m.n], [1, 7], 'the position to resume from');
  assert.equal(runSeconds(m), 1);
});

test('a null quantity is a hole in the trace, never a zero', () => {
  const m = fold([point(t0, { npr: null, choke_state: 'unknown', cause: 'p7_2 stale' }), 0]);
  assert.ok(Number.isNaN(m.ring.value(0, 0)));
  assert.ok(Number.isNaN(m.ring.choked(0)));
});

test('an alarm goes through its states into the history and leaves the list when normal', () => {
  const m = fold(
    [hello(t0), 0],
    [alarmFrame(alarm()), 1],
    [alarmFrame(alarm({ state: 'acknowledged', revision: 2 })), 2],
    [alarmFrame(alarm({ state: 'normal', revision: 3 })), 3],
  );
  assert.equal(m.alarms.size, 0);
  assert.deepEqual(m.history.map((e) => `${e.from}>${e.to}`), ['normal>unacknowledged', 'unacknowledged>acknowledged', 'acknowledged>normal']);
  assert.deepEqual(m.flags.map((f) => f.kind), ['warning']);
});

test('an older copy of an alarm does not undo a newer one', () => {
  const m = fold([alarmFrame(alarm({ state: 'acknowledged', revision: 5 })), 0], [alarmFrame(alarm({ revision: 4 })), 1]);
  assert.equal(m.alarms.get('r1/egt/1')?.state, 'acknowledged');
});

test('a new hello replaces the list and keeps in the history what it lacks', () => {
  const m = fold([alarmFrame(alarm()), 0], [{ kind: 'reset', reason: 'epoch' }, 1], [hello(t0 + 5, { epoch: 2, alarms: [alarm({ id: 'other' })] }), 2]);
  assert.deepEqual([...m.alarms.keys()], ['other']);
  assert.match(m.history[m.history.length - 1]?.note ?? '', /not in the list/);
  assert.equal(m.epoch, 2);
  assert.equal(m.resets, 1);
});

test('an alarm put aside without being raised sets no flag', () => {
  const m = fold([alarmFrame(alarm({ raised: null, state: 'suppressed_by_design' })), 0]);
  assert.equal(m.flags.length, 0);
});

test('a latched alarm that comes again sets a second flag at its new time', () => {
  const m = fold(
    [alarmFrame(alarm()), 0],
    [alarmFrame(alarm({ state: 'latched_unacknowledged', revision: 2, changed: rfc3339(t0 + 5) })), 1],
    [alarmFrame(alarm({ state: 'unacknowledged', revision: 3, changed: rfc3339(t0 + 60) })), 2],
  );
  assert.deepEqual(m.flags.map((f) => f.t), [t0, t0 + 60]);
});

test('log, files in force and life come with the hello and go on by frames', () => {
  const m = fold(
    [hello(t0, { log: [{ what: 'mark', t: rfc3339(t0 - 5), text: 'earlier' }], config: { hash: 'aa', by: 'R. Sorrel', approved_by: 'L. Hazel', since: rfc3339(t0), refused: null } }), 0],
    [{ kind: 'log', epoch: 1, n: 3, t: rfc3339(t0 + 1), entry: { what: 'acknowledge', rule: 'egt', by: 'M. Alder' } }, 1],
    [{ kind: 'config', epoch: 1, n: 4, t: rfc3339(t0 + 2), config: { hash: 'bb', by: 'R. Sorrel', approved_by: '', since: rfc3339(t0 + 2), refused: { t: rfc3339(t0 + 2), why: 'engine not off' } } }, 2],
  );
  assert.deepEqual(m.log.map((e) => e.what), ['mark', 'acknowledge']);
  assert.equal(m.log[1]?.t, rfc3339(t0 + 1), 'the time of the frame');
  assert.equal(m.configHash, 'bb');
  assert.equal(m.config?.refused?.why, 'engine not off');
  apply(m, hello(t0 + 9), 9);
  assert.deepEqual([m.config, m.life, m.log.length], [null, null, 2], 'a server that tells nothing of them');
});

test('history and flags stay bounded', () => {
  const m = newModel();
  for (let i = 0; i < 1200; i++) apply(m, alarmFrame(alarm({ id: `a${i}`, raised: rfc3339(t0 + i) }), t0 + i, i), i);
  assert.equal(m.history.length, 500);
  assert.equal(m.flags.length, 500);
  assert.equal(m.flags[499]?.id, 'a1199', 'the newest are kept');
});

test('a frame of an unknown kind is passed over', () => {
  const m = fold([{ kind: 'later', epoch: 1, n: 9, t: rfc3339(t0) } as unknown as Frame, 0]);
  assert.equal(m.point, null);
});

test('data age: what the status said plus the time since data last came', () => {
  const m = fold([status(t0, { data_age_s: 0.2 }), 1000]);
  assert.ok(Math.abs((dataAge(m, 1500) ?? 0) - 0.7) < 1e-9);
  apply(m, point(t0 + 0.5), 1500);
  assert.ok(Math.abs((dataAge(m, 1500) ?? 0) - 0.2) < 1e-9);
  apply(m, status(t0 + 1, { data_age_s: null }), 2000);
  assert.equal(dataAge(m, 2000), null, 'no data yet is not an age of zero');
});

test('freshness', async (t) => {
  const rows: { name: string; frames: [Frame, number][]; connected: boolean; now: number; want: string }[] = [
    { name: 'before the first frame', frames: [], connected: true, now: 5000, want: 'waiting' },
    { name: 'points and status come', frames: [[status(t0), 1000], [point(t0), 1100]], connected: true, now: 1150, want: 'live' },
    { name: 'status 2 s old is still the link', frames: [[status(t0), 1000], [point(t0), 2900]], connected: true, now: 3000, want: 'live' },
    { name: 'no status for more than 2 s', frames: [[status(t0), 1000], [point(t0), 3000]], connected: true, now: 3001, want: 'no_link' },
    { name: 'no frame for less than 1.75 s', frames: [[status(t0), 1000]], connected: true, now: 2749, want: 'no_points' },
    { name: 'no frame for longer: grey within 2 s', frames: [[status(t0), 1000], [point(t0), 1100]], connected: true, now: 2851, want: 'no_link' },
    { name: 'socket gone', frames: [[status(t0), 1000], [point(t0), 1100]], connected: false, now: 1150, want: 'no_link' },
    { name: 'points stop, status goes on', frames: [[point(t0), 100], [status(t0 + 1), 1200]], connected: true, now: 1300, want: 'no_points' },
    { name: 'nothing has ever come: there is nothing to catch up with', frames: [[status(t0, { catching_up: true, data_age_s: null }), 1000]], connected: true, now: 1100, want: 'no_points' },
    { name: 'catching up after an outage', frames: [[status(t0, { catching_up: true, data_age_s: 40 }), 1000], [point(t0 - 40), 1010]], connected: true, now: 1100, want: 'catching_up' },
  ];
  for (const r of rows) {
    await t.test(r.name, () => assert.equal(freshness(fold(...r.frames), r.connected, r.now).kind, r.want));
  }
});

test('nothing of a lost link or of missing points is believed', () => {
  assert.ok(!believable({ kind: 'no_link', since: 0 }));
  assert.ok(!believable({ kind: 'no_points', age: 2 }));
  assert.ok(!believable({ kind: 'waiting' }));
  assert.ok(believable({ kind: 'live', age: 0.1 }));
});

test('no link tells since when by host time', () => {
  const m = fold([status(t0), 1000]);
  const f = freshness(m, true, 9000);
  assert.ok(f.kind === 'no_link' && f.since === t0);
  assert.equal(hostNow(m, 3000), t0 + 2);
});
