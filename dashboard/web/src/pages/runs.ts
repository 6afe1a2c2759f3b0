// Runs: what is stored, newest first, each with its replay.

import { api } from '../api';
import type { Display } from '../context';
import { type View, attr, column, h, text } from '../dom';
import type { RunSummary } from '../frames';
import { hostNow } from '../state';
import { dateClock, duration, seconds } from '../time';
import { bytes } from '../units';

const refreshEvery = 5000; // ms

export function runsPage(d: Display): View {
  const body = h('tbody');
  const trouble = h('p', { class: 'trouble', role: 'status' });
  const el = h('div', { class: 'page' }, h('h1', {}, 'Runs'), trouble,
    h('table', { class: 'list runs' }, h('thead', {}, h('tr', {}, ...['Run', 'Engine', '>Started, UTC', 'By', '>Duration', '>Alarms', 'State', '>Size', 'Notes', 'Replay'].map(column))), body));
  let askedAt = -Infinity;
  let key = '';
  let growing: { cell: HTMLElement; since: number }[] = [];

  /** The cell of a run's length; one that is on gets longer. */
  function length(r: RunSummary): HTMLElement {
    const cell = h('td', { class: 'num' }, r.duration_s === null ? '' : duration(r.duration_s));
    if (r.duration_s === null) growing.push({ cell, since: seconds(r.started) });
    return cell;
  }

  const row = (r: RunSummary): Node => h('tr', {},
    h('th', { scope: 'row' }, r.id, r.title ? h('div', { class: 'extra' }, r.title) : ''),
    h('td', {}, r.engine), h('td', { class: 'num' }, dateClock(seconds(r.started))), h('td', {}, r.by), length(r),
    h('td', { class: 'num' }, String(r.alarms)), h('td', {}, r.state === 'active' ? '● recording' : 'ended', r.keep ? h('div', { class: 'extra' }, 'keep') : ''),
    h('td', { class: 'num' }, bytes(r.size_bytes)), h('td', {}, r.notes, r.tags && r.tags.length > 0 ? h('div', { class: 'extra' }, r.tags.join(', ')) : ''),
    h('td', {}, h('a', { class: 'button', href: `#/run/${encodeURIComponent(r.id)}`, 'data-q': 'replay', 'data-state': r.state }, 'Replay')));

  return {
    el,
    update(now) {
      for (const g of growing) text(g.cell, duration(hostNow(d.model(), now) - g.since));
      if (now - askedAt < refreshEvery) return;
      askedAt = now;
      api.runs().then((list) => {
        text(trouble, '');
        const fresh = JSON.stringify(list);
        if (fresh === key) return;
        key = fresh;
        growing = [];
        list.sort((a, b) => (a.started < b.started ? 1 : -1));
        const focused = (document.activeElement as HTMLAnchorElement | null)?.href; // the list is rebuilt under the reader's hands
        body.replaceChildren(...(list.length > 0 ? list.map(row) : [h('tr', {}, h('td', { colspan: '10', class: 'extra' }, 'No run stored yet. A run begins when the engine is started, or by hand on the Watch page.'))]));
        if (focused) [...body.querySelectorAll('a')].find((a) => a.href === focused)?.focus();
        attr(el, 'data-stale', false);
      }, (e: Error) => {
        text(trouble, `The list could not be read: ${e.message}. Trying again.`);
        attr(el, 'data-stale', true);
      });
    },
    destroy: () => undefined,
  };
}
