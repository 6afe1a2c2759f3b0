import assert from 'node:assert/strict';
import { test } from 'node:test';
import { facility, rfc3339, typed, typedClock } from '../src/time';

test('a time is typed as it is shown, in the zone of the facility', () => {
  const rows: [zone: string, words: string, want: string | null][] = [
    ['', '2026-12-01 16:00:00', '2026-12-01T16:00:00.000Z'],
    ['Europe/Zurich', '2026-12-01 16:00:00', '2026-12-01T15:00:00.000Z'],
    ['Europe/Zurich', ' 2026-07-01 16:00:00 ', '2026-07-01T14:00:00.000Z'],
    ['Europe/Zurich', '2026-03-29 01:59:59', '2026-03-29T00:59:59.000Z'],
    ['Europe/Zurich', '2026-03-29 02:30:00', null], // that hour was left out
    ['Europe/Zurich', '2026-03-29 03:00:00', '2026-03-29T01:00:00.000Z'],
    ['Europe/Zurich', '2026-10-25 02:30:00', '2026-10-25T00:30:00.000Z'], // comes twice
    ['America/New_York', '2026-12-01 23:30:00', '2026-12-02T04:30:00.000Z'],
    ['Europe/Zurich', 'noon', null],
  ];
  for (const [zone, words, want] of rows) {
    facility.set(zone, Date.parse('2026-12-01T00:00:00Z') / 1000);
    const t = typed(words);
    assert.equal(Number.isNaN(t) ? null : rfc3339(t), want, `${words} in ${zone || 'UTC'}`);
    if (want !== null) assert.equal(typedClock(t), words.trim());
  }
  facility.set(undefined, 0);
});
