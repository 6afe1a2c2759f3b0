// Alarms: those that stand, each with its consequences under it, those taken out of
// annunciation, what happened in this run, and how the alarms did.

import { type Branch, type Step, asideSteps, grouped, isStanding, needsAcknowledge, nextStep, passes, priorityLook, standing, stateWord } from '../alarms';
import { askForm, withdraw } from '../ask';
import { type Display, gate } from '../context';
import { type View, column, h, refill, text } from '../dom';
import type { Alarm } from '../frames';
import { activeRun } from '../state';
import { clock, facility, seconds } from '../time';
import { alarmValue } from '../units';
import { veil } from '../watch/display';
import { figuresView } from './figures';

const head = (...names: string[]): HTMLElement => h('thead', {}, h('tr', {}, ...names.map(column)));
const empty = (words: string, n: number): Node[] => [h('tr', {}, h('td', { colspan: String(n), class: 'extra' }, words))];
const shelfTimes = [5, 10, 15, 30, 60].map((m) => [String(m * 60), `${m} min`] as const);

export function priorityBadge(a: Alarm): HTMLElement {
  const look = priorityLook[a.priority];
  return h('span', { class: 'badge', 'data-priority': a.priority }, h('span', { 'aria-hidden': 'true' }, look.shape), ` ${look.word}`);
}

/** Asks for what a step needs besides the press, and sends it. */
function take(d: Display, a: Alarm, step: Step): void {
  const send = (reason: string, shelf = 0): Promise<void> => d.acknowledger?.send(a, step.path, reason, shelf) ?? Promise.resolve();
  const reason = { name: 'reason', label: 'Reason' };
  switch (step.path) {
    case 'shelve':
      return askForm(`Shelve “${a.title}”: it is not annunciated until the time is over or somebody takes it from the shelf.`,
        [{ name: 'time', label: 'Time', kind: 'select', options: shelfTimes, value: '600' }, reason], 'Shelve', (v) => send(v['reason'] ?? '', Number(v['time'])));
    case 'out-of-service':
      return askForm(`Take “${a.title}” out of service: it is not annunciated until an engineer brings it back. Possible only with the engine off.`,
        [reason], 'Out of service', (v) => send(v['reason'] ?? ''));
    case 'in-service':
      return askForm(`Bring “${a.title}” back into service.`, [reason], 'Back in service', (v) => send(v['reason'] ?? ''));
    default:
      send('').catch(() => undefined); // told by its state
  }
}

