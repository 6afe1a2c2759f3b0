// The test card: its points in their order, how the current one stands, and what was taken.

import { api, withFaults } from '../api';
import { askForm, withdraw } from '../ask';
import { askedFor, awaiting, cardName, distance, howTaken, standing } from '../card';
import { step, take } from '../carddeeds';
import { type Display, gate } from '../context';
import { type View, attr, column, h, refill, text } from '../dom';
import type { Card, CardTarget, TakenPoint } from '../frames';
import { brief } from '../points';
import type { Deed } from '../session';
import { believable } from '../state';
import { clock, dateClock, facility, seconds } from '../time';
import { fixed, scaleOf } from '../units';
import { veil } from '../watch/display';
import { testDayLinks } from './testday';

/** A card is a short text; the server takes no larger one, bytes. */
const largest = 60_000;
const reason = { name: 'reason', label: 'Reason' };

export function cardPage(d: Display): View {
  const facts = h('dl', { class: 'facts counts2', 'data-q': 'card-facts' });
  const points = h('tbody');
  const taken = h('tbody');
  const takenHead = h('tr');
  const told = h('p', { class: 'trouble', role: 'status' });
  const file = h('input', { type: 'file', accept: '.yaml,.yml', 'aria-label': 'File of a test card', 'data-q': 'card-file', hidden: true, onchange: () => void chosen() });
  const load = h('button', { type: 'button', 'data-q': 'card-load', onclick: () => file.click() }, 'Load a card…');
  const sheet = h('div', { class: 'page card' }, h('h1', {}, 'Test card'), testDayLinks('card'),
    facts, h('p', { class: 'asides' }, load, file), told,
    h('section', {}, h('h2', {}, 'Points'), h('div', { class: 'scroll', tabindex: '0', role: 'region', 'aria-label': 'Points of the card' }, h('table', { class: 'list cardpoints', 'data-q': 'card-points' }, h('thead', {}, h('tr', {}, ...['>No.', 'Point', 'Asked for', 'Now', 'Off', 'State', 'Action'].map(column))), points))),
    h('section', {}, h('h2', {}, 'Taken, newest first'), h('div', { class: 'scroll', tabindex: '0', role: 'region', 'aria-label': 'Points taken' }, h('table', { class: 'list taken', 'data-q': 'card-taken' }, h('thead', {}, takenHead), taken))));
  const cover = veil(sheet);

  async function chosen(): Promise<void> {
    const f = file.files?.[0];
    file.value = '';
    if (!f) return;
    text(told, '');
    if (f.size > largest) {
      text(told, `Not loaded: ${f.name} is larger than a test card may be.`);
      return;
    }
    const words = await f.text();
    askForm(`Take ${f.name} as the test card. It supersedes the one in force; what was taken stays.`, [reason], 'Load the card',
      async (v) => { await api.loadCard(d.rig, words, v['reason'] ?? '', d.operator()).catch((e: unknown) => { throw withFaults(e); }); });
  }

  function button(deed: Deed, label: string, focus: string, about: string, press: () => void): HTMLElement {
    const b = h('button', { type: 'button', class: 'small', 'data-focus': focus, 'data-q': `card-${deed}`, 'aria-label': `${label} ${about}`, onclick: press }, label);
    gate(b, d, deed, performance.now());
    return b;
  }

  const pressTake = (c: Card) => (): void => { take(d, c).catch((e: Error) => text(told, `Not taken: ${e.message}`)); };

  function pointRows(c: Card): Node[] {
    const u = d.units();
    return c.points.flatMap((p, i) => {
      const here = i === c.current;
      const progress = c.progress[i];
      const targets: (CardTarget | null)[] = p.targets && p.targets.length > 0 ? p.targets : [null];
      const n = targets.length;
      const span = n > 1 ? String(n) : null;
      const said = here ? standing(p, c.now, u) : '';
      const word = progress?.status === 'skipped' ? `skipped by ${progress.by}: ${progress.reason}` : [progress?.status, (progress?.numbers ?? []).length > 0 ? `no. ${(progress?.numbers ?? []).join(', ')}` : ''].filter(Boolean).join(', ');
      const acts = here
        ? [button('take', c.now?.stabilised ? 'Take' : 'Take…', `take ${i}`, p.name, pressTake(c)), button('skip', 'Skip…', `skip ${i}`, p.name, () => step(d, 'skip', { point: i + 1 }, `Skip “${p.name}”?`, 'Skip'))]
        : [button('go-to', 'Go to…', `go ${i}`, p.name, () => step(d, 'go-to', { point: i + 1 }, `Go to “${p.name}”: it is the next to be taken.`, 'Go to', true))];
      return targets.map((t, k) => {
        const at = t ? distance(t, here ? c.now?.targets?.[k] : undefined, u) : { value: '', off: '' };
        return h('tr', { 'data-here': here, 'data-first': k === 0, 'aria-current': here && k === 0 ? 'step' : null },
          ...(k === 0 ? [h('td', { class: 'num', rowspan: span }, String(i + 1)), h('th', { scope: 'row', rowspan: span }, here ? '▸ ' : '', p.name, h('div', { class: 'extra' }, howTaken(p)))] : []),
          h('td', {}, t ? `${t.title} ${t.text}` : '–', t && askedFor(t, u) !== t.text ? h('div', { class: 'extra' }, askedFor(t, u)) : ''), h('td', { class: 'num' }, here ? at.value : ''), h('td', { 'data-off': here && at.off !== 'inside' }, here ? at.off : ''),
          ...(k === 0 ? [h('td', { rowspan: span, 'data-q': here ? 'card-standing' : null }, word, here ? h('div', {}, said) : '', here && c.now?.armed ? h('div', { class: 'extra' }, 'the card arms the choke watch') : ''), h('td', { rowspan: span }, h('div', { class: 'asides' }, ...acts))] : []));
      });
    });
  }

  /** The quantities that the card asks for, each once. */
  const asked = (c: Card): CardTarget[] => [...new Map(c.points.flatMap((p) => p.targets ?? []).map((t) => [t.quantity, t])).values()];

  const takenRow = (p: TakenPoint, quantities: readonly CardTarget[]): Node[] => {
    const width = quantities.length + 7;
    return [h('tr', {},
      h('th', { scope: 'row', class: 'num' }, String(p.number)), h('td', {}, p.name, h('div', { class: 'extra' }, `${p.card}${p.automatic ? ', by itself' : ''}`)), h('td', { class: 'num' }, clock(seconds(p.from))), h('td', { class: 'num' }, `${fixed(seconds(p.to) - seconds(p.from), 0)} s`),
      ...quantities.map((t) => h('td', { class: 'num' }, brief(p, t.quantity, d.units()))),
      h('td', {}, p.status), h('td', {}, [p.by, p.judged_by && p.judged_by !== p.by ? `judged by ${p.judged_by}` : ''].filter(Boolean).join(', '), p.reason ? h('div', { class: 'extra' }, p.reason) : ''),
      h('td', {}, h('div', { class: 'asides' },
        p.status !== 'accepted' ? button('accept', 'Accept…', `accept ${p.number}`, `point ${p.number}`, () => step(d, 'accept', { number: p.number }, `Accept point ${p.number}, “${p.name}”.`, 'Accept', true)) : '',
        p.status !== 'rejected' ? button('reject', 'Reject…', `reject ${p.number}`, `point ${p.number}`, () => step(d, 'reject', { number: p.number }, `Reject point ${p.number}, “${p.name}”: the card goes back to it, and its number is not given again.`, 'Reject')) : ''))),
    ...((p.doubts ?? []).length > 0 ? [h('tr', { class: 'doubts' }, h('td', { colspan: String(width) }, `▲ doubtful: ${(p.doubts ?? []).join('; ')}`))] : [])];
  };

  let drawnAt = -Infinity;
  return {
    el: cover.el,
    update(now) {
      const fresh = d.fresh(now);
      cover.update(fresh);
      gate(load, d, 'card', now);
      if (now - drawnAt < 240) return;
      drawnAt = now;
      const m = d.model();
      const c = m.card && !believable(fresh) ? { ...m.card, now: null } : m.card;
      const may = `${fresh.kind === 'no_link' || fresh.kind === 'waiting'}${d.session().role}${d.units().system}`;
      const list: [string, string][] = !c ? [] : [['Card', cardName(c)], ['For', c.for || '–'], ['Made by', c.by || '–'], ['Loaded', `${dateClock(seconds(c.loaded))}${c.loaded_by ? `, ${c.loaded_by}` : ''}`], ['Hash', c.hash.slice(0, 16)],
        ['Waiting for a verdict', awaiting(c).map((p) => `no. ${p.number}`).join(', ') || 'none']];
      refill(facts, JSON.stringify(list), () => list.flatMap(([k, v]) => [h('dt', {}, k), h('dd', {}, v)]));
      refill(points, JSON.stringify([c && { ...c, taken: null }, may]), () => (c ? pointRows(c) : [h('tr', {}, h('td', { colspan: '7', class: 'extra' }, 'No card is loaded'))]));
      const quantities = c ? asked(c) : [];
      refill(takenHead, JSON.stringify([quantities, d.units().system]), () => ['>No.', 'Point', `>From, ${facility.sign()}`, '>Length', ...quantities.map((t) => {
        const { sign } = scaleOf(d.units(), t.unit, t.quantity);
        return `>${t.title}${sign ? `, ${sign}` : ''}`;
      }), 'State', 'By', 'Action'].map(column));
      refill(taken, JSON.stringify([c?.taken, may]), () => {
        const all = [...(c?.taken ?? [])].reverse();
        return all.length === 0 ? [h('tr', {}, h('td', { colspan: String(quantities.length + 7), class: 'extra' }, 'None'))] : all.flatMap((p) => takenRow(p, quantities));
      });
      attr(told, 'hidden', told.textContent === '');
    },
    destroy: withdraw,
  };
}
