// The test card in one line: the next point, how far off it is, and what hinders it.

import { awaiting, currentPoint, distance, standing } from '../card';
import { take } from '../carddeeds';
import { type Display, gate } from '../context';
import { type View, attr, h, refill, text } from '../dom';
import { believable } from '../state';

export function cardLine(d: Display): View {
  const name = h('a', { href: '#/card', 'data-q': 'card-name' });
  const targets = h('span', { class: 'targets' });
  const state = h('span', { class: 'standing', 'data-q': 'card-state' });
  const told = h('span', { class: 'trouble', role: 'status' });
  const button = h('button', { type: 'button', 'data-q': 'card-take', onclick: () => {
    const c = d.model().card;
    text(told, '');
    if (c) take(d, c).catch((e: Error) => text(told, `not taken: ${e.message}`));
  } }, 'Take');
  const el = h('section', { class: 'cardline', 'aria-label': 'Test card' }, name, targets, state, told, d.acknowledger ? button : '');
  return {
    el,
    update(now) {
      const c = d.model().card;
      attr(el, 'hidden', c === null);
      if (!c) return;
      const u = d.units();
      const p = currentPoint(c);
      const at = believable(d.fresh(now)) ? c.now ?? null : null;
      text(name, `Card ${[c.number, c.revision].filter(Boolean).join(' ') || c.title}${p ? `, point ${c.current + 1} of ${c.points.length}: ${p.name}` : ': nothing is left to be taken'}`);
      const list = p?.targets ?? [];
      const shown = list.map((t, i) => ({ title: t.title, text: t.text, ...distance(t, at?.targets?.[i], u) }));
      refill(targets, JSON.stringify(shown), () => shown.map((t) => h('span', { class: 'target', 'data-off': t.off !== 'inside', title: `${t.title}: asked for ${t.text}` }, `${t.title} `, h('b', {}, t.value), ` ${t.off}`)));
      const waiting = awaiting(c);
      text(state, [p ? standing(p, at, u) : '', waiting.length > 0 ? `no. ${waiting.map((x) => x.number).join(', ')} waits for a verdict` : ''].filter(Boolean).join(' · '));
      attr(state, 'title', state.textContent);
      attr(button, 'hidden', !p);
      text(button, at?.stabilised ? 'Take' : 'Take…');
      gate(button, d, 'take', now);
    },
    destroy: () => undefined,
  };
}
