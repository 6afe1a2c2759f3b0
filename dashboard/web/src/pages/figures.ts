// How the alarms of a run did, against published targets.

import { api } from '../api';
import { type View, column, h, refill, text } from '../dom';
import { figureLines } from '../figures';
import type { AlarmFigures } from '../frames';
import { duration, seconds, signedClock } from '../time';

/** How often the figures of a run that is on are asked for, ms. */
const every = 5000;

/** Which figures: of a stored run, or with null of the one that is on. */
export interface Which { run: string | null; live: boolean }

/** `which` says whose figures; null when there is no run. */
export function figuresView(which: () => Which | null): View {
  const body = h('tbody');
  const about = h('p', { class: 'extra', role: 'status' });
  const sources = h('div', { class: 'extra' });
  const el = h('div', { 'data-q': 'figures' }, h('table', { class: 'list figures' }, h('thead', {}, h('tr', {}, ...['Figure', '>Value', '>Target', 'Grade'].map(column))), body), about, sources);
  let askedAt = -Infinity;
  let asked = '';
  let known: AlarmFigures | null = null;
  let why = '';

  return {
    el,
    update(now) {
      const w = which();
      const key = JSON.stringify(w);
      if (key !== asked) {
        [asked, askedAt, known, why] = [key, -Infinity, null, ''];
      }
      if (w && (askedAt === -Infinity || (w.live && now - askedAt > every))) {
        askedAt = now;
        api.figures(w.run).then((f) => { if (asked === key) [known, why] = [f, '']; }, (e: Error) => { if (asked === key) [known, why] = [null, `Not known: ${e.message}.`]; });
      }
      const f = known;
      refill(body, JSON.stringify(f), () => (f ? figureLines(f) : []).map((l) => h('tr', {},
        h('th', { scope: 'row' }, l.name), h('td', { class: 'num' }, l.value), h('td', { class: 'num', title: l.source || null }, l.target),
        h('td', {}, l.target === '' || l.met === null ? '' : l.met ? 'met' : '◇ not met'))));
      text(about, !w ? 'No run is on.' : f ? `${duration(f.seconds)} from ${signedClock(seconds(f.from))}.${f.graded ? '' : ` Not graded: ${f.why_not ?? 'too short'}.`}` : why);
      const from = [...new Set((f?.targets ?? []).map((t) => t.source.split(': ')[0]))];
      refill(sources, from.join(), () => (from.length === 0 ? [] : [h('div', {}, `Targets: ${from.join('; ')}.`)]));
    },
    destroy: () => undefined,
  };
}
