// Rig: the nozzle with its uncertainties, the files in force, how the path of the data
// does, every channel, and what was refused and why.

import { api, withFaults } from '../api';
import { askForm, withdraw } from '../ask';
import { type Display, gate } from '../context';
import { type View, attr, column, h, refill } from '../dom';
import { pathParts } from '../path';
import { activeRun, dataAge } from '../state';
import { dateClock, seconds } from '../time';
import { age, fixed } from '../units';
import { veil } from '../watch/display';
import { runButton } from '../watch/tools';
import { budgetView } from './budget';
import { channelsView } from './channels';
import { engineerView } from './engineer';
import { lifeView } from './record';

const head = (...names: string[]): HTMLElement => h('thead', {}, h('tr', {}, ...names.map(column)));

export function rigPage(d: Display): View {
  const facts = h('dl', { class: 'facts', 'data-q': 'config' });
  const path = h('tbody');
  const sources = h('tbody');
  const sessions = h('tbody');
  const counters = h('tbody');
  const trouble = h('p', { class: 'trouble', role: 'status' });
  const run = runButton(d, trouble);
  const reload = h('button', { type: 'button', 'data-q': 'reload-files', onclick: () => askForm(
    'Take the rig and rule files as they are on the disk now. Possible only with the engine off; who changed them and who approved them is recorded.',
    [{ name: 'approved', label: 'Approved by (empty: as the rig file says)', optional: true }, { name: 'reason', label: 'Reason' }], 'Take the files',
    async (v) => {
      await api.config(d.rig, v['approved'] ?? '', v['reason'] ?? '', d.operator()).catch((e: unknown) => { throw withFaults(e); });
    },
  ) }, 'Take changed files…');
  const engineer = engineerView(d);
  const budget = budgetView(d);
  const channels = channelsView(d);
  const life = lifeView();
  const nozzle = lifeView('nozzle-life');
  const lifeSection = h('section', {}, h('h2', {}, 'Life of the engine and of the nozzle, as watched here'), life.el, nozzle.el);
  const cover = veil(h('div', { class: 'page' },
    h('h1', {}, 'Rig'),
    h('div', { class: 'columns' },
      h('div', {}, h('section', {}, h('h2', {}, 'Nozzle, with 95 % uncertainties'), engineer.el),
        h('section', {}, h('h2', {}, 'Uncertainty budget'), budget.el)),
      h('div', {},
        h('section', {}, h('h2', {}, 'Rig and files'), facts, h('p', { class: 'asides' }, run.el, reload), trouble),
        h('section', {}, h('h2', {}, 'Path of the data'), h('table', { class: 'list', 'data-q': 'path' }, head('Part', 'State'), path)),
        lifeSection)),
    h('section', {}, h('h2', {}, 'Channels'), channels.el),
    h('div', { class: 'thirds' },
      h('section', {}, h('h2', {}, 'Sources'), h('table', { class: 'list' }, head('Topic', '>Age', '>Messages', '>Clock skew', 'State'), sources)),
      h('section', {}, h('h2', {}, 'Broker sessions'), h('table', { class: 'list' }, head('Topic filter', 'State'), sessions)),
      h('section', {}, h('h2', {}, 'Counters'), h('table', { class: 'list' }, head('What', '>Count'), counters)))));
  let drawnAt = -Infinity;

  return {
    el: cover.el,
    update(now) {
      const fresh = d.fresh(now);
      cover.update(fresh);
      run.update(now);
      gate(reload, d, 'config', now);
      if (now - drawnAt < 240) return; // four readings a second can be read, twenty cannot
      drawnAt = now;
      const m = d.model();
      const u = d.units();
      engineer.update(now);
      budget.update(now);
      channels.update(now);
      const s = m.status;
      const on = activeRun(m);
      const config = m.config;
      const list: [string, string][] = [
        ['Rig', m.rig ? `${m.rig.title} (${m.rig.id})` : '–'],
        ['Engine', m.rig ? `${m.rig.engine_model}, serial ${m.rig.engine_serial}, build ${m.rig.engine_build || '–'}` : '–'],
        ['Nozzle', m.rig?.nozzle_serial ? `${m.rig.nozzle_serial}${m.rig.nozzle_measured_on ? `, throat measured on ${m.rig.nozzle_measured_on}` : ''}` : '–'],
        ...(m.rig?.fuel?.batch ? [['Fuel batch', m.rig.fuel.batch]] as [string, string][] : []),
        ...(m.rig?.test || m.rig?.purpose ? [['Test', [m.rig.test, m.rig.purpose].filter(Boolean).join(': ')]] as [string, string][] : []),
        ['Limits', m.rig?.limits_version || '–'],
        ['Files, hash', m.configHash.slice(0, 16) || '–'],
        ...(config ? [
          ['Changed by', config.by ? `${config.by}${config.since ? `, in force since ${dateClock(seconds(config.since))}` : ''}` : 'not stated'],
          ['Approved by', config.approved_by || 'not approved'],
          ...(config.refused ? [['Refused', `▲ a change at ${dateClock(seconds(config.refused.t))}: ${config.refused.why}`]] : []),
        ] as [string, string][] : []),
        ['Program build', m.build || '–'],
        ['Scan rate', `${fixed(m.scanRate, 0)} scans/s`],
        ['Rules unknown', s ? String(s.rules_unknown) : '–'],
        ['Run', on ? `${on.designation || on.number} (${on.id}), started by ${on.by}` : 'none'],
      ];
      refill(facts, JSON.stringify(list), () => list.flatMap(([k, v]) => [h('dt', {}, k), h('dd', {}, v)]));
      const parts = s ? pathParts(s, dataAge(m, now), d.follows) : [];
      refill(path, JSON.stringify(parts), () => parts.map((x) => h('tr', { 'data-bad': x.bad }, h('th', { scope: 'row' }, x.name), h('td', {}, x.bad ? `▲ ${x.said}` : x.said))));
      attr(lifeSection, 'hidden', m.life === null);
      life.show(m.life, u);
      attr(nozzle.el, 'hidden', m.nozzleLife === null);
      nozzle.show(m.nozzleLife, u);
      refill(sources, JSON.stringify(s?.sources ?? []), () => (s?.sources ?? []).map((x) => h('tr', { 'data-none': !x.alive },
        h('th', { scope: 'row' }, x.topic), h('td', { class: 'num' }, age(x.age_s)), h('td', { class: 'num' }, String(x.messages)), h('td', { class: 'num' }, x.skew_s === null ? '–' : `${fixed(x.skew_s, 2)} s`), h('td', {}, x.alive ? 'heard' : '▲ silent'))));
      refill(sessions, JSON.stringify(s?.sessions ?? []), () => (s?.sessions ?? []).map((x) => h('tr', { 'data-none': !x.connected }, h('th', { scope: 'row' }, x.filter), h('td', {}, x.connected ? 'connected' : '▲ not connected'))));
      refill(counters, JSON.stringify(s?.counters ?? {}), () => {
        const all = Object.entries(s?.counters ?? {}).map(([k, v]) => ({ what: k.replaceAll('_', ' '), v }));
        const none = all.filter((c) => c.v === 0).map((c) => c.what);
        return [...all.filter((c) => c.v > 0).map((c) => h('tr', {}, h('th', { scope: 'row' }, c.what), h('td', { class: 'num' }, String(c.v)))),
          ...(none.length > 0 ? [h('tr', {}, h('td', { class: 'extra', colspan: '2' }, `None: ${none.join(', ')}`))] : [])];
      });
    },
    destroy() {
      run.destroy();
      withdraw();
    },
  };
}
