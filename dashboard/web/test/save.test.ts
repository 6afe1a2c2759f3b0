import assert from 'node:assert/strict';
import { test } from 'node:test';
import { fileName, receive } from '../src/save';

test('the name of a file is the server’s, never a path', () => {
  assert.equal(fileName('attachment; filename="run-7-scans.parquet"', 'x'), 'run-7-scans.parquet');
  for (const none of [null, 'attachment', 'attachment; filename="../etc/x"', 'attachment; filename=""']) assert.equal(fileName(none, 'run.csv'), 'run.csv');
});

function stream(pieces: Uint8Array[], fails = false): Response {
  let i = 0;
  return new Response(new ReadableStream({
    pull(c) {
      if (i < pieces.length) c.enqueue(pieces[i++]);
      else if (fails) c.error(new Error('broken off'));
      else c.close();
    },
  }), { headers: { 'Content-Type': 'text/csv' } });
}

test('a body is received whole, its bytes are told', async () => {
  const pieces = Array.from({ length: 5 }, (_, k) => new Uint8Array(9_000_000).fill(k + 1));
  const told: number[] = [];
  const blob = await receive(stream(pieces), (n) => { told.push(n); });
  assert.deepEqual(told, [9e6, 18e6, 27e6, 36e6, 45e6]);
  assert.equal(blob.size, 45_000_000);
  assert.equal(blob.type, 'text/csv');
  const bytes = new Uint8Array(await blob.arrayBuffer());
  assert.deepEqual([0, 9e6, 44_999_999].map((k) => bytes[k]), [1, 2, 5]);
});

test('a body that breaks off is an error', async () => {
  await assert.rejects(receive(stream([new Uint8Array(10)], true), () => undefined), /broken off/);
});
