import assert from 'node:assert/strict';
import { test } from 'node:test';
import type { LogEntry } from '../src/frames';
import { actor, deedWord, enter, entryTime, subject } from '../src/oplog';
import { rfc3339 } from '../src/time';
import { t0 } from './samples';

test('an entry in words', async (t) => {
  const rows: { name: string; entry: LogEntry; deed: string; about: string; by: string }[] = [
    { name: 'an acknowledgement', entry: { what: 'acknowledge', rule: 'unchoke', alarm: 'r1/unchoke/1', by: 'M. Alder', role: 'operator' }, deed: 'acknowledged', about: 'unchoke', by: 'M. Alder, operator' },
    { name: 'a value as it was entered', entry: { what: 'entry', name: 'oil level', value: 4.5, unit: 'l', text: 'before start', by: 'M. Alder' }, deed: 'entry', about: 'oil level 4.5 l: before start', by: 'M. Alder' },
    { name: 'a text alone', entry: { what: 'mark', text: 'point one', by: 'M. Alder' }, deed: 'mark', about: 'point one', by: 'M. Alder' },
    { name: 'a swap', entry: { what: 'swap', channel: 'egt_3', serial: 'TC-991', valid_from: rfc3339(t0 + 61), by: 'R. Sorrel', role: 'engineer' }, deed: 'sensor swapped', about: 'egt_3 serial TC-991 from 09:01:01 UTC', by: 'R. Sorrel, engineer' },
    { name: 'what a newer server tells', entry: { what: 'soak_begun', by: '', role: 'operator' }, deed: 'soak begun', about: '', by: 'operator' },
    { name: 'a value below zero', entry: { what: 'entry', name: 'zero of p7_1', value: -0.25, unit: 'kPa' }, deed: 'entry', about: 'zero of p7_1 −0.25 kPa', by: '' },
  ];
  for (const r of rows) {
    await t.test(r.name, () => assert.deepEqual([deedWord(r.entry), subject(r.entry), actor(r.entry)], [r.deed, r.about, r.by]));
  }
});

test('entries stand by time, each once, the newest kept', () => {
  const log: LogEntry[] = [];
  const at = (s: number, text: string): LogEntry => ({ what: 'mark', t: rfc3339(t0 + s), text });
  for (const e of [at(2, 'b'), at(1, 'a'), at(3, 'c'), at(2, 'b'), at(2, 'b2')]) enter(log, e, 10);
  assert.deepEqual(log.map((e) => e.text), ['a', 'b', 'b2', 'c']);
  enter(log, at(4, 'd'), 3);
  assert.deepEqual(log.map((e) => e.text), ['b2', 'c', 'd']);
});

test('the time of an entry names the day when it is another', () => {
  const e: LogEntry = { what: 'mark', t: rfc3339(t0) };
  assert.equal(entryTime(e, t0 + 60), '09:00:00');
  assert.equal(entryTime(e, t0 + 86_400), '2026-12-01 09:00:00 UTC');
});
