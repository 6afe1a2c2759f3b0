// The checks of the data system before and after a run: what is ticked by hand, what
// was measured, and the reason for each that did not pass.

import { api } from '../api';
import { control, numberOf } from '../ask';
import { byKind, figure, kindWord, stateText } from '../checks';
import { type Display, gate } from '../context';
import { type View, attr, column, h, refill, text } from '../dom';
import type { CheckSet } from '../frames';
import { dateClock, duration, seconds } from '../time';
import type { UnitSet } from '../units';
import { veil } from '../watch/display';
import { testDayLinks } from './testday';

/** One result: its sentence, what did not pass, every item. */
export function checkView(c: CheckSet, u: UnitSet): Node[] {
  const items = c.items ?? [];
  const failed = items.filter((i) => !i.passed);
  const facts = [c.began ? dateClock(seconds(c.began)) : '', c.by ? `by ${c.by}` : '', `thermocouples ${c.warmth}`, c.planned_s !== null ? `${duration(c.planned_s)} planned` : '', c.run ? `run ${c.run}` : '', c.note].filter(Boolean);
  return [
    h('p', { class: 'sentence', 'data-q': `checks-${c.phase}` }, stateText(c)), h('p', { class: 'extra' }, facts.join(' · ')),
    ...(c.state === 'done' && failed.length > 0 ? [h('h3', { class: 'grouptitle' }, 'Did not pass'), h('ul', { class: 'failed', 'data-q': `failed-${c.phase}` }, ...failed.map((i) => h('li', {}, h('b', {}, [i.channel, i.title].filter(Boolean).join(', ')), ` (${kindWord(i.kind).toLowerCase()}): ${i.text}`)))] : []),
    ...(items.length > 0 ? [h('details', { open: true }, h('summary', {}, `All ${items.length} items`), h('table', { class: 'list items' },
      h('thead', {}, h('tr', {}, ...['Item', 'Result', '>Value', '>Limit'].map(column))),
      ...byKind(items).map((g) => h('tbody', {}, h('tr', { class: 'kind' }, h('th', { scope: 'colgroup', colspan: '4' }, kindWord(g.kind))),
        ...g.items.map((i) => h('tr', { 'data-failed': !i.passed }, h('th', { scope: 'row', title: i.title }, i.channel || i.title), h('td', { class: 'verdict' }, i.passed ? '● passed' : '▲ not passed', i.by ? h('div', { class: 'extra' }, `by ${i.by}`) : ''), h('td', { class: 'num' }, figure(i, i.value, u)), h('td', { class: 'num' }, figure(i, i.limit, u))))))))] : []),
  ];
}

export function checksPage(d: Display): View {
  const phase = control({ name: 'phase', label: 'Which', kind: 'select', options: [['before', 'before the run'], ['after', 'after the run']] });
  const warmth = control({ name: 'warmth', label: 'Thermocouples are', kind: 'select', options: [['cold', 'cold: all at ambient'], ['warm', 'warm']] });
  const planned = control({ name: 'planned', label: 'Planned length, min', kind: 'number', optional: true });
  const note = control({ name: 'note', label: 'Note', optional: true });
  const ticks = h('fieldset', { class: 'ticks', 'data-q': 'ticks' });
  const begin = h('button', { type: 'submit', 'data-q': 'check-begin' }, 'Begin the check');
  const told = h('p', { class: 'trouble', role: 'status', 'data-q': 'check-told' });
  const running = h('p', { role: 'status', 'data-q': 'check-running' });
  const form = h('form', { 'aria-label': 'Check', onsubmit: (e: Event) => { e.preventDefault(); void send(); } }, phase.el, warmth.el, planned.el, note.el, begin, ticks);
  const before = h('div', {});
  const after = h('div', {});
  const cover = veil(h('div', { class: 'page checks' }, h('h1', {}, 'Checks before and after a run'), testDayLinks('checks'),
    h('div', { class: 'forms' }, form, running, told),
    h('div', { class: 'halves' }, h('section', {}, h('h2', {}, 'Before'), before), h('section', {}, h('h2', {}, 'After'), after))));
  let busy = false;
  let boxes: { id: string; box: HTMLInputElement }[] = [];
  let followed = 0; // the start of the check that is followed, s

  async function send(): Promise<void> {
    const minutes = numberOf(planned.input.value);
    const by = d.operator();
    busy = true;
    text(told, '');
    try {
      const marked = phase.input.value === 'before' ? boxes.filter((b) => b.box.checked) : [];
      if (marked.length > 0 && by === '') throw new Error('who ticks? enter your name at the top of the page');
      await api.check(d.rig, {
        phase: phase.input.value, warmth: warmth.input.value, ticks: Object.fromEntries(marked.map((b) => [b.id, by])), planned_s: Number.isNaN(minutes) ? null : minutes * 60, note: note.input.value.trim(),
      }, by);
      for (const b of boxes) b.box.checked = false; // each check is ticked anew
    } catch (e) {
      text(told, `Not begun: ${(e as Error).message}`);
    }
    busy = false;
  }

  return {
    el: cover.el,
    update(now) {
      cover.update(d.fresh(now));
      const { checks } = d.model();
      gate(begin, d, 'checks', now, busy || checks?.running != null);
      attr(ticks, 'hidden', phase.input.value !== 'before');
      refill(ticks, JSON.stringify(checks?.ticks ?? []), () => {
        boxes = (checks?.ticks ?? []).map((t) => ({ id: t.id, box: h('input', { type: 'checkbox', 'data-q': `tick-${t.id}`, 'data-focus': t.id }) }));
        return [h('legend', { class: 'label' }, 'Ticked by hand, under the name at the top of the page'), ...(checks?.ticks ?? []).map((t, i) => h('label', {}, boxes[i]?.box, t.title))];
      });
      const on = checks?.running ?? null;
      if (on) followed = seconds(on.began);
      text(running, on ? `The check ${on.phase} the run goes on: ${d.model().newest > followed ? `${Math.min(checks?.window_s ?? 0, Math.floor(d.model().newest - followed))} of ` : ''}${checks?.window_s ?? '–'} s.` : '');
      const u = d.units();
      for (const [el, set, none] of [[before, checks?.before, 'No check before a run is on record.'], [after, checks?.after, 'No check after a run is on record.']] as const) {
        refill(el, JSON.stringify([set ?? null, u.system]), () => (set ? checkView(set, u) : [h('p', { class: 'extra' }, none)]));
      }
    },
    destroy: () => undefined,
  };
}
