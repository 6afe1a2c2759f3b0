// Rig: every channel as it comes in and as it is used, the sources and sessions,
// and what was refused and why.

import type { Display } from '../context';
import { type View, attr, column, h, refill, text } from '../dom';
import { activeRun, believable } from '../state';
import { age, fixed, inUnit, plain, significant } from '../units';
import { budgetView } from './budget';
import { engineerView } from './engineer';
import { veil } from '../watch/display';
import { runButton } from '../watch/tools';

const head = (...names: string[]): HTMLElement => h('thead', {}, h('tr', {}, ...names.map(column)));

export function rigPage(d: Display): View {
  const facts = h('dl', { class: 'facts' });
  const body = h('tbody');
  const sources = h('tbody');
  const sessions = h('tbody');
  const counters = h('tbody');
  const trouble = h('p', { class: 'trouble', role: 'status' });
  const run = runButton(d, trouble);
  const engineer = engineerView(d);
  const budget = budgetView(d);
  const cover = veil(h('div', { class: 'page' },
    h('h1', {}, 'Rig'),
    h('div', { class: 'columns' },
      h('div', {}, h('section', {}, h('h2', {}, 'Nozzle, with 95 % uncertainties'), engineer.el),
        h('section', {}, h('h2', {}, 'Channels'), h('table', { class: 'list channels' }, head('Channel', '', 'Station', '>Raw', '>Value', 'Unit', 'Quality', '>Age', '>Range'), body))),
      h('div', {},
        h('section', {}, h('h2', {}, 'Rig and files'), facts, h('p', {}, run.el, ' ', trouble)),
        h('section', {}, h('h2', {}, 'Uncertainty budget of the margin'), budget.el),
        h('section', {}, h('h2', {}, 'Sources'), h('table', { class: 'list' }, head('Topic', '>Age', '>Messages', '>Clock skew', ''), sources)),
        h('section', {}, h('h2', {}, 'Broker sessions'), h('table', { class: 'list' }, head('Topic filter', ''), sessions)),
        h('section', {}, h('h2', {}, 'Counters'), h('table', { class: 'list' }, head('What', '>Count'), counters))))));
  interface Row { el: HTMLElement; raw: HTMLElement; value: HTMLElement; sign: HTMLElement; quality: HTMLElement; age: HTMLElement }
  let rows = new Map<string, Row>();
  let drawnAt = -Infinity;

  return {
    el: cover.el,
    update(now) {
      const fresh = d.fresh(now);
      cover.update(fresh);
      if (now - drawnAt < 240) return; // four readings a second can be read, twenty cannot
      drawnAt = now;
      const m = d.model();
      engineer.update(now);
      budget.update(now);
      const set = d.units();
      refill(body, `${set.system}|${m.channels.map((c) => c.id + c.unit).join()}`, () => {
        rows = new Map();
        return m.channels.map((c) => {
          const r: Row = { el: h('tr'), raw: h('td', { class: 'num' }), value: h('td', { class: 'num' }), sign: h('td'), quality: h('td'), age: h('td', { class: 'num' }) };
          const range = [c.low, c.high].map((v) => (v === null ? '–' : plain(inUnit(v, set.channel(c.unit), c.dimension).value))).join(' … ') + (c.reference === 'gauge' ? ' gauge' : '');
          r.el.append(h('th', { scope: 'row' }, c.id), h('td', { class: 'extra title', title: c.title }, c.title), h('td', {}, c.station.replaceAll('_', ' ') || (c.recorded_only ? 'recorded only' : '')), r.raw, r.value, r.sign, r.quality, r.age, h('td', { class: 'num' }, range));
          rows.set(c.id, r);
          return r.el;
        });
      });
      const present = believable(fresh) || fresh.kind === 'no_points';
      for (const c of m.channels) {
        const r = rows.get(c.id);
        if (!r) continue;
        const v = present ? m.values[c.id] : undefined;
        const shown = v && v.value !== null ? inUnit(v.value, set.channel(c.unit), c.dimension) : null;
        text(r.raw, significant(v?.raw, 6));
        text(r.value, shown ? significant(shown.value, 5) : '–');
        text(r.sign, shown ? `${shown.sign}${c.reference && c.dimension === 'pressure' ? (c.reference === 'differential' ? ' diff' : ' abs') : ''}` : '');
        text(r.quality, v ? v.quality.replaceAll('_', ' ') : 'not present');
        text(r.age, age(v?.age_s));
        attr(r.el, 'data-none', !v || v.value === null);
      }
      const s = m.status;
      const on = activeRun(m);
      const yes = (ok: boolean | undefined, good: string, bad: string): string => (ok === undefined ? '–' : ok ? good : `▲ ${bad}`);
      const list: [string, string][] = [
        ['Rig', m.rig ? `${m.rig.title} (${m.rig.id})` : '–'],
        ['Engine', m.rig ? `${m.rig.engine_model}, serial ${m.rig.engine_serial}, build ${m.rig.engine_build || '–'}` : '–'],
        ['Nozzle', m.rig?.nozzle_serial || '–'],
        ['Limits', m.rig?.limits_version || '–'],
        ['Files, hash', m.configHash.slice(0, 16) || '–'],
        ['Program build', m.build || '–'],
        ['Scan rate', `${fixed(m.scanRate, 0)} scans/s`],
        ['Recording', yes(s?.recording, 'recording', `not recording${s?.not_recording_since ? ` since ${s.not_recording_since}` : ''}`)],
        ['Input path', yes(s?.input_path, 'probe message returns', 'deaf: the probe message does not return')],
        ['Clock', yes(s?.clock, 'steady', 'a step or a skew was seen')],
        ['Rules unknown', s ? String(s.rules_unknown) : '–'],
        ['Run', on ? `${on.number} (${on.id}), started by ${on.by}` : 'none'],
      ];
      refill(facts, JSON.stringify(list), () => list.flatMap(([k, v]) => [h('dt', {}, k), h('dd', {}, v)]));
      run.update(now);
      refill(sources, JSON.stringify(s?.sources ?? []), () => (s?.sources ?? []).map((x) => h('tr', { 'data-none': !x.alive },
        h('th', { scope: 'row' }, x.topic), h('td', { class: 'num' }, age(x.age_s)), h('td', { class: 'num' }, String(x.messages)), h('td', { class: 'num' }, x.skew_s === null ? '–' : `${fixed(x.skew_s, 2)} s`), h('td', {}, x.alive ? '' : '▲ silent'))));
      refill(sessions, JSON.stringify(s?.sessions ?? []), () => (s?.sessions ?? []).map((x) => h('tr', { 'data-none': !x.connected }, h('th', { scope: 'row' }, x.filter), h('td', {}, x.connected ? 'connected' : '▲ not connected'))));
      refill(counters, JSON.stringify(s?.counters ?? {}), () => Object.entries(s?.counters ?? {}).map(([k, v]) => h('tr', {}, h('th', { scope: 'row' }, k.replaceAll('_', ' ')), h('td', { class: 'num' }, String(v)))));
    },
    destroy: () => run.destroy(),
  };
}
