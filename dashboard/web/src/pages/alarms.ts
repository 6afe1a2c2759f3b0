// Alarms: those that stand, those taken out of annunciation, and what happened
// since the page was opened.

import { isStanding, needsAcknowledge, nextStep, priorityLook, standing, stateWord } from '../alarms';
import type { Display } from '../context';
import { type View, attr, column, h, refill } from '../dom';
import type { Alarm } from '../frames';
import { clock, seconds } from '../time';
import { alarmValue } from '../units';
import { veil } from '../watch/display';

const head = (...names: string[]): HTMLElement => h('thead', {}, h('tr', {}, ...names.map(column)));

export function priorityBadge(a: Alarm): HTMLElement {
  const look = priorityLook[a.priority];
  return h('span', { class: 'badge', 'data-priority': a.priority }, h('span', { 'aria-hidden': 'true' }, look.shape), ` ${look.word}`);
}

export function alarmsPage(d: Display): View {
  const now_ = h('tbody');
  const quiet = h('tbody');
  const past = h('tbody');
  const cover = veil(h('div', { class: 'page' },
    h('h1', {}, 'Alarms'),
    h('section', {}, h('h2', {}, 'Standing'), h('table', { class: 'list alarms' }, head('Priority', 'State', '>Raised, UTC', 'Alarm and caution', 'Response', '>Value', ''), now_)),
    h('section', {}, h('h2', {}, 'Not annunciated: shelved, suppressed by design, out of service'), h('table', { class: 'list aside' }, head('Priority', 'State', '>Until', 'Alarm', 'Reason'), quiet)),
    h('section', {}, h('h2', {}, 'History of this run, newest first'), h('table', { class: 'list past' }, head('>Time, UTC', 'Priority', 'Alarm', 'From', 'To', 'Note'), past))));
  const empty = (text: string, n: number): Node[] => [h('tr', {}, h('td', { colspan: String(n), class: 'extra' }, text))];

  let gone = false;

  function ack(a: Alarm): Node {
    const step = nextStep(a);
    if (!d.acknowledger || !step) return h('span', { class: 'extra' }, a.acknowledged_by ? `by ${a.acknowledged_by}` : '');
    const state = d.acknowledger.state(a);
    const b = h('button', { class: 'ack', type: 'button', onclick: () => d.acknowledger?.send(a) }, state === 'pending' ? step.doing : step.word);
    attr(b, 'disabled', state === 'pending' || gone);
    return h('div', {}, b, state !== 'idle' && state !== 'pending' ? h('div', { class: 'extra' }, state) : '');
  }

  return {
    el: cover.el,
    update(now) {
      cover.update(d.fresh(now));
      const m = d.model();
      const kind = d.fresh(now).kind;
      gone = kind === 'no_link' || kind === 'waiting';
      const list = standing(m.alarms.values());
      refill(now_, list.map((a) => `${a.id}:${a.revision}:${d.acknowledger?.state(a)}`).join() + gone + d.units().system, () => list.length === 0 ? empty('No alarm standing', 7) : list.map((a) => h('tr', { 'data-open': needsAcknowledge(a) },
        h('td', {}, priorityBadge(a)),
        h('td', {}, stateWord[a.state], a.first_out && list.some((b) => b !== a && b.group === a.group) ? h('div', { class: 'extra' }, `first out${a.group && ` of ${a.group}`}`) : '', a.past ? h('div', { class: 'extra' }, 'past') : ''),
        h('td', { class: 'num' }, clock(seconds(a.raised))),
        h('td', { class: 'what' }, h('b', {}, a.text || a.title), h('div', {}, a.caution)),
        h('td', { class: 'response' }, a.response),
        h('td', { class: 'num' }, a.unknown ? 'unknown' : a.value === null ? '–' : alarmValue(d.units(), a.value, a.unit, `${a.rule} ${a.title}`)),
        h('td', { class: 'act' }, ack(a)))));
      const silent = [...m.alarms.values()].filter((a) => !isStanding(a));
      refill(quiet, silent.map((a) => `${a.id}:${a.revision}`).join() || 'none', () => silent.length === 0 ? empty('None', 5) : silent.map((a) => h('tr', {},
        h('td', {}, priorityBadge(a)), h('td', {}, stateWord[a.state]), h('td', { class: 'num' }, a.until ? clock(seconds(a.until)) : '–'), h('td', {}, a.title), h('td', {}, a.reason))));
      const last = m.history[m.history.length - 1];
      refill(past, last ? `${m.history.length}:${last.t}:${last.alarm.id}:${last.to}` : 'none', () => !last ? empty('Nothing yet', 6) : [...m.history].reverse().map((e) => h('tr', {},
        h('td', { class: 'num' }, clock(e.t)), h('td', {}, priorityBadge(e.alarm)), h('td', {}, e.alarm.title), h('td', {}, stateWord[e.from]), h('td', {}, stateWord[e.to]), h('td', {}, e.note))));
    },
    destroy: () => undefined,
  };
}
