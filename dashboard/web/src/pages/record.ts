// What a run has on record: its files and test points, exceedances of EGT limits, what happened to the engine, its
// life so far, the operator log and the alarm figures.

import { api } from '../api';
import { type View, attr, column, h, refill, text } from '../dom';
import { degrees, exceedanceWord } from '../exceedance';
import type { ExceedanceReply, Life, LogEntry, QuantityInfo } from '../frames';
import { clock, facility, seconds } from '../time';
import { type UnitSet, fixed } from '../units';
import { figuresView } from './figures';
import { filesView } from './files';
import { logTable } from './log';
import { pointsView } from './points';

/** How often the record of a run that is on is asked for, ms. */
const every = 5000;

const table = (cls: string, ...columns: string[]): { el: HTMLElement; body: HTMLElement } => {
  const body = h('tbody');
  return { el: h('table', { class: `list ${cls}` }, h('thead', {}, h('tr', {}, ...columns.map(column))), body), body };
};
const none = (words: string, n: number): Node[] => [h('tr', {}, h('td', { colspan: String(n), class: 'extra' }, words))];
const name = (s: string): string => s.replaceAll('_', ' ');

/** Life counters as pairs. */
export const lifePairs = (l: Life): [string, string][] => [
  l.nozzle_serial === undefined ? ['Engine', l.engine_serial ?? '–'] : ['Nozzle', l.nozzle_serial], ['Hours lit', fixed(l.hours, 1)], ['Starts', String(l.starts)], ['Cycles', String(l.cycles)], ['Hot starts', String(l.hot_starts)], ['Hung starts', String(l.hung_starts)],
  ['No light-off', String(l.no_lights)], ['Flame-outs', String(l.flame_outs)],
  ...(l.aborted_starts === undefined ? [] : [['Aborted starts', String(l.aborted_starts)] as [string, string]]), ...(l.hours_choked === undefined ? [] : [['Hours choked', fixed(l.hours_choked, 2)] as [string, string]]),
];

/** The life counters of an engine. */
export function lifeView(name_ = 'life'): { el: HTMLElement; show(l: Life | null, u: UnitSet): void } {
  const counts = h('dl', { class: 'facts counts2' });
  const bands = table('life', 'Band', '>Time above', '>Peak', '>Excursions', '>Exceeded');
  const el = h('div', { 'data-q': name_ }, counts, bands.el);
  return {
    el,
    show(l, u) {
      refill(counts, JSON.stringify(l), () => (l ? lifePairs(l).flatMap(([k, v]) => [h('dt', {}, k), h('dd', {}, v)]) : [h('dd', { class: 'extra' }, 'Not known')]));
      refill(bands.body, JSON.stringify(l?.bands) + u.system, () => (l?.bands ?? []).map((b) => h('tr', {}, h('th', { scope: 'row' }, name(b.name)),
        h('td', { class: 'num' }, `${fixed(b.seconds, 1)} s`), h('td', { class: 'num' }, degrees(u, b.peak_k)), h('td', { class: 'num' }, String(b.excursions)), h('td', { class: 'num' }, String(b.exceedances)))));
    },
  };
}

/** `live` says that the run goes on. */
export function recordView(run: string, live: () => boolean, units: () => UnitSet, quantities: () => readonly QuantityInfo[]): View {
  const files = filesView(run);
  const points = pointsView(run, units, quantities);
  const exceedances = table('exceedances', 'Band', '>Limit', `>Began, ${facility.sign()}`, '>Ended', '>Time above', '>of it assumed', '>Peak', 'Allowance', 'Time above other bands');
  const events = table('', `>Time, ${facility.sign()}`, 'Engine', '>EGT', '>Speed', '>Rundown');
  const life = lifeView();
  const nozzle = lifeView('nozzle-life');
  const log = logTable();
  const figures = figuresView(() => ({ run, live: live() }));
  const trouble = h('p', { class: 'trouble', role: 'status' });
  const el = h('div', { class: 'page record', 'data-q': 'record' }, h('h1', {}, `Record of run ${run}`), trouble,
    h('section', {}, h('h2', {}, 'Report and export'), files.el), h('section', {}, h('h2', {}, 'Test points'), points.el),
    h('section', {}, h('h2', {}, 'Excursions above EGT limits'), exceedances.el),
    h('div', { class: 'columns' },
      h('div', {}, h('section', {}, h('h2', {}, 'Operator log'), log.el), h('section', {}, h('h2', {}, 'What the engine did'), events.el)),
      h('div', {}, h('section', {}, h('h2', {}, 'Life of the engine and of the nozzle, with this run'), life.el, nozzle.el), h('section', {}, h('h2', {}, 'Alarm figures'), figures.el))));
  let askedAt = -Infinity;
  let reply: ExceedanceReply | null = null;
  let entries: LogEntry[] = [];

  return {
    el,
    update(now) {
      if (askedAt === -Infinity || (live() && now - askedAt > every)) {
        askedAt = now;
        api.exceedances(run).then((r) => { reply = r; text(trouble, ''); }, (e: Error) => text(trouble, `The record of exceedances could not be read: ${e.message}.`));
        api.log(run).then((r) => { entries = r.entries ?? []; }, () => undefined);
      }
      const u = units();
      const list = reply?.exceedances ?? [];
      refill(exceedances.body, JSON.stringify(reply) + u.system, () => (list.length === 0 ? none(reply ? 'None' : 'Not known', 9) : list.map((e) => h('tr', { 'data-level': e.exceeded ? 'exceeded' : null },
        h('th', { scope: 'row' }, name(e.band)), h('td', { class: 'num' }, degrees(u, e.limit_k)), h('td', { class: 'num' }, clock(seconds(e.began))), h('td', { class: 'num' }, e.ended ? clock(seconds(e.ended)) : 'not ended'),
        h('td', { class: 'num' }, `${fixed(e.duration_s, 1)} s`), h('td', { class: 'num' }, e.assumed_s > 0 ? `${fixed(e.assumed_s, 1)} s` : '–'), h('td', { class: 'num' }, degrees(u, e.peak_k)),
        h('td', { class: 'figure' }, exceedanceWord(e)), h('td', {}, (e.above ?? []).filter((a) => a.band !== e.band).map((a) => `${name(a.band)} ${fixed(a.seconds, 1)} s`).join(', '))))));
      refill(events.body, JSON.stringify(reply?.events) + u.system, () => ((reply?.events ?? []).length === 0 ? none('Nothing on record', 5) : (reply?.events ?? []).map((e) => h('tr', {},
        h('td', { class: 'num' }, clock(seconds(e.t))), h('td', {}, name(e.event)), h('td', { class: 'num' }, degrees(u, e.egt_k)), h('td', { class: 'num' }, e.speed_rpm === null ? '–' : `${fixed(e.speed_rpm, 0)} rpm`), h('td', { class: 'num' }, e.rundown_s === null ? '' : `${fixed(e.rundown_s, 0)} s`)))));
      life.show(reply?.life ?? null, u);
      attr(nozzle.el, 'hidden', !reply?.nozzle_life);
      nozzle.show(reply?.nozzle_life ?? null, u);
      log.show(entries, seconds(entries[0]?.t ?? null));
      figures.update(now);
      points.update(now);
    },
    destroy() {
      files.destroy();
      points.destroy();
    },
  };
}
