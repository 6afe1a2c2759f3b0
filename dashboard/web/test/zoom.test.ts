import assert from 'node:assert/strict';
import { test } from 'node:test';
import { zoomed } from '../src/zoom';

test('keys zoom and move a stretch within what there is', () => {
  const whole = [0, 100] as const;
  const rows: [key: string, shown: [number, number], want: readonly number[] | null | undefined][] = [
    ['+', [20, 60], [30, 50]],
    ['=', [20, 60], [30, 50]],
    ['+', [50, 50.5], [49.75, 50.75]], // not below a second
    ['-', [40, 60], [30, 70]],
    ['-', [0, 20], [0, 40]],
    ['-', [90, 100], [80, 100]],
    ['-', [20, 80], null], // as wide as all there is
    ['ArrowLeft', [40, 60], [35, 55]],
    ['ArrowLeft', [2, 22], [0, 20]],
    ['ArrowRight', [79, 99], [80, 100]],
    ['Home', [40, 60], [0, 20]],
    ['End', [40, 60], [80, 100]],
    ['0', [40, 60], null],
    ['Escape', [40, 60], null],
    ['x', [40, 60], undefined],
  ];
  for (const [key, shown, want] of rows) assert.deepEqual(zoomed(key, shown, whole), want, `${key} at ${shown.join()}`);
});