export function alarmsPage(d: Display): View {
  const now_ = h('tbody');
  const quiet = h('tbody');
  const past = h('tbody');
  const unknown = h('p', { class: 'extra', 'data-q': 'rules-unknown' });
  const priority = h('select', { 'aria-label': 'Priority', 'data-q': 'filter-priority' }, h('option', { value: '' }, 'every priority'), ...Object.entries(priorityLook).map(([v, look]) => h('option', { value: v }, look.word.toLowerCase())));
  const words = h('input', { type: 'search', placeholder: 'rule or text (key /)', 'aria-label': 'Rule or text', 'aria-keyshortcuts': '/', 'data-q': 'filter-words' });
  const matches = h('span', { class: 'extra', role: 'status' });
  const figures = figuresView(() => (activeRun(d.model()) ? { run: null, live: true } : d.model().run ? { run: d.model().run?.id ?? null, live: false } : null));
  const cover = veil(h('div', { class: 'page' },
    h('h1', {}, 'Alarms'),
    h('section', {}, h('h2', {}, 'Standing'), h('table', { class: 'list alarms' }, head('Priority', 'State', `>Raised, ${facility.sign()}`, 'Alarm and caution', 'Response', '>Value', 'Action'), now_), unknown),
    h('section', {}, h('h2', {}, 'Not annunciated: shelved, suppressed by design, out of service'), h('table', { class: 'list aside' }, head('Priority', 'State', '>Until', 'Alarm', 'Reason', 'Action'), quiet)),
    h('div', { class: 'columns' },
      h('section', {}, h('h2', {}, 'History of this run, newest first'), h('div', { class: 'filter', role: 'search' }, priority, words, matches),
        h('table', { class: 'list past' }, head(`>Time, ${facility.sign()}`, 'Priority', 'Alarm', 'From', 'To', 'Note, action'), past)),
      h('section', {}, h('h2', {}, 'Alarm figures of this run'), figures.el))));

  function button(a: Alarm, step: Step, cls: string): HTMLElement {
    const b = h('button', { class: cls, type: 'button', 'data-focus': `${a.rule}/${step.path}`, 'aria-label': `${step.word} ${a.title}`, onclick: () => take(d, a, step) }, step.word);
    const sending = d.acknowledger?.state(a) === 'pending';
    gate(b, d, step.path, performance.now(), sending);
    if (sending) text(b, step.doing);
    return b;
  }

  function actions(a: Alarm): Node[] {
    if (!d.acknowledger) return [];
    const state = d.acknowledger.state(a);
    const step = nextStep(a);
    return [
      step ? button(a, step, 'ack') : h('div', { class: 'extra' }, a.acknowledged_by ? `by ${a.acknowledged_by}` : ''),
      h('div', { class: 'asides' }, ...asideSteps(a).map((s) => button(a, s, 'small'))),
      ...(state !== 'idle' && state !== 'pending' ? [h('div', { class: 'trouble' }, state)] : []),
    ];
  }

  function standingRow({ alarm: a, under }: Branch, list: readonly Alarm[]): Node {
    const notes = [under ? 'follows from the alarm above' : a.first_out && list.some((b) => b !== a && b.group === a.group) ? `first out${a.group && ` of ${a.group}`}` : '', a.past ? 'past' : ''].filter(Boolean);
    return h('tr', { 'data-open': needsAcknowledge(a), 'data-under': under },
      h('td', {}, priorityBadge(a)),
      h('td', {}, stateWord[a.state], ...notes.map((n) => h('div', { class: 'extra' }, n))),
      h('td', { class: 'num' }, clock(seconds(a.raised))),
      h('td', { class: 'what' }, h('b', {}, a.text || a.title), h('div', {}, a.caution)),
      h('td', { class: 'response' }, a.response),
      h('td', { class: 'num' }, a.unknown ? 'cannot be judged' : a.value === null ? '–' : alarmValue(d.units(), a.value, a.unit, `${a.rule} ${a.title}`, a.dimension)),
      h('td', { class: 'act' }, ...actions(a)));
  }

  function onKey(e: KeyboardEvent): void {
    if (/^(INPUT|SELECT|TEXTAREA)$/.test((e.target as HTMLElement).tagName) || e.ctrlKey || e.metaKey || e.altKey) return;
    const to = e.key === '/' ? words : e.key.toLowerCase() === 'a' ? now_.querySelector<HTMLElement>('button.ack') : null;
    if (!to) return;
    e.preventDefault();
    to.focus();
  }
  document.addEventListener('keydown', onKey);

  return {
    el: cover.el,
    update(now) {
      const fresh = d.fresh(now);
      cover.update(fresh);
      const m = d.model();
      const mayAct = `${fresh.kind === 'no_link' || fresh.kind === 'waiting'}${d.session().role}${d.units().system}`;
      const list = standing(m.alarms.values());
      refill(now_, list.map((a) => `${a.id}:${a.revision}:${d.acknowledger?.state(a)}`).join() + mayAct, () => (list.length === 0 ? empty('No alarm standing', 7) : grouped(list).map((b) => standingRow(b, list))));
      const n = m.status?.rules_unknown ?? 0;
      text(unknown, n > 0 ? `▲ ${n} rule${n > 1 ? 's' : ''} cannot be judged now: an input is bad or missing.` : 'Every rule can be judged now.');
      const silent = [...m.alarms.values()].filter((a) => !isStanding(a)).sort((a, b) => (a.rule < b.rule ? -1 : 1));
      refill(quiet, (silent.map((a) => `${a.id}:${a.revision}:${d.acknowledger?.state(a)}`).join() || 'none') + mayAct, () => silent.length === 0 ? empty('None', 6) : silent.map((a) => h('tr', {},
        h('td', {}, priorityBadge(a)), h('td', {}, stateWord[a.state]), h('td', { class: 'num' }, a.until ? clock(seconds(a.until)) : '–'), h('td', {}, a.title), h('td', {}, a.reason),
        h('td', {}, h('div', { class: 'asides' }, ...asideSteps(a).map((s) => button(a, s, 'small')))))));
      const filter = { priority: priority.value, words: words.value };
      const last = m.history[m.history.length - 1];
      const there = new Set([...m.alarms.values()].map((a) => a.rule));
      const latest = new Map(m.history.filter((e) => e.to === 'normal' && !there.has(e.alarm.rule)).map((e) => [e.alarm.rule, e])); // those that stand or are aside are acted on above
      refill(past, (last ? `${m.history.length}:${last.t}:${last.alarm.id}:${last.to}:${JSON.stringify(filter)}` : 'none') + [...latest.values()].map((e) => d.acknowledger?.state(e.alarm)).join() + mayAct, () => {
        const found = [...m.history].reverse().filter((e) => passes(e.alarm, filter));
        text(matches, found.length < m.history.length ? `${found.length} of ${m.history.length}` : '');
        if (found.length === 0) return empty(last ? 'Nothing passes the filter' : 'Nothing yet', 6);
        return found.map((e) => h('tr', {},
          h('td', { class: 'num' }, clock(e.t)), h('td', {}, priorityBadge(e.alarm)), h('td', { title: e.alarm.rule }, e.alarm.title), h('td', {}, stateWord[e.from]), h('td', {}, stateWord[e.to]),
          h('td', {}, e.note, h('div', { class: 'asides' }, ...(latest.get(e.alarm.rule) === e ? asideSteps(e.alarm).map((s) => button(e.alarm, s, 'small')) : [])))));
      });
      figures.update(now);
    },
    destroy() {
      document.removeEventListener('keydown', onKey);
      withdraw();
    },
  };
}
