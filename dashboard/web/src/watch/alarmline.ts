// The one alarm line: the most urgent alarm, what it means, what to do.

import { needsAcknowledge, nextStep, priorityLook, standing, stateWord } from '../alarms';
import { type Display, hindrance } from '../context';
import { type View, attr, h, text } from '../dom';
import type { Alarm } from '../frames';
import { believable } from '../state';
import { clock, seconds } from '../time';

export function alarmLine(d: Display): View {
  const shape = h('span', { class: 'shape', 'aria-hidden': 'true' });
  const word = h('span', { class: 'word', 'data-q': 'alarm-priority' });
  const state = h('span', { class: 'extra' });
  const title = h('div', { class: 'title', 'data-q': 'alarm-text' });
  const caution = h('div', { class: 'caution', 'data-q': 'alarm-caution' });
  const response = h('div', { class: 'response', 'data-q': 'alarm-response' });
  const button = h('button', { class: 'ack', type: 'button', 'data-q': 'acknowledge', 'aria-keyshortcuts': 'A', onclick: press }, 'Acknowledge');
  const others = h('a', { class: 'others', href: '#/alarms' });
  const polite = h('div', { class: 'spoken', role: 'status', 'aria-live': 'polite' });
  const urgent = h('div', { class: 'spoken', role: 'alert', 'aria-live': 'assertive' });
  const act = h('div', { class: 'act' }, d.acknowledger ? button : '', d.acknowledger ? others : h('span', { class: 'others' }, 'as recorded'));
  const el = h('section', { class: 'alarmline', 'aria-label': 'Most urgent alarm' },
    h('div', { class: 'priority' }, h('div', {}, shape, ' ', word), state), h('div', { class: 'what' }, title, caution, response), act, polite, urgent);
  let shown: Alarm | null = null;
  function press(): void {
    const step = shown && nextStep(shown);
    if (shown && step) d.acknowledger?.send(shown, step.path).catch(() => undefined); // told by its state
  }
  let spoken = '';

  function update(now: number): void {
    const m = d.model();
    const list = standing(m.alarms.values());
    const a = list[0] ?? null;
    shown = a;
    const believed = believable(d.fresh(now)) || d.fresh(now).kind === 'no_points';
    attr(el, 'data-priority', a ? a.priority : null);
    attr(el, 'data-dim', !believed);
    const open = a !== null && needsAcknowledge(a);
    attr(el, 'data-open', open && believed);
    text(shape, a ? priorityLook[a.priority].shape : '');
    text(word, a ? priorityLook[a.priority].word : '');
    text(state, a ? `${stateWord[a.state]}${a.past ? ', past' : ''} · ${clock(seconds(a.state === 'unacknowledged' ? a.changed : a.raised))}` : ''); // a latched one may come again
    text(title, a ? (a.text || a.title) : 'No alarm standing');
    text(caution, a?.caution ?? '');
    attr(title.parentElement as HTMLElement, 'title', a ? `${a.text}\n${a.caution}\n${a.response}` : null);
    text(response, a ? a.response || (a.unknown ? 'Raised because an input is missing: the rule cannot be judged.' : '') : '');
    if (d.acknowledger) {
      const sending = a ? d.acknowledger.state(a) : 'idle';
      const step = a && nextStep(a);
      text(button, step ? (sending === 'pending' ? step.doing : step.word) : 'Acknowledged');
      const why = step ? hindrance(d, step.path, now) : '';
      attr(button, 'disabled', !step || sending === 'pending' || why !== '');
      attr(button, 'data-hidden', a === null);
      const trouble = sending !== 'idle' && sending !== 'pending' ? sending : why;
      attr(others, 'hidden', a === null); // a link without words is none
      text(others, trouble || (list.length > 1 ? `${list.length - 1} other${list.length > 2 ? 's' : ''} standing` : a ? 'no others standing' : ''));
    }
    const say = a ? `${a.id} ${a.state}` : '';
    if (say !== spoken) {
      spoken = say;
      const words = a ? `${priorityLook[a.priority].word}, ${stateWord[a.state]}: ${a.text || a.title}. ${a.caution}` : 'No alarm standing';
      text(urgent, a?.priority === 'warning' && open ? words : '');
      text(polite, a?.priority === 'warning' && open ? '' : words);
    }
  }
  function onKey(e: KeyboardEvent): void {
    if (e.key.toLowerCase() !== 'a' || /^(INPUT|SELECT|TEXTAREA)$/.test((e.target as HTMLElement).tagName) || e.ctrlKey || e.metaKey || e.altKey) return;
    button.focus(); // to press it is a second, deliberate step
  }
  if (d.acknowledger) document.addEventListener('keydown', onKey);
  return { el, update, destroy: () => document.removeEventListener('keydown', onKey) };
}
