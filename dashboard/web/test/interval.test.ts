import assert from 'node:assert/strict';
import { test } from 'node:test';
import { chokeBand, probability } from '../src/interval';
import { point, t0 } from './samples';

const near = (got: number[], want: number[]): void => got.forEach((g, i) => assert.ok(Math.abs(g - (want[i] as number)) < 1e-12, `${got} for ${want}`));

test('the band of the choke line is the interval of the margin, in NPR', () => {
  // margin = 100 (npr / choke − 1): a margin of ±0.5 is ±0.005 choke in NPR.
  near(chokeBand(point(t0, { choke_npr: 1.86, choke_margin_percent: 20, choke_margin_percent_u95: 0.5 })), [0.0093, 0.0093]);
  // A margin of 20 that may be 24 at most: the line may lie 0.04 choke lower.
  near(chokeBand(point(t0, { choke_npr: 2, choke_margin_percent: 20, choke_margin_percent_u95: null, choke_margin_percent_low95: 19, choke_margin_percent_high95: 24 })), [0.08, 0.02]);
  assert.deepEqual(chokeBand(point(t0, { choke_margin_percent: 20 })), [0, 0], 'none where the uncertainty is not known');
  assert.deepEqual(chokeBand(point(t0, { choke_npr: null, choke_margin_percent: 20, choke_margin_percent_u95: 0.5 })), [0, 0]);
});

test('a probability near its ends is a bound', () => {
  assert.deepEqual([0, 0.0005, 0.025, 0.5, 0.999, 0.9995, 1].map(probability), ['< 0.1 %', '< 0.1 %', '2.5 %', '50.0 %', '99.9 %', '> 99.9 %', '> 99.9 %']);
  assert.deepEqual([null, undefined, NaN].map(probability), ['–', '–', '–']);
});
