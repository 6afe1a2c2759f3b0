// The EGT ledger: one bar per probe against the bands, and per band how much of
// its allowance is used.

import { api } from '../api';
import type { Display } from '../context';
import { type View, attr, h, refill, style, text } from '../dom';
import { exceedanceSummary } from '../exceedance';
import type { Exceedance } from '../frames';
import { believable } from '../state';
import { seconds } from '../time';
import { celsius, fixed, shown } from '../units';
import { causeWord } from '../words';

const usable = (quality: string): boolean => quality === 'good' || quality === 'held';
/** Probe values older than this are not shown as present, ms of the page. */
const valuesTimeout = 1500;
/** The record of a run is asked for at most this often, ms: it follows the display by a second or two. */
const recordEvery = 2000;

export function ledger(d: Display): View {
  const bars = h('div', { class: 'probebars' });
  const limits = h('div', { class: 'limits', 'aria-hidden': 'true' });
  const indicated = h('span', { class: 'value', 'data-q': 'egt' }, '–');
  const egtCause = h('div', { class: 'extra' });
  const spread = h('span', { class: 'value', 'data-q': 'spread' }, '–');
  const probesUsed = h('div', { class: 'extra' });
  const rows = h('tbody');
  const exceeded = h('p', { class: 'exceeded', 'data-q': 'exceedances' });
  const [egtSign, spreadSign] = [h('span', { class: 'unit' }), h('span', { class: 'unit' })];
  const el = h('section', { class: 'ledger', 'aria-label': 'Exhaust gas temperature ledger' },
    h('div', { class: 'egt' },
      h('div', { class: 'label' }, 'Indicated EGT'), h('div', { class: 'egtvalue' }, indicated, ' ', egtSign), egtCause,
      h('div', { class: 'label' }, 'Spread'), h('div', {}, spread, ' ', spreadSign), probesUsed),
    h('div', { class: 'probes' }, bars, limits),
    h('div', { class: 'bands' }, h('table', {},
      h('thead', {}, h('tr', {}, ...['EGT band', 'limit', 'this excursion, of allowance', 'in run', 'peak', 'count'].map((t) => h('th', { scope: 'col' }, t)))),
      rows), exceeded));

  interface Bar { el: HTMLElement; fill: HTMLElement; value: HTMLElement; mark: HTMLElement }
  let drawn: Bar[] = [];
  let tableRows: Map<string, { el: HTMLElement; fill: HTMLElement; figure: HTMLElement; run: HTMLElement; peak: HTMLElement; count: HTMLElement }> = new Map();

  // What is on record of the run: asked for when an excursion begins, ends or exceeds.
  let recorded: readonly Exceedance[] = [];
  let asked = '';
  let askedAt = -Infinity;
  function askRecord(now: number): void {
    const m = d.model();
    const key = m.run ? `${m.run.id} ${m.replay || m.ledgers.map((l) => `${l.excursions}${l.over}${l.exceeded}`).join()}` : '';
    if (key === asked || now - askedAt < recordEvery) return;
    if (asked.split(' ')[0] !== m.run?.id) recorded = [];
    [asked, askedAt] = [key, now];
    if (m.run) api.exceedances(m.run.id).then((r) => { if (asked === key) recorded = r.exceedances ?? []; }, () => undefined); // the bands above tell what is used up
  }

  function update(now: number): void {
    const m = d.model();
    askRecord(now);
    const said = exceedanceSummary(recorded.filter((e) => !(seconds(e.began) > m.newest)), d.units());
    text(exceeded, said);
    attr(exceeded, 'title', said || null);
    const fresh = d.fresh(now);
    const believed = believable(fresh);
    const p = believed ? m.point : null;
    const { temperature, difference } = d.units();
    const degrees = (k: number | null | undefined): string => shown(temperature, k);
    const probes = m.channels.filter((c) => c.station === 'egt');
    const top = Math.max(700, ...m.bands.map((b) => celsius(b.limit_k))) + 60;
    const share = (c: number): string => `${Math.min(100, Math.max(0, (c / top) * 100)).toFixed(1)}%`;

    const holding = m.bands.filter((b) => m.ledgers.find((l) => l.name === b.name)?.holds !== false);
    refill(limits, `${top}|${temperature.sign}|${holding.map((b) => b.name + b.limit_k).join()}`, () => [...holding].sort((a, b) => a.limit_k - b.limit_k).map((b, i, all) => {
      // Limits lie close: the outer figures stand outside their lines.
      const side = i === 0 && all.length > 1 ? 'before' : i === all.length - 1 && i > 0 ? 'after' : 'over';
      const mark = h('div', { class: `limit ${side}` }, h('span', {}, degrees(b.limit_k)));
      mark.style.left = share(celsius(b.limit_k));
      return mark;
    }));
    refill(bars, probes.map((c) => c.id).join(), () => {
      drawn = probes.map((c) => {
        const bar: Bar = { el: h('div', { class: 'probe' }), fill: h('div', { class: 'fill' }), value: h('span', { class: 'figure' }, '–'), mark: h('span', { class: 'hot' }) };
        bar.el.append(h('div', { class: 'name', title: c.title }, c.id), h('div', { class: 'column' }, bar.fill), h('div', {}, bar.value, ' ', bar.mark));
        return bar;
      });
      return drawn.length > 0 ? drawn.map((b) => b.el) : [h('div', { class: 'extra' }, 'no probe channels at station EGT')];
    });
    const current = believed && (m.replay || now - m.valuesAt < valuesTimeout);
    const readings = probes.map((c) => {
      const v = current ? m.values[c.id] : undefined;
      return v && usable(v.quality) && v.value !== null ? v.value : null;
    });
    const hottest = readings.length > 1 ? readings.reduce<number>((best, v, i) => (v !== null && (best < 0 || v > (readings[best] as number)) ? i : best), -1) : -1;
    drawn.forEach((bar, i) => {
      const v = readings[i] ?? null;
      const quality = m.values[probes[i]?.id ?? '']?.quality ?? 'missing';
      style(bar.fill, 'width', v === null ? '100%' : share(celsius(v)));
      attr(bar.el, 'data-none', v === null);
      attr(bar.el, 'title', v === null ? (current ? quality.replaceAll('_', ' ') : 'not present') : null);
      text(bar.value, degrees(v));
      text(bar.mark, i === hottest ? '◂ hottest' : v === null && current ? quality.replaceAll('_', ' ') : '');
    });

    const egt = p?.egt_indicated_k;
    text(indicated, degrees(egt));
    text(egtSign, temperature.sign);
    attr(indicated.parentElement as HTMLElement, 'data-none', typeof egt !== 'number');
    text(egtCause, typeof egt === 'number' ? '' : p ? causeWord(p.egt_cause) : 'not present');
    text(spread, shown(difference, p?.egt_spread_k));
    text(spreadSign, difference.sign);
    text(probesUsed, p ? `${p.egt_probes_used} of ${probes.length} probes used` : '');

    refill(rows, `${temperature.sign}|${m.ledgers.map((l) => l.name + l.kind + l.limit_k).join()}`, () => {
      tableRows = new Map();
      return m.ledgers.map((l) => {
        const r = { el: h('tr'), fill: h('div', { class: 'fill' }), figure: h('span', { class: 'figure' }), run: h('td'), peak: h('td'), count: h('td') };
        r.el.append(h('th', { scope: 'row' }, l.name.replaceAll('_', ' ')), h('td', {}, `${degrees(l.limit_k)} ${temperature.sign}`),
          h('td', {}, h('div', { class: 'used' }, h('div', { class: 'track' }, r.fill), r.figure)), r.run, r.peak, r.count);
        tableRows.set(l.name, r);
        return r.el;
      });
    });
    attr(el, 'data-dim', !believed);
    for (const l of m.ledgers) {
      const r = tableRows.get(l.name);
      if (!r) continue;
      const used = l.allowance_s > 0 ? Math.min(1, l.elapsed_s / l.allowance_s) : l.elapsed_s > 0 || l.exceeded ? 1 : 0;
      style(r.fill, 'width', `${(used * 100).toFixed(1)}%`);
      attr(r.el, 'data-off', l.holds === false);
      attr(r.el, 'data-level', l.exceeded ? 'exceeded' : l.over ? 'over' : null);
      text(r.figure, l.holds === false && !l.exceeded && !l.over ? 'does not hold now' : `${l.exceeded ? '■ exceeded ' : l.over ? '▲ above ' : ''}${fixed(l.elapsed_s, 1)} s ${l.allowance_s > 0 ? `of ${fixed(l.allowance_s, 1)} s` : '(none allowed)'}${l.assumed_s > 0 ? `, ${fixed(l.assumed_s, 1)} s assumed` : ''}`);
      text(r.run, `${fixed(l.run_total_s, 1)}${l.per_run_s > 0 ? ` of ${fixed(l.per_run_s, 0)}` : ''} s`);
      text(r.peak, l.peak_k === null ? '–' : `${degrees(l.peak_k)} ${temperature.sign}`);
      text(r.count, String(l.excursions));
    }
  }
  return { el, update, destroy: () => undefined };
}
