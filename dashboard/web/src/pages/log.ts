// Log: what people did in this run, and the forms to add to it.

import { api } from '../api';
import { control, numberOf } from '../ask';
import { type Display, gate } from '../context';
import { type View, column, h, refill, text } from '../dom';
import type { LogEntry } from '../frames';
import { actor, deedWord, enter, entryTime, subject } from '../oplog';
import type { Deed } from '../session';
import { activeRun, hostNow } from '../state';
import { veil } from '../watch/display';
import { facility } from '../time';

/** The most entries shown. */
const most = 500;

/** The rows of a log, newest first. */
export function logTable(): { el: HTMLElement; show(entries: readonly LogEntry[], now: number): void } {
  const body = h('tbody');
  return {
    el: h('table', { class: 'list log', 'data-q': 'log' }, h('thead', {}, h('tr', {}, ...[`>Time, ${facility.sign()}`, 'What', 'About', 'By', 'Reason'].map(column))), body),
    show(entries, now) {
      const last = entries[entries.length - 1];
      refill(body, `${entries.length}:${last?.t}:${last?.what}`, () => (last
        ? [...entries].reverse().map((e) => h('tr', {}, h('td', { class: 'num' }, entryTime(e, now)), h('td', {}, deedWord(e)), h('td', {}, subject(e)), h('td', {}, actor(e)), h('td', {}, e.reason ?? '')))
        : [h('tr', {}, h('td', { colspan: '5', class: 'extra' }, 'Nothing yet'))]));
    },
  };
}

export function logPage(d: Display): View {
  const table = logTable();
  const told = h('p', { class: 'trouble', role: 'status' });
  const buttons: { el: HTMLElement; deed: Deed }[] = [];
  let busy = false;

  function form(title: string, deed: Deed, action: string, fields: Parameters<typeof control>[0][], send: (run: string, v: Record<string, string>) => Promise<unknown>): HTMLElement {
    const controls = fields.map(control);
    const press = h('button', { type: 'submit', 'data-q': `${deed}-send` }, action);
    buttons.push({ el: press, deed });
    return h('form', {
      class: 'line', 'aria-label': title, onsubmit: (e: Event) => {
        e.preventDefault();
        const run = activeRun(d.model());
        if (!run) {
          text(told, 'Not done: no run is on.');
          return;
        }
        busy = true;
        text(told, '');
        send(run.id, Object.fromEntries(controls.map((c) => [c.input.name, c.input.value.trim()]))).then(() => {
          for (const c of controls) c.input.value = '';
          controls[0]?.input.focus();
        }, (why: Error) => text(told, `Not done: ${why.message}`)).finally(() => { busy = false; });
      },
    }, ...controls.map((c) => c.el), press);
  }

  const mark = form('Mark', 'mark', 'Set mark', [{ name: 'text', label: 'Mark on the time line' }], (run, v) => api.mark(run, v['text'] ?? '', d.operator()));
  const entry = form('Entry by hand', 'entry', 'Enter', [
    { name: 'name', label: 'Entry by hand: what', hint: 'oil level' }, { name: 'value', label: 'Value', kind: 'number', optional: true }, { name: 'unit', label: 'Unit', optional: true, hint: 'mm' }, { name: 'note', label: 'Note', optional: true },
  ], (run, v) => {
    const value = numberOf(v['value'] ?? '');
    return api.entry(run, { name: v['name'] ?? '', value: Number.isNaN(value) ? null : value, unit: v['unit'] ?? '', text: v['note'] ?? '' }, d.operator());
  });
  const cover = veil(h('div', { class: 'page' }, h('h1', {}, 'Log'), h('div', { class: 'forms' }, mark, entry), told, h('section', {}, h('h2', {}, 'What people did, newest first'), table.el)));

  // What this page did not hear of: the log of the run from its beginning.
  let earlier: LogEntry[] = [];
  let asked: string | null = null;
  let merged = '';

  return {
    el: cover.el,
    update(now) {
      cover.update(d.fresh(now));
      const m = d.model();
      for (const b of buttons) gate(b.el, d, b.deed, now, busy || !activeRun(m));
      const id = m.run?.id ?? null;
      if (id !== asked) {
        asked = id;
        earlier = [];
        if (id !== null) api.log(id).then((r) => { if (asked === id) earlier = r.entries ?? []; }, () => undefined); // what was heard is shown
      }
      const stand = `${earlier.length} ${m.log.length} ${m.log[m.log.length - 1]?.t}`;
      if (stand === merged) return;
      merged = stand;
      const all = [...earlier];
      for (const e of m.log) enter(all, e, most);
      table.show(all, hostNow(m, now));
    },
    destroy: () => undefined,
  };
}
