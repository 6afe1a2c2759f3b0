// The shell: one live link for all pages, the header that always tells how old
// the data is, the routes, and the draw loop.

import { needsAcknowledge, nextStep, priorityLook, sounds, standing } from './alarms';
import { RequestError, api } from './api';
import type { AckState, Acknowledger, Display } from './context';
import { type View, attr, h, style, text } from './dom';
import type { Alarm, Frame, Priority, RigInfo } from './frames';
import { firstChunk, opening, reach, rowsOf } from './history';
import { Link, browser, liveURL } from './link';
import { cssVariables, dark, light } from './palette';
import { alarmsPage } from './pages/alarms';
import { helpPage } from './pages/help';
import { replayPage } from './pages/replay';
import { rigPage } from './pages/rig';
import { runsPage } from './pages/runs';
import { gapSeconds } from './ring';
import { Settings, browserKeeper } from './settings';
import { Sound } from './sound';
import { activeRun, apply, dataAge, freshness, hostNow, newModel, recall, runSeconds } from './state';
import './style.css';
import { clock, duration, seconds } from './time';
import { type System, type UnitSet, age, unitSets } from './units';
import { troubleText, veilText, watchDisplay } from './watch/display';
import { watchTools } from './watch/tools';

const drawEvery = 50; // ms: at most 20 draws a second
const footer = 'throatwatch only watches. Facility safety procedures, hard-wired protection and licensed practice come first. This display is not protection.';
/** An acknowledgement without an answering alarm frame for this long has failed, ms. */
const ackTimeout = 5000;
/** What a page fetches before it joins the link has to come within this time, ms. */
const openTimeout = 8000;

const darkScheme = window.matchMedia('(prefers-color-scheme: dark)');
document.head.append(h('style', {}, `:root{${cssVariables(light)}}@media(prefers-color-scheme:dark){:root{${cssVariables(dark)}}}`));
const palette = (): typeof light => (darkScheme.matches ? dark : light);

async function main(): Promise<void> {
  const rigs = await firstRigs();
  const asked = new URLSearchParams(location.search).get('rig');
  const rig = rigs.find((r) => r.id === asked) ?? rigs[0];
  if (!rig) {
    document.body.replaceChildren(h('p', { class: 'loading' }, 'The server has no rig.'));
    return;
  }
  run(rig, rigs);
}

/** The rigs, asked for until the server answers. */
async function firstRigs(): Promise<RigInfo[]> {
  for (;;) {
    try {
      return await api.rigs();
    } catch (e) {
      document.body.replaceChildren(h('p', { class: 'loading' }, `NO DATA LINK: ${e instanceof Error ? e.message : String(e)}. Trying again.`));
      await new Promise((r) => setTimeout(r, 1000));
    }
  }
}

