import assert from 'node:assert/strict';
import { test } from 'node:test';
import { priorityLook } from '../src/alarms';
import { type Palette, contrast, dark, light } from '../src/palette';

test('contrast of black and white is 21, of equals 1 [WCAG 2.2]', () => {
  assert.ok(Math.abs(contrast('#000000', '#ffffff') - 21) < 1e-9);
  assert.equal(contrast('#777777', '#777777'), 1);
  assert.ok(Math.abs(contrast('#767676', '#ffffff') - 4.54) < 0.01, 'the known grey at the AA limit');
});

// Text 4.5:1 [1.4.3]; lines, borders of controls and shapes 3:1 [1.4.11].
const text: [keyof Palette, keyof Palette][] = [
  ['text', 'ground'], ['text', 'panel'], ['text', 'choked'], ['soft', 'ground'], ['soft', 'panel'], ['soft', 'choked'], ['data', 'ground'], ['data', 'panel'], ['data', 'choked'],
  ['onWarning', 'warning'], ['onCaution', 'caution'], ['warningInk', 'panel'], ['warningInk', 'ground'], ['cautionInk', 'panel'], ['cautionInk', 'ground'], ['panel', 'text'],
];
const shapes: [keyof Palette, keyof Palette][] = [
  ['edge', 'ground'], ['edge', 'panel'], ['data', 'panel'], ['data', 'choked'], ['data2', 'panel'], ['data2', 'choked'], ['warning', 'panel'],
  ['warningInk', 'choked'], ['cautionInk', 'choked'], ['cautionInk', 'panel'], ['data', 'ground'],
];
for (const [name, palette] of [['light', light], ['dark', dark]] as const) {
  test(`${name} palette`, async (t) => {
    for (const [limit, pairs] of [[4.5, text], [3, shapes]] as const) {
      for (const [a, b] of pairs) {
        if (a === 'warning' && palette === dark) continue; // there the fill stands inside a border of warningInk
        await t.test(`${a} on ${b} at least ${limit}`, () => {
          const c = contrast(palette[a], palette[b]);
          assert.ok(c >= limit, `${palette[a]} on ${palette[b]}: ${c.toFixed(2)}`);
        });
      }
    }
  });
}

test('every priority has a shape and a word of its own', () => {
  const looks = Object.values(priorityLook);
  assert.equal(new Set(looks.map((l) => l.shape)).size, looks.length);
  assert.equal(new Set(looks.map((l) => l.word)).size, looks.length);
});
