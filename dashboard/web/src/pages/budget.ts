// The uncertainty budget of a result: which input, and which channel behind it, makes
// it how uncertain.

import { api, type Budget } from '../api';
import type { Display } from '../context';
import { type View, column, h, refill, text } from '../dom';
import { believable } from '../state';

/** How often it is asked for while it is looked at, ms. */
const every = 2000;

/** Shares below this are left out of the list of channels. */
const least = 0.005;

const results: Record<string, string> = { choke_margin_percent: 'choke margin', npr: 'NPR', mass_flow_kg_s: 'nozzle flow W8', gross_thrust_n: 'gross thrust', flow_balance_kg_s: 'flow balance' };

const percent = (share: number | null): string => (share === null ? '–' : share < 0.0005 ? '< 0.1 %' : `${(100 * share).toFixed(1)} %`);

export function budgetView(d: Display): View {
  const body = h('tbody');
  const sum = h('p', { class: 'extra' });
  const choice = h('select', { 'aria-label': 'Result of the budget', 'data-q': 'budget-of' });
  const el = h('div', {}, h('div', { class: 'filter' }, h('span', { class: 'label' }, 'of the'), choice),
    h('table', { class: 'list', 'data-q': 'budget' }, h('thead', {}, h('tr', {}, ...['Input', '>Share', 'From'].map(column))), body), sum);
  let askedAt = -Infinity;
  let known: Budget | null = null;
  return {
    el,
    update(now) {
      const p = believable(d.fresh(now)) ? d.model().point : null;
      if (typeof p?.choke_margin_percent_u95 !== 'number') known = null; // nothing stale looks alive
      else if (now - askedAt >= every) {
        askedAt = now;
        api.budget(d.rig).then((b) => { known = b; }, () => { known = null; });
      }
      const names = known?.outputs.map((o) => o.quantity) ?? (choice.dataset['key'] ? choice.dataset['key'].split(',') : ['choke_margin_percent']);
      const wanted = choice.value || 'choke_margin_percent';
      refill(choice, names.join(), () => names.map((n) => h('option', { value: n, selected: n === wanted }, results[n] ?? n.replaceAll('_', ' '))));
      const output = known?.outputs.find((o) => o.quantity === choice.value);
      text(sum, output ? `Shares of the variance of the ${results[output.quantity] ?? output.quantity}.` : 'Not known now: an input or a stated uncertainty is missing.');
      refill(body, output && known ? `${known.t}${output.quantity}` : 'none', () => [...(output?.inputs ?? [])]
        .filter((i) => (i.share ?? 0) > 0)
        .sort((a, b) => (b.share ?? 0) - (a.share ?? 0))
        .map((i) => h('tr', {},
          h('th', { scope: 'row' }, i.input),
          h('td', { class: 'num' }, percent(i.share)),
          h('td', { class: 'extra' }, i.parts.filter((part) => (part.share ?? 0) >= least && part.what !== i.input).map((part) => `${part.channel ?? part.what} ${percent(part.share)}`).join(', ')))));
    },
    destroy: () => undefined,
  };
}