function run(rig: RigInfo, rigs: RigInfo[]): void {
  const model = newModel();
  const sound = new Sound();
  const settings = new Settings(browserKeeper());
  let dirty = true;

  const link = new Link(browser, (afresh) => liveURL(location.href, rig.id, model.n > 0 && !afresh ? `${model.epoch}.${model.n}` : ''), onFrame, () => { dirty = true; });

  /** Fetches the run so far and goes on behind it; without it the link begins with a hello. */
  async function open(): Promise<void> {
    try {
      const past = await opening(api, rig.id, AbortSignal.timeout(openTimeout));
      apply(model, past.hello, performance.now());
      recall(model, past.events);
      model.ring.fill(past.rows);
      const [epoch, n] = past.from.split('.').map(Number);
      if (epoch !== undefined && n !== undefined) [model.epoch, model.n] = [epoch, n];
    } catch { /* what has come is kept; the link tells the rest, or that there is no server */ }
    link.start();
  }

  function onFrame(f: Frame): void {
    apply(model, f, performance.now());
    if (f.kind === 'alarm') pending.delete(f.alarm.id);
    if (f.kind === 'hello') fillGap();
    hear();
    dirty = true;
  }

  /** A hello on the link tells that frames were missed: the traces get them from what is stored. */
  function fillGap(): void {
    const r = activeRun(model);
    if (!r) return;
    const start = seconds(r.started);
    const to = hostNow(model, performance.now()) - start;
    const last = model.ring.size > 0 ? model.ring.t(model.ring.size - 1) - start : 0;
    const from = Math.max(0, to - reach, last);
    if (to - from < gapSeconds) return;
    rowsOf(api, r.id, start, from, to, to < firstChunk, AbortSignal.timeout(openTimeout)).then((rows) => {
      model.ring.fill(rows);
      dirty = true;
    }, () => undefined); // the hole stays visible as one
  }

  function hear(): void {
    const now = performance.now();
    const loudest = standing(model.alarms.values()).find(sounds);
    sound.tick(loudest?.priority ?? null, display.fresh(now).kind === 'no_link', now);
  }

  // Acknowledgements on their way, by alarm id.
  const pending = new Map<string, { revision: number; state: AckState; at: number }>();
  const acknowledger: Acknowledger = {
    state(a) {
      const p = pending.get(a.id);
      if (!p || p.revision !== a.revision) return 'idle';
      return p.state === 'pending' && performance.now() - p.at > ackTimeout ? 'no answer: try again' : p.state;
    },
    send(a) {
      const step = nextStep(a);
      if (!step) return;
      const entry: { revision: number; state: AckState; at: number } = { revision: a.revision, state: 'pending', at: performance.now() };
      pending.set(a.id, entry);
      dirty = true;
      api.alarm(a, step.path, settings.operator).catch(async (e: Error) => {
        const moved = e instanceof RequestError && e.status === 409;
        entry.state = moved ? 'it changed meanwhile: look again' : e.message;
        if (moved) await refresh();
        dirty = true;
      });
    },
  };

  async function refresh(): Promise<void> {
    const list: Alarm[] = await api.alarms().catch(() => []);
    for (const alarm of list) apply(model, { kind: 'alarm', epoch: model.epoch, n: model.n, t: alarm.changed, alarm }, performance.now());
  }

  const units = (): UnitSet => unitSets[settings.system];
  const display: Display = {
    rig: rig.id, model: () => model, palette, units, acknowledger, operator: () => settings.operator,
    fresh: (now) => (link.opened ? freshness(model, link.connected, now) : { kind: 'waiting' }),
  };
  const head = header(rigs, rig, display, sound, settings, () => { dirty = true; });
  const place = h('main', { id: 'main', tabindex: '-1' });
  document.body.replaceChildren(h('a', { class: 'skip', href: '#main', onclick: (e: Event) => { e.preventDefault(); place.focus(); } }, 'To the content'), head.el, place, h('footer', {}, footer));

  let view: View | null = null;
  let route = '';
  function go(): void {
    const next = location.hash || '#/watch';
    if (next === route) return;
    route = next;
    view?.destroy();
    const [, name = 'watch', id = ''] = next.split('/');
    switch (name) {
      case 'alarms': view = alarmsPage(display); break;
      case 'runs': view = runsPage(display); break;
      case 'run': view = replayPage(decodeURIComponent(id), rig.id, display); break;
      case 'rig': view = rigPage(display); break;
      case 'help': view = helpPage(); break;
      default: view = watchDisplay(display, watchTools(display));
    }
    document.body.dataset['page'] = name;
    document.title = name === 'run' ? `REPLAY ${decodeURIComponent(id)} – throatwatch` : `${rig.title || rig.id} – throatwatch`;
    head.route(name);
    place.replaceChildren(view.el);
    dirty = true;
  }
  window.addEventListener('hashchange', go);
  darkScheme.addEventListener('change', () => { dirty = true; });

  let drawn = -Infinity;
  function draw(now: number): void {
    requestAnimationFrame(draw);
    // Ages and time-outs move without frames, replay by the page's clock.
    if (now - drawn < (dirty || document.body.dataset['page'] === 'run' ? drawEvery : 200)) return;
    drawn = now;
    dirty = false;
    head.update(now);
    view?.update(now);
  }
  window.setInterval(hear, 250); // sound must not depend on drawing: a hidden page does not draw
  go();
  void open();
  requestAnimationFrame(draw);
}

