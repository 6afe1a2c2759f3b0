import assert from 'node:assert/strict';
import { test } from 'node:test';
import { type Deed, type Session, openSession, refusal, sessionOf } from '../src/session';

const who = (role: Session['role']): Session => ({ name: 'R. Sorrel', role, csrf: 'x', open: false });

test('what each role may do', () => {
  // The server's own list: an operator acts on alarms, marks, enters, starts and ends
  // runs; all else that changes something is for an engineer.
  const operator: Deed[] = ['acknowledge', 'reset', 'shelve', 'unshelve', 'mark', 'entry', 'run', 'note'];
  const engineer: Deed[] = ['out-of-service', 'in-service', 'readmit', 'swap', 'config', 'delete'];
  for (const d of operator) assert.deepEqual([refusal(who('viewer'), d), refusal(who('operator'), d), refusal(who('engineer'), d)], ['for an operator', '', ''], d);
  for (const d of engineer) assert.deepEqual([refusal(who('viewer'), d), refusal(who('operator'), d), refusal(who('engineer'), d)], ['for an engineer', 'for an engineer', ''], d);
  assert.equal(refusal(openSession, 'acknowledge'), '', 'a server without users');
  assert.equal(refusal(openSession, 'config'), '', 'whoever reaches it may take changed files into force');
  assert.equal(refusal(openSession, 'swap'), 'for an engineer');
});

test('an answer of the server is read without trust', () => {
  assert.deepEqual(sessionOf({ name: 'R. Sorrel', role: 'engineer', csrf: 'abc' }), { name: 'R. Sorrel', role: 'engineer', csrf: 'abc', open: false });
  assert.equal(sessionOf({ name: 'x', role: 'administrator' as 'viewer' }).role, 'viewer', 'an unknown role may only look');
  assert.deepEqual(sessionOf({}), { name: '', role: 'viewer', csrf: '', open: false });
  assert.equal(sessionOf({ name: 'operator', role: 'operator', open: true }).open, true);
});
