import assert from 'node:assert/strict';
import { test } from 'node:test';
import type { Channel } from '../src/frames';
import { Ring, columns, renewed, widened } from '../src/ring';
import { Settings } from '../src/settings';
import { apply, newModel } from '../src/state';
import { unitSets } from '../src/units';
import { columnsOf, mostPlots, plotsOf, standardPlots } from '../src/watch/plots';
import { point, t0 } from './samples';
import { rfc3339 } from '../src/time';

const channel = (id: string, unit: string, dimension: string): Channel => ({ id, title: id, unit, dimension, reference: '', low: null, high: null, recorded_only: false, station: '' });
const channels = [channel('egt_1', 'degC', 'temperature'), channel('egt_2', 'degC', 'temperature'), channel('egt_3', 'degC', 'temperature'), channel('p_oil', 'bar', 'pressure')];
const quantities = [{ name: 'egt_spread_k', unit: 'K', title: 'EGT spread' }, { name: 'throat_mach', unit: '', title: 'Throat Mach number' }, { name: 'flow_parameter', unit: '', title: 'Flow parameter' }];

test('the plots are those chosen, in their order, two of one unit together', () => {
  const list = plotsOf(['speed', 'channel.egt_1', 'channel.p_oil', 'channel.egt_2', 'channel.egt_3', 'egt_spread_k', 'channel.gone'], unitSets.si, channels, quantities);
  assert.deepEqual(list.map((p) => [p.unit, p.lines.map((l) => l.column)]), [['rpm', ['speed_rpm']], ['°C', ['channel.egt_1', 'channel.egt_2']], ['bar', ['channel.p_oil']], ['°C', ['channel.egt_3']], ['K', ['egt_spread_k']]]);
});

test('units follow the viewer', () => {
  const [egt, oil] = plotsOf(['channel.egt_1', 'channel.p_oil'], unitSets.us, channels, quantities);
  assert.deepEqual([egt?.unit, Math.round(egt?.convert(373.15) as number), oil?.unit, Math.round(oil?.convert(1e5) as number * 100) / 100], ['°F', 212, 'psi', 14.5]);
});

test('quantities without a unit have nothing in common; there is an end to plots', () => {
  assert.equal(plotsOf(['throat_mach', 'flow_parameter'], unitSets.si, channels, quantities).length, 2);
  assert.equal(plotsOf([...standardPlots, 'throat_mach', 'flow_parameter', 'egt_spread_k', 'channel.p_oil'], unitSets.si, channels, quantities).length, mostPlots);
});

test('the ring gets columns for what is chosen, each once', () => {
  assert.deepEqual(columnsOf(standardPlots), columns);
  assert.deepEqual(columnsOf(['npr', 'flow', 'throat_mach', 'channel.p_oil']), [...columns, 'throat_mach', 'channel.p_oil']);
});

test('a chosen channel is entered into the row of its scan, whichever frame comes first', () => {
  const m = newModel(false, columnsOf(['channel.p_oil', 'throat_mach']));
  const values = (t: number, value: number | null) => apply(m, { kind: 'channels', epoch: 1, n: 1, t: rfc3339(t), channels: { p_oil: { value, raw: 1, quality: 'good', age_s: 0 } } }, 0);
  apply(m, { ...point(t0), throat_mach: 0.9 }, 0);
  values(t0, 4e5);
  values(t0 + 1, 5e5);
  apply(m, point(t0 + 1), 0);
  apply(m, point(t0 + 2), 0); // its channels never come
  values(t0 + 3, null);
  apply(m, point(t0 + 3), 0);
  const of = (name: string) => m.ring.rows().map((r) => r.row[m.ring.names.indexOf(name)]);
  assert.deepEqual(of('channel.p_oil'), [4e5, 5e5, NaN, NaN]);
  assert.deepEqual(of('throat_mach'), [0.9, NaN, NaN, NaN]);
});

test('other columns keep the rows; what is read again takes the place of what it covers', () => {
  const ring = new Ring(['a', 'b']);
  for (let t = 0; t < 5; t++) ring.push(t, [t, 10 * t, 1]);
  const wide = widened(ring, ['b', 'c']);
  assert.deepEqual(wide.rows().map((r) => [...Array.from(r.row)]), [0, 1, 2, 3, 4].map((t) => [10 * t, NaN, 1]));
  const rows = [1, 1.5, 2].map((t) => ({ t, row: [t, -t, 0] }));
  assert.deepEqual(renewed(wide, rows).rows().map((r) => [r.t, r.row[1]]), [[0, NaN], [1, -1], [1.5, -1.5], [2, -2], [3, NaN], [4, NaN]]);
  assert.equal(renewed(wide, []).size, 5);
});

test('the choice is kept; without one the plots are those at first', () => {
  const kept = new Map<string, string>();
  const keeper = { getItem: (k: string) => kept.get(k) ?? null, setItem: (k: string, v: string) => { kept.set(k, v); } };
  const s = new Settings(keeper);
  assert.deepEqual(s.plots, standardPlots);
  s.setPlots(['egt', 'channel.p_oil']);
  assert.deepEqual(new Settings(keeper).plots, ['egt', 'channel.p_oil']);
});
