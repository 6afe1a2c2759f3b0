// The head of every page: where one is, what stands, whether sound is armed, how old
// the data is, who acts, and which files are in force.

import { needsAcknowledge, priorityLook, standing } from './alarms';
import type { Display } from './context';
import { type View, attr, h, style, text } from './dom';
import type { Priority, RigInfo } from './frames';
import { muteTimes } from './mute';
import { testDay } from './pages/testday';
import type { Settings } from './settings';
import type { Sound } from './sound';
import { type Model, activeRun, dataAge, hostNow, runSeconds } from './state';
import { duration, seconds, signedClock } from './time';
import { type System, age } from './units';
import { troubleText, veilText } from './watch/display';
import { speakingText } from './words';

export interface HeaderParts {
  rigs: RigInfo[];
  rig: RigInfo;
  display: Display;
  sound: Sound;
  settings: Settings;
  mute(seconds: number): void; // 0 ends a mute
  logout(): void;
  changed(): void;
}

const pages: [string, string][] = [['watch', 'Watch'], ['alarms', 'Alarms'], ['log', 'Log'], ['checks', 'Test day'], ['runs', 'Runs'], ['rig', 'Rig'], ['help', 'Help']];

/** The files in force and who approved them. */
export function filesText(m: Model): string {
  if (!m.rig) return '';
  const approved = m.config ? (m.config.approved_by ? ` · approved by ${m.config.approved_by}` : ' · not approved') : '';
  return `limits ${m.rig.limits_version || '–'} · files ${m.configHash.slice(0, 8)}${approved}${m.config?.refused ? ' · ▲ change refused' : ''}`;
}

/** Arms the sound; beside it what can be done with it. */
function soundControls(p: HeaderParts): Omit<View, 'update'> & { update(now: number, here: boolean): void } {
  const { sound } = p;
  const main = h('button', { type: 'button', class: 'sound', 'data-q': 'sound', onclick: () => { void sound.toggle(); } }, '');
  const more = h('button', { type: 'button', class: 'more', 'aria-label': 'Sound: test tone and mute', 'aria-expanded': 'false', 'data-q': 'sound-more', onclick: () => show(panel.hidden === true) }, '▾');
  const test = h('button', { type: 'button', 'data-q': 'sound-test', onclick: () => sound.test() }, 'Test tone');
  const mutes = muteTimes.map((s) => h('button', { type: 'button', 'data-q': `mute-${s}`, onclick: () => { p.mute(s); show(false); } }, s < 120 ? `Mute ${s} s` : `Mute ${s / 60} min`));
  const unmute = h('button', { type: 'button', 'data-q': 'unmute', onclick: () => { p.mute(0); show(false); } }, 'End the mute');
  const panel = h('div', { class: 'soundpanel', role: 'group', 'aria-label': 'Sound', hidden: true }, test, ...mutes, unmute, h('p', { class: 'extra' }, 'A new warning breaks a mute.'));
  const el = h('div', { class: 'sounds', onkeydown: (e: Event) => { if ((e as KeyboardEvent).key === 'Escape') show(false); } }, main, more, panel);

  function show(open: boolean): void {
    if (panel.hidden === !open) return;
    panel.hidden = !open;
    attr(more, 'aria-expanded', String(open));
    (open ? test : more).focus();
  }
  document.addEventListener('pointerdown', (e) => { if (!el.contains(e.target as Node)) panel.hidden = true; });

  return {
    el,
    update(now, here) {
      const left = Math.ceil(sound.muteLeft(now));
      const muted = sound.armed && left > 0;
      text(main, !sound.armed ? '✕ Sound off' : muted ? `◌ Muted ${Math.floor(left / 60)}:${String(left % 60).padStart(2, '0')}` : here ? '♪ Sound armed' : '♪ Sound armed, silent here');
      attr(main, 'aria-pressed', String(sound.armed));
      attr(main, 'data-muted', muted);
      for (const b of [test, ...mutes]) attr(b, 'disabled', !sound.armed);
      attr(unmute, 'disabled', !muted);
      attr(more, 'aria-expanded', String(!panel.hidden));
    },
    destroy: () => undefined,
  };
}

