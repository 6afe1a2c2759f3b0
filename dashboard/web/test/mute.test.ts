import assert from 'node:assert/strict';
import { test } from 'node:test';
import { Mute } from '../src/mute';

test('a mute holds for its time, counted down', () => {
  const m = new Mute();
  assert.ok(!m.holds(0, []), 'none at first');
  m.start(1000, 60, ['egt 1']);
  assert.equal(m.left(1000), 60);
  assert.equal(m.left(31_000), 30);
  assert.ok(m.holds(60_999, ['egt 1']));
  assert.ok(!m.holds(61_000, ['egt 1']), 'over');
});

test('a new warning breaks it, for good', () => {
  const m = new Mute();
  m.start(0, 600, ['egt 1']);
  assert.ok(m.holds(10, ['egt 1']));
  assert.ok(m.holds(20, []), 'acknowledged meanwhile');
  assert.ok(!m.holds(30, ['egt 1', 'oil 7']));
  assert.ok(!m.holds(40, ['egt 1']), 'does not come back by itself');
  assert.equal(m.left(40), 0);
});

test('a warning that asks again is a new one', () => {
  const m = new Mute();
  m.start(0, 600, ['egt 1']);
  assert.ok(!m.holds(30, ['egt 2']));
});

test('it is ended by hand', () => {
  const m = new Mute();
  m.start(0, 600, []);
  m.end();
  assert.ok(!m.holds(1, []));
});