function header(rigs: RigInfo[], rig: RigInfo, d: Display, sound: Sound, settings: Settings, changed: () => void): View & { route(name: string): void } {
  const pages: [string, string][] = [['watch', 'Watch'], ['alarms', 'Alarms'], ['runs', 'Runs'], ['rig', 'Rig'], ['help', 'Help']];
  const links = pages.map(([name, label]) => h('a', { href: `#/${name}` }, label));
  const counts = h('a', { class: 'counts', href: '#/watch', 'data-q': 'counts' });
  const soundButton = h('button', { type: 'button', class: 'sound', 'data-q': 'sound', onclick: () => { void sound.toggle(); } }, '');
  const tick = h('span', { class: 'tick' }, h('span'));
  const ageText = h('span', { class: 'age', 'data-q': 'data-age' });
  const time = h('span', { class: 'clock' });
  const facts = h('span', { class: 'facts' });
  const conditions = h('span', { class: 'conditions', role: 'status', 'data-q': 'conditions' });
  const files = h('span', { class: 'files' });
  const operator = h('input', {
    type: 'text', value: settings.operator, placeholder: 'operator', maxlength: '40', 'aria-label': 'Operator: goes with every action', title: 'Who acts at this page: the name goes with every action', 'data-q': 'operator', autocomplete: 'off',
    oninput: () => settings.setOperator(operator.value), onkeydown: (e: Event) => { if ((e as KeyboardEvent).key === 'Enter') operator.blur(); },
  });
  const units = h('select', { 'aria-label': 'Units', 'data-q': 'units', onchange: () => {
    settings.setSystem(units.value as System);
    changed();
  } }, ...([['si', 'SI'], ['us', 'US units']] as const).map(([v, label]) => h('option', { value: v, selected: v === settings.system }, label)));
  const choice = h('select', { 'aria-label': 'Rig', onchange: () => { location.search = `?rig=${encodeURIComponent(choice.value)}`; } }, ...rigs.map((r) => h('option', { value: r.id, selected: r.id === rig.id }, r.title || r.id)));
  window.addEventListener('storage', () => {
    settings.reload();
    operator.value = settings.operator;
    units.value = settings.system;
    changed();
  });
  const el = h('header', {},
    h('div', { class: 'bar' }, h('span', { class: 'name' }, 'throatwatch'), rigs.length > 1 ? choice : h('span', { class: 'rig' }, rig.title || rig.id), h('nav', { 'aria-label': 'Pages' }, ...links),
      h('span', { class: 'grow' }), counts, soundButton, h('span', { class: 'feed' }, tick, ageText), time),
    h('div', { class: 'strip' }, facts, conditions, h('span', { class: 'viewer' }, files, operator, units)));

  return {
    el,
    route(name) {
      const own = name === 'run' ? 'runs' : name;
      links.forEach((a, i) => attr(a, 'aria-current', pages[i]?.[0] === own ? 'page' : null));
    },
    update(now) {
      const m = d.model();
      const f = d.fresh(now);
      const list = standing(m.alarms.values());
      const gone = veilText(f);
      const open = list.filter(needsAcknowledge);
      const shapes = (['warning', 'caution', 'advisory'] as Priority[]).map((p) => `${priorityLook[p].shape} ${list.filter((a) => a.priority === p).length}`).join('  ');
      text(counts, gone ? 'live: no data link' : `live: ${shapes}${open.length > 0 ? `  ${open.length} unacknowledged` : ''}`);
      attr(counts, 'data-priority', gone ? null : open[0]?.priority);
      text(soundButton, sound.armed ? '♪ Sound armed' : '✕ Sound off');
      attr(soundButton, 'aria-pressed', sound.armed ? 'true' : 'false');
      style(tick.firstElementChild as HTMLElement, 'left', `${(m.ticks % 10) * 10}%`);
      text(ageText, gone ? 'no data' : `data age ${age(dataAge(m, now))}`);
      attr(ageText.parentElement as HTMLElement, 'data-bad', f.kind !== 'live' || !((f.age ?? Infinity) < 1));
      text(time, gone ? '–' : `${clock(hostNow(m, now))} UTC`);
      const s = m.status;
      const bad: string[] = [];
      if (gone) bad.push(gone);
      const trouble = troubleText(f);
      if (trouble) bad.push(trouble);
      if (s && !s.recording) bad.push(`NOT RECORDING${s.not_recording_since ? ` since ${clock(seconds(s.not_recording_since))} UTC` : ''}`);
      if (s && !s.input_path) bad.push('input path deaf');
      if (s && !s.clock) bad.push('clock not steady');
      const silent = (s?.sources ?? []).filter((x) => !x.alive).length;
      if (silent > 0) bad.push(`${silent} source${silent > 1 ? 's' : ''} silent`);
      if (s && s.rules_unknown > 0) bad.push(`${s.rules_unknown} rule${s.rules_unknown > 1 ? 's' : ''} unknown`);
      text(conditions, bad.length > 0 ? `▲ ${bad.join(' · ')}` : s?.recording ? '● recording' : '');
      attr(conditions, 'data-bad', bad.length > 0);
      text(facts, activeRun(m) ? `live run ${m.run?.number} · ${duration(runSeconds(m))} · ${m.run?.engine}` : m.rig ? `no run · ${m.rig.engine_model} ${m.rig.engine_serial}` : '');
      text(files, m.rig ? `limits ${m.rig.limits_version || '–'} · files ${m.configHash.slice(0, 8)}` : '');
    },
    destroy: () => undefined,
  };
}

void main();
