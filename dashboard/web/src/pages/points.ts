// The test points of a run: one line each with value ± U95; Type A and B on demand.

import { api } from '../api';
import { type View, attr, column, h, refill, text } from '../dom';
import type { QuantityInfo, TestPoint, TestPoints } from '../frames';
import { brief, headline, shownValue } from '../points';
import { clock, duration, facility, seconds } from '../time';
import { type UnitSet, fixed } from '../units';

/** Columns of the list. */
const width = headline.length + 4;

export function pointsView(run: string, units: () => UnitSet, quantities: () => readonly QuantityInfo[]): View {
  const at = h('select', { 'aria-label': 'Where points are taken', 'data-q': 'points-at', onchange: () => void read() }, h('option', { value: 'auto' }, 'where the engine was steady'), h('option', { value: 'marks' }, 'the 30 s after each mark'));
  const again = h('button', { type: 'button', onclick: () => void read() }, 'Read again');
  const how = h('span', { class: 'extra', role: 'status', 'data-q': 'points-how' });
  const body = h('tbody');
  const head = h('tr');
  const left = h('ul', { class: 'extra' });
  const el = h('div', { 'data-q': 'points' }, h('div', { class: 'filter' }, h('span', { class: 'label' }, 'Taken'), at, again, how),
    h('div', { class: 'scroll', tabindex: '0', role: 'region', 'aria-label': 'Test points' }, h('table', { class: 'list points' }, h('thead', {}, head), body)), left);
  let reply: TestPoints | null = null;
  const open = new Set<number>();
  let reading = new AbortController();

  async function read(): Promise<void> {
    reading.abort();
    const own = (reading = new AbortController());
    attr(how, 'class', 'extra');
    text(how, 'reading…');
    try {
      reply = await api.points(run, at.value, own.signal);
      open.clear();
      text(how, reply.how);
    } catch (e) {
      if (own.signal.aborted) return;
      reply = null;
      attr(how, 'class', 'trouble');
      text(how, `The points could not be read: ${(e as Error).message}`);
    }
  }
  void read();

  const title = (name: string): string => quantities().find((q) => q.name === name)?.title ?? name;

  /** All values of a point with what their uncertainty is made of. */
  const details = (p: TestPoint, u: UnitSet): Node => h('tr', { class: 'details' }, h('td', { colspan: String(width) },
    h('table', { class: 'list values' }, h('thead', {}, h('tr', {}, ...['Quantity', '>Value', '>± U95', '>Type A', '>Type B', '>Effective scans', 'Unit'].map(column))),
      h('tbody', {}, ...p.values.map((v) => {
        const s = shownValue(v, u);
        return h('tr', {}, h('th', { scope: 'row' }, title(v.name)), ...[s.value, s.u95, s.typeA, s.typeB, s.effective].map((x) => h('td', { class: 'num' }, x)), h('td', {}, s.sign));
      }))),
    h('p', { class: 'extra' }, 'Type A: by the scatter of the scans and their effective number. Type B: by the systematic errors of the channels. Both as standard uncertainty; U95 is both together, 95 %. “–” is not stated or not there.')));

  const row = (p: TestPoint, u: UnitSet): Node => h('tr', {},
    h('th', { scope: 'row' }, h('button', { type: 'button', class: 'small', 'aria-expanded': String(open.has(p.number)), 'aria-label': `All values of point ${p.number}`, 'data-focus': `point ${p.number}`, 'data-q': 'point-open',
      onclick: () => { if (!open.delete(p.number)) open.add(p.number); } }, open.has(p.number) ? '▾' : '▸'), ` ${p.number}`, p.name ? h('div', { class: 'extra' }, p.name) : ''),
    h('td', { class: 'num' }, clock(seconds(p.from)), h('div', { class: 'extra' }, duration(p.from_s))), h('td', { class: 'num' }, `${fixed(p.to_s - p.from_s, 0)} s`), h('td', { class: 'num' }, `${fixed(p.steady_share * 100, 0)} %`),
    ...headline.map(([name]) => h('td', { class: 'num' }, brief(p, name, u))));
  const doubts = (p: TestPoint): Node[] => ((p.doubts ?? []).length === 0 ? [] : [h('tr', { class: 'doubts' }, h('td', { colspan: String(width) }, `▲ doubtful: ${(p.doubts ?? []).join('; ')}`))]);

  return {
    el,
    update() {
      const u = units();
      refill(head, `${u.system}${reply?.run ?? ''}`, () => ['Point', `>From, ${facility.sign()}`, '>Length', '>Steady', ...headline.map(([name, word]) => {
        const v = reply?.points.flatMap((p) => p.values).find((x) => x.name === name);
        const sign = v ? shownValue(v, u).sign : '';
        return `>${word}${sign ? `, ${sign}` : ''}`;
      })].map(column));
      refill(body, JSON.stringify([reply, [...open], u.system]), () => {
        const list = reply?.points ?? [];
        if (list.length === 0) return [h('tr', {}, h('td', { colspan: String(width), class: 'extra' }, reply ? 'There is none.' : 'Not known'))];
        return list.flatMap((p) => [row(p, u), ...doubts(p), ...(open.has(p.number) ? [details(p, u)] : [])]);
      });
      refill(left, JSON.stringify(reply?.left_out), () => (reply?.left_out ?? []).map((t) => h('li', {}, `left out: ${t}`)));
    },
    destroy: () => reading.abort(),
  };
}