export function header(p: HeaderParts): View & { route(name: string): void } {
  const { display: d, settings, rig, rigs } = p;
  const links = pages.map(([name, label]) => h('a', { href: `#/${name}` }, label));
  const counts = h('a', { class: 'counts', href: '#/watch', 'data-q': 'counts' });
  const sounds = soundControls(p);
  const tick = h('span', { class: 'tick' }, h('span'));
  const ageText = h('span', { class: 'age', 'data-q': 'data-age' });
  const time = h('span', { class: 'clock' });
  const facts = h('span', { class: 'facts' });
  const conditions = h('span', { class: 'conditions', role: 'status', 'data-q': 'conditions' });
  const files = h('a', { class: 'files', href: '#/rig', 'data-q': 'files' });
  const operator = h('input', {
    type: 'text', value: settings.operator, placeholder: 'operator', maxlength: '40', 'aria-label': 'Operator: goes with every action', title: 'Who acts at this page: the name goes with every action', 'data-q': 'operator', autocomplete: 'off',
    oninput: () => settings.setOperator(operator.value), onkeydown: (e: Event) => { if ((e as KeyboardEvent).key === 'Enter') operator.blur(); },
  });
  const user = h('span', { class: 'user', 'data-q': 'user' });
  const logout = h('button', { type: 'button', 'data-q': 'logout', onclick: p.logout }, 'Log out');
  const person = h('span', { class: 'person' }, operator, user, logout);
  const units = h('select', { 'aria-label': 'Units', 'data-q': 'units', onchange: () => {
    settings.setSystem(units.value as System);
    p.changed();
  } }, ...([['si', 'SI'], ['us', 'US units']] as const).map(([v, label]) => h('option', { value: v, selected: v === settings.system }, label)));
  const choice = h('select', { 'aria-label': 'Rig', onchange: () => { location.search = `?rig=${encodeURIComponent(choice.value)}`; } }, ...rigs.map((r) => h('option', { value: r.id, selected: r.id === rig.id }, r.title || r.id)));
  window.addEventListener('storage', () => {
    settings.reload();
    operator.value = settings.operator;
    units.value = settings.system;
    p.changed();
  });
  const el = h('header', {},
    h('div', { class: 'bar' }, h('span', { class: 'name' }, 'throatwatch'), rigs.length > 1 ? choice : h('span', { class: 'rig' }, rig.title || rig.id), h('nav', { 'aria-label': 'Pages' }, ...links),
      h('span', { class: 'grow' }), counts, sounds.el, h('span', { class: 'feed' }, tick, ageText), time),
    h('div', { class: 'strip' }, facts, conditions, h('span', { class: 'viewer' }, files, person, units)));

  return {
    el,
    route(name) {
      const own = name === 'run' || name === 'compare' ? 'runs' : testDay.some(([page]) => page === name) ? 'checks' : name;
      links.forEach((a, i) => attr(a, 'aria-current', pages[i]?.[0] === own ? 'page' : null));
    },
    update(now) {
      const m = d.model();
      const f = d.fresh(now);
      const list = standing(m.alarms.values());
      const gone = veilText(f);
      const open = list.filter(needsAcknowledge);
      const shapes = (['warning', 'caution', 'advisory'] as Priority[]).map((k) => `${priorityLook[k].shape} ${list.filter((a) => a.priority === k).length}`).join('  ');
      text(counts, gone ? 'live: no data link' : `live: ${shapes}${open.length > 0 ? `  ${open.length} unacknowledged` : ''}`);
      attr(counts, 'data-priority', gone ? null : open[0]?.priority);
      sounds.update(now, speakingText(m.status?.speaking).here);
      style(tick.firstElementChild as HTMLElement, 'left', `${(m.ticks % 10) * 10}%`);
      text(ageText, gone ? 'no data' : `data age ${age(dataAge(m, now))}`);
      attr(ageText.parentElement as HTMLElement, 'data-bad', f.kind !== 'live' || !((f.age ?? Infinity) < 1));
      text(time, gone ? '–' : signedClock(hostNow(m, now)));
      const s = m.status;
      const bad: string[] = [];
      if (gone) bad.push(gone);
      const trouble = troubleText(f);
      if (trouble) bad.push(trouble);
      if (s && !s.recording) bad.push(`NOT RECORDING${s.not_recording_since ? ` since ${signedClock(seconds(s.not_recording_since))}` : ''}`);
      if (s && !s.input_path) bad.push('input path deaf');
      const pair = speakingText(s?.speaking);
      if (pair.bad) bad.push(pair.text);
      if (s && !s.clock) bad.push('clock not steady');
      const silent = (s?.sources ?? []).filter((x) => !x.alive).length;
      if (silent > 0) bad.push(`${silent} source${silent > 1 ? 's' : ''} silent`);
      if (s && s.rules_unknown > 0) bad.push(`${s.rules_unknown} rule${s.rules_unknown > 1 ? 's' : ''} unknown`);
      text(conditions, bad.length > 0 ? `▲ ${bad.join(' · ')}` : [s?.recording ? '● recording' : '', pair.text].filter(Boolean).join(' · '));
      attr(conditions, 'title', bad.join(' · ') || null);
      attr(conditions, 'data-bad', bad.length > 0);
      text(facts, activeRun(m) ? `live run ${m.run?.designation || m.run?.number} · ${duration(runSeconds(m))} · ${m.run?.engine}` : m.rig ? `no run · ${m.rig.engine_model} ${m.rig.engine_serial}` : '');
      text(files, filesText(m));
      attr(files, 'title', filesText(m));
      const who = d.session();
      attr(operator, 'hidden', !who.open);
      attr(logout, 'hidden', who.open);
      text(user, who.open ? (who.role === 'operator' ? '' : who.role) : `${who.name} · ${who.role}`);
    },
    destroy: () => undefined,
  };
}
