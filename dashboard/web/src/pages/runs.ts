// Runs: what is stored, newest first, each with its replay, notes and tags.

import { api } from '../api';
import { askForm, withdraw } from '../ask';
import { type Display, gate } from '../context';
import { type View, attr, column, h, text } from '../dom';
import type { RunSummary } from '../frames';
import type { Deed } from '../session';
import { hostNow } from '../state';
import { familiesOf } from '../compare';
import { dateClock, duration, seconds } from '../time';
import { bytes } from '../units';

const refreshEvery = 5000; // ms
const stateWords: Record<string, string> = { active: '● recording', ended: 'ended', interrupted: '▲ interrupted' };

/** Tags as they are typed: separated by commas, each once. */
export const tagsOf = (s: string): string[] => [...new Set(s.split(',').map((t) => t.trim()).filter(Boolean))];

export function runsPage(d: Display): View {
  const body = h('tbody');
  const chosen: string[] = []; // at most two, in the order in which they were chosen
  const compare = h('a', { class: 'button', 'data-q': 'compare' });
  const trouble = h('p', { class: 'trouble', role: 'status' });
  const find = h('input', { type: 'search', placeholder: 'find by any word (key /)', 'aria-label': 'Find a run', 'aria-keyshortcuts': '/', maxlength: '200', 'data-q': 'find', oninput: () => { askedAt = -Infinity; } });
  const el = h('div', { class: 'page' }, h('h1', {}, 'Runs'), h('div', { class: 'filter' }, h('div', { role: 'search' }, find), compare), trouble,
    h('table', { class: 'list runs' }, h('thead', {}, h('tr', {}, ...['Run', 'Engine', '>Started', 'By', '>Duration', '>Alarms', 'State', '>Size', 'Test, notes, tags', 'Actions'].map(column))), body));
  let askedAt = -Infinity;
  let key = '';
  let growing: { cell: HTMLElement; since: number }[] = [];
  let gated: { button: HTMLElement; deed: Deed; never: boolean }[] = [];

  /** The cell of a run's length; one that is on gets longer. */
  function length(r: RunSummary): HTMLElement {
    const cell = h('td', { class: 'num' }, r.duration_s === null ? '' : duration(r.duration_s));
    if (r.duration_s === null) growing.push({ cell, since: seconds(r.started) });
    return cell;
  }

  let list: RunSummary[] = [];

  /** The two chosen runs, the older first, a reduction after its parent. */
  function offer(): void {
    const runs = familiesOf(list.filter((r) => chosen.includes(r.id)).reverse());
    attr(compare, 'href', runs.length === 2 ? `#/compare/${runs.map((r) => encodeURIComponent(r.id)).join('/')}` : null);
    attr(compare, 'aria-disabled', runs.length !== 2);
    text(compare, runs.length === 2 ? `Compare ${runs.map((r) => r.id).join(' with ')}` : 'Compare: choose two runs');
    for (const box of body.querySelectorAll<HTMLInputElement>('input[type="checkbox"]')) box.checked = chosen.includes(box.value);
  }

  function choose(id: string, on: boolean): void {
    const at = chosen.indexOf(id);
    if (at >= 0) chosen.splice(at, 1);
    if (on) chosen.push(id);
    if (chosen.length > 2) chosen.shift();
    offer();
  }
  offer();

  const again = (): void => { askedAt = -Infinity; };

  function note(r: RunSummary): void {
    askForm(`Run ${r.number} (${r.id})`, [
      { name: 'notes', label: 'Notes', value: r.notes, optional: true },
      { name: 'tags', label: 'Tags, separated by commas', value: (r.tags ?? []).join(', '), optional: true },
      { name: 'keep', label: 'Retention', kind: 'select', options: [['', 'removed when its time comes'], ['keep', 'keep: never removed']], value: r.keep ? 'keep' : '', optional: true },
    ], 'Save', async (v) => {
      await api.note(r.id, { notes: v['notes'] ?? '', tags: tagsOf(v['tags'] ?? ''), keep: v['keep'] === 'keep' });
      again();
    });
  }

  function remove(r: RunSummary): void {
    askForm(`Delete run ${r.number} (${r.id}) of ${dateClock(seconds(r.started))} with its file? It cannot be brought back. Type its number to confirm.`, [
      { name: 'number', label: 'Number of the run', kind: 'number' }, { name: 'reason', label: 'Reason' },
    ], 'Delete the run', async (v) => {
      if (Number(v['number']) !== r.number) throw new Error(`the number of this run is ${r.number}`);
      await api.remove(r.id, r.number, v['reason'] ?? '');
      again();
    });
  }

  function button(r: RunSummary, word: string, deed: Deed, never: boolean, act: (r: RunSummary) => void): HTMLElement {
    const b = h('button', { type: 'button', class: 'small', 'data-focus': `${word} ${r.id}`, 'aria-label': `${word} run ${r.number}`, onclick: () => act(r) }, word);
    gated.push({ button: b, deed, never });
    return b;
  }

  const row = (r: RunSummary): Node => h('tr', { 'data-under': r.parent && list.some((p) => p.id === r.parent) ? r.parent : null },
    h('th', { scope: 'row' }, r.designation || r.id, r.designation ? h('div', { class: 'extra' }, r.id) : '', r.title ? h('div', { class: 'extra' }, r.title) : '', r.parent ? h('div', { class: 'extra' }, `reduced again from ${r.parent}${r.reduced_by ? ` by ${r.reduced_by}` : ''}`) : ''),
    h('td', {}, r.engine), h('td', { class: 'num' }, dateClock(seconds(r.started))), h('td', {}, r.by), length(r),
    h('td', { class: 'num' }, String(r.alarms)), h('td', {}, stateWords[r.state] ?? r.state, r.aborted ? h('div', { class: 'extra' }, 'start aborted') : '', r.keep ? h('div', { class: 'extra' }, 'keep') : ''),
    h('td', { class: 'num' }, bytes(r.size_bytes)), h('td', {}, [r.test, r.purpose].filter(Boolean).join(': '), h('div', {}, r.notes), r.tags && r.tags.length > 0 ? h('div', { class: 'extra' }, r.tags.join(', ')) : ''),
    h('td', {}, h('a', { class: 'button', href: `#/run/${encodeURIComponent(r.id)}`, 'data-focus': `replay ${r.id}`, 'aria-label': `Replay run ${r.number}`, 'data-q': 'replay', 'data-state': r.state }, 'Replay'),
      h('label', { class: 'choose' }, h('input', { type: 'checkbox', value: r.id, 'aria-label': `Compare run ${r.id}`, 'data-focus': `compare ${r.id}`, 'data-q': 'compare-choose', onchange: (e: Event) => choose(r.id, (e.target as HTMLInputElement).checked) }), 'compare'),
      h('div', { class: 'asides' }, h('a', { class: 'button small', href: `api/runs/${encodeURIComponent(r.id)}/report`, target: '_blank', rel: 'noopener', 'data-focus': `report ${r.id}`, 'aria-label': `Report of run ${r.number}`, 'data-q': 'report' }, 'Report'),
        button(r, 'Note…', 'note', false, note), button(r, 'Delete…', 'delete', r.keep || r.state === 'active', remove))));

  function onKey(e: KeyboardEvent): void {
    if (e.key !== '/' || /^(INPUT|SELECT|TEXTAREA)$/.test((e.target as HTMLElement).tagName)) return;
    e.preventDefault();
    find.focus();
  }
  document.addEventListener('keydown', onKey);

  return {
    el,
    update(now) {
      for (const g of growing) text(g.cell, duration(hostNow(d.model(), now) - g.since));
      for (const g of gated) gate(g.button, d, g.deed, now, g.never);
      if (now - askedAt < refreshEvery) return;
      askedAt = now;
      const wanted = find.value.trim();
      api.runs(wanted).then((found) => {
        if (wanted !== find.value.trim()) return; // a later answer is on its way
        text(trouble, '');
        const fresh = JSON.stringify(found);
        if (fresh === key) return;
        key = fresh;
        growing = [];
        gated = [];
        list = familiesOf(found.sort((a, b) => (a.started < b.started ? 1 : -1)));
        const none = wanted ? 'No run is like that.' : 'No run stored yet. A run begins when the engine is started, or by hand on the Watch page.';
        const focused = body.contains(document.activeElement) ? (document.activeElement as HTMLElement).dataset['focus'] : undefined; // the list is rebuilt under the reader's hands
        body.replaceChildren(...(list.length > 0 ? list.map(row) : [h('tr', {}, h('td', { colspan: '10', class: 'extra' }, none))]));
        offer();
        if (focused) [...body.querySelectorAll<HTMLElement>('[data-focus]')].find((a) => a.dataset['focus'] === focused)?.focus();
        attr(el, 'data-stale', false);
      }, (e: Error) => {
        text(trouble, `The list could not be read: ${e.message}. Trying again.`);
        attr(el, 'data-stale', true);
      });
    },
    destroy() {
      document.removeEventListener('keydown', onKey);
      withdraw();
    },
  };
}
