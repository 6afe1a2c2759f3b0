// The Watch display, used live and in replay alike.

import type { Display } from '../context';
import { type View, attr, h, text } from '../dom';
import type { Freshness } from '../state';
import { signedClock } from '../time';
import { age } from '../units';
import { alarmLine } from './alarmline';
import { cardLine } from './cardline';
import { ledger } from './ledger';
import { numbers } from './numbers';
import { throatPlane } from './throat';
import { traces } from './traces';

/** What is laid over a page whose data is not present; "" when it is. */
export function veilText(f: Freshness): string {
  switch (f.kind) {
    case 'waiting': return 'WAITING FOR DATA LINK';
    case 'no_link': return `NO DATA LINK since ${signedClock(f.since)}`;
    default: return '';
  }
}

/** A lesser trouble, told in a line without covering the page. */
export function troubleText(f: Freshness): string {
  switch (f.kind) {
    case 'catching_up': return `CATCHING UP, data is ${age(f.age)} old`;
    case 'no_points': return Number.isFinite(f.age) ? `NO OPERATING POINT for ${age(f.age)}` : 'NO OPERATING POINT yet';
    default: return '';
  }
}

/** Greys its content and says in large letters why. */
export function veil(content: HTMLElement): { el: HTMLElement; update(f: Freshness): void } {
  const words = h('div', { class: 'veilwords', role: 'alert' });
  const el = h('div', { class: 'veiled' }, content, words);
  return {
    el,
    update(f) {
      const say = veilText(f);
      text(words, say);
      attr(el, 'data-veiled', say !== '');
    },
  };
}

/** `title` is read aloud; `tools` are what an operator does from here, none in a replay. */
export function watchDisplay(d: Display, title: string, tools: View | null): View {
  const parts = [alarmLine(d), throatPlane(d), numbers(d), traces(d, tools?.el ?? null), ledger(d), cardLine(d)];
  const [line, plane, figures, plots, egt, card] = parts as [View, View, View, View, View, View];
  const grid = h('div', { class: 'display' }, h('h1', { class: 'spoken' }, title), line.el, card.el, h('div', { class: 'nozzle' }, plane.el, figures.el), plots.el, egt.el);
  const cover = veil(grid);
  return {
    el: cover.el,
    update(now) {
      cover.update(d.fresh(now));
      attr(grid, 'data-card', d.model().card !== null);
      for (const p of parts) p.update(now);
      tools?.update(now);
    },
    destroy() {
      for (const p of parts) p.destroy();
      tools?.destroy();
    },
  };
}
