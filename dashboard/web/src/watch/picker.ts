// Chooses what is traced. It stands closed until asked for.

import type { Display } from '../context';
import { type View, attr, h, refill } from '../dom';
import { mostPlots, plotsOf, standardPlots, standardTitles } from './plots';

export function picker(d: Display): View {
  const main = h('button', { type: 'button', 'aria-expanded': 'false', 'aria-keyshortcuts': 'T', title: 'Choose what is traced (key T)', 'data-q': 'pick', onclick: () => show(panel.hidden === true) }, 'Traces…');
  const find = h('input', { type: 'search', placeholder: 'find', 'aria-label': 'Find a quantity or channel', 'data-q': 'pick-find' });
  const list = h('div', { class: 'picklist' });
  const reset = h('button', { type: 'button', 'data-q': 'pick-reset', onclick: () => d.choosePlots(standardPlots) }, 'As at first');
  const full = h('span', { class: 'extra', role: 'status' });
  const panel = h('div', { class: 'pickpanel', role: 'group', 'aria-label': 'What is traced', hidden: true }, h('div', { class: 'filter' }, find, reset), full, list);
  const el = h('div', { class: 'picker', onkeydown: (e: Event) => inPanel(e as KeyboardEvent) }, main, panel);

  function show(open: boolean): void {
    if (panel.hidden === !open) return;
    panel.hidden = !open;
    (open ? find : main).focus();
  }
  /** Escape closes; the arrows go through the list from the field on. */
  function inPanel(e: KeyboardEvent): void {
    if (e.key === 'Escape') show(false);
    if (panel.hidden || (e.key !== 'ArrowDown' && e.key !== 'ArrowUp')) return;
    e.preventDefault();
    const stops = [find, ...list.querySelectorAll<HTMLElement>('input:enabled')];
    stops[stops.indexOf(document.activeElement as HTMLElement) + (e.key === 'ArrowDown' ? 1 : -1)]?.focus();
  }

  function onKey(e: KeyboardEvent): void {
    if (e.key.toLowerCase() !== 't' || /^(INPUT|SELECT|TEXTAREA)$/.test((e.target as HTMLElement).tagName) || e.ctrlKey || e.metaKey || e.altKey) return;
    e.preventDefault(); // the letter is the key, not the text
    show(true);
  }
  document.addEventListener('keydown', onKey);
  const outside = (e: Event): void => { if (!el.contains(e.target as Node)) panel.hidden = true; };
  document.addEventListener('pointerdown', outside);

  const toggle = (key: string): void => {
    const keys = d.plots();
    d.choosePlots(keys.includes(key) ? keys.filter((k) => k !== key) : [...keys, key]);
  };

  return {
    el,
    update() {
      attr(main, 'aria-expanded', String(!panel.hidden));
      if (panel.hidden) return;
      const { channels, quantities } = d.model();
      const chosen = d.plots();
      const count = (keys: readonly string[]): number => plotsOf(keys, d.units(), channels, quantities).length;
      const room = count(chosen) < mostPlots;
      const wanted = find.value.trim().toLowerCase();
      const all: [string, (readonly [key: string, name: string])[]][] = [
        ['Plots', standardPlots.map((k) => [k, standardTitles[k] ?? k])],
        ['Channels', channels.map((c) => [`channel.${c.id}`, `${c.id}: ${c.title}`])],
        ['Quantities', quantities.map((q) => [q.name, q.title])],
      ];
      attr(full, 'hidden', room);
      full.textContent = room ? '' : `At most ${mostPlots} plots.`;
      refill(list, JSON.stringify([chosen, wanted, room, channels.length, quantities.length]), () => all.flatMap(([group, items]) => {
        const found = items.filter(([key, name]) => `${key} ${name}`.toLowerCase().includes(wanted));
        if (found.length === 0) return [];
        return [h('div', { class: 'grouptitle' }, group), ...found.map(([key, name]) => {
          const on = chosen.includes(key);
          const box = h('input', { type: 'checkbox', checked: on, 'data-focus': key, 'data-q': `pick-${key}`, disabled: on ? chosen.length === 1 : !room, onchange: () => toggle(key) });
          return h('label', {}, box, name);
        })];
      }));
    },
    destroy() {
      document.removeEventListener('pointerdown', outside);
      document.removeEventListener('keydown', onKey);
    },
  };
}
