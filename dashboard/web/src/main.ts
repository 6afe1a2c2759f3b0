// The shell: one live link for all pages, who acts here, the routes, and the draw loop.

import { occurrence, pageTitle, sounds, standing } from './alarms';
import { RequestError, api, credentials } from './api';
import type { AckState, Acknowledger, Display } from './context';
import { type View, h } from './dom';
import type { Alarm, Frame, RigInfo } from './frames';
import { header } from './header';
import { firstChunk, opening, reach, rowsOf } from './history';
import { Link, browser, liveURL } from './link';
import { dark, light, paint } from './palette';
import { alarmsPage } from './pages/alarms';
import { cardPage } from './pages/card';
import { checksPage } from './pages/checks';
import { comparePage } from './pages/compare';
import { handoverPage } from './pages/handover';
import { helpPage } from './pages/help';
import { logPage } from './pages/log';
import { login } from './pages/login';
import { replayPage } from './pages/replay';
import { rigPage } from './pages/rig';
import { runsPage } from './pages/runs';
import { gapSeconds, renewed, widened } from './ring';
import { type Session, openSession, sessionOf } from './session';
import { Settings, browserKeeper } from './settings';
import { Sound } from './sound';
import { activeRun, apply, freshness, hostNow, newModel, recall } from './state';
import './style.css';
import { facility, seconds } from './time';
import { type UnitSet, unitSets } from './units';
import { watchDisplay } from './watch/display';
import { columnsOf } from './watch/plots';
import { watchTools } from './watch/tools';
import { speakingText } from './words';

const drawEvery = 50; // ms: at most 20 draws a second
const footer = 'throatwatch only watches. Facility safety procedures, hard-wired protection and licensed practice come first. This display is not protection.';
/** An acknowledgement without an answering alarm frame for this long has failed, ms. */
const ackTimeout = 5000;
/** What a page fetches before it joins the link has to come within this time, ms. */
const openTimeout = 8000;

const darkScheme = window.matchMedia('(prefers-color-scheme: dark)');
const palette = (): typeof light => (darkScheme.matches ? dark : light);
const repaint = (): void => paint(document.documentElement.style, palette());
darkScheme.addEventListener('change', repaint);
repaint();

/** Without a link the session is asked for again this often, ms: it may have ended. */
const sessionEvery = 3000;

async function main(): Promise<void> {
  const session = await identify();
  const rigs = await firstRigs();
  const asked = new URLSearchParams(location.search).get('rig');
  const rig = rigs.find((r) => r.id === asked) ?? rigs[0];
  if (!rig) {
    document.body.replaceChildren(h('p', { class: 'loading' }, 'The server has no rig.'));
    return;
  }
  run(rig, rigs, session);
}

/** The session of this browser; null when there is none and a login is needed. */
async function present(): Promise<Session | null> {
  try {
    return sessionOf(await api.session());
  } catch (e) {
    if (e instanceof RequestError && e.status === 401) return null;
    if (e instanceof RequestError && e.status === 404) return openSession;
    throw e;
  }
}

/** Who acts at this page, asked for until it is known. */
async function identify(): Promise<Session> {
  for (;;) {
    try {
      const session = (await present()) ?? (await login(document.body, ''));
      credentials.csrf = session.csrf;
      return session;
    } catch (e) {
      document.body.replaceChildren(h('p', { class: 'loading' }, `NO DATA LINK: ${e instanceof Error ? e.message : String(e)}. Trying again.`));
      await new Promise((r) => setTimeout(r, 1000));
    }
  }
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

function run(rig: RigInfo, rigs: RigInfo[], session: Session): void {
  facility.set(rig.time_zone, Date.now() / 1000);
  const sound = new Sound();
  const settings = new Settings(browserKeeper());
  const model = newModel(false, columnsOf(settings.plots));
  let dirty = true;

  const link = new Link(browser, (afresh) => liveURL(location.href, rig.id, model.n > 0 && !afresh ? `${model.epoch}.${model.n}` : ''), onFrame, () => { dirty = true; });

  /** Fetches the run so far and goes on behind it; without it the link begins with a hello. */
  async function open(): Promise<void> {
    try {
      const past = await opening(api, rig.id, AbortSignal.timeout(openTimeout), model.ring.names);
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
    rowsOf(api, r.id, start, from, to, to < firstChunk, AbortSignal.timeout(openTimeout), model.ring.names).then((rows) => {
      model.ring.fill(rows);
      dirty = true;
    }, () => undefined); // the hole stays visible as one
  }

  function choosePlots(keys: readonly string[]): void {
    settings.setPlots(keys);
    trace();
  }

  /** Gives the ring the columns of the traces at once, what is behind them from what is stored. */
  function trace(): void {
    dirty = true;
    const names = columnsOf(settings.plots);
    if (names.every((name) => model.ring.names.includes(name))) return;
    model.ring = widened(model.ring, names);
    const r = activeRun(model);
    if (!r) return;
    const start = seconds(r.started);
    const to = hostNow(model, performance.now()) - start;
    rowsOf(api, r.id, start, Math.max(0, to - reach), to, to < firstChunk, AbortSignal.timeout(openTimeout), names).then((rows) => {
      if (model.ring.names === names) model.ring = renewed(model.ring, rows);
      dirty = true;
    }, () => undefined); // the traces then begin at the choice
  }

  /** Names of the warnings that sound. */
  const warnings = (): string[] => standing(model.alarms.values()).filter((a) => a.priority === 'warning' && sounds(a)).map(occurrence);

  function hear(): void {
    const now = performance.now();
    const list = standing(model.alarms.values());
    const lost = display.fresh(now).kind === 'no_link';
    const here = lost || speakingText(model.status?.speaking).here; // else the other watch of the pair sounds
    sound.tick((here && list.find(sounds)?.priority) || null, lost, warnings(), now);
    const title = pageTitle(list, lost, rig.title || rig.id, page === 'run' ? runShown : '');
    if (document.title !== title) document.title = title;
    if (lost && now - sessionAsked > sessionEvery) void checkSession(now);
  }

  /** A link that stays away may be that of a session that has ended. */
  let sessionAsked = -Infinity;
  async function checkSession(now: number): Promise<void> {
    sessionAsked = now;
    if ((await present().catch(() => session)) !== null || document.querySelector('.relogin')) return;
    const place = h('div', { class: 'relogin', role: 'dialog', 'aria-label': 'Log in again' });
    document.body.append(place);
    session = await login(place, 'The session has ended.');
    credentials.csrf = session.csrf;
    place.remove();
    dirty = true;
  }

  // Actions on alarms on their way, by alarm id.
  const pending = new Map<string, { revision: number; state: AckState; at: number }>();
  const acknowledger: Acknowledger = {
    state(a) {
      const p = pending.get(a.id);
      if (!p || p.revision !== a.revision) return 'idle';
      return p.state === 'pending' && performance.now() - p.at > ackTimeout ? 'no answer: try again' : p.state;
    },
    async send(a, path, reason = '', shelf = 0) {
      const entry: { revision: number; state: AckState; at: number } = { revision: a.revision, state: 'pending', at: performance.now() };
      pending.set(a.id, entry);
      dirty = true;
      try {
        await api.alarm(a, path, display.operator(), reason, shelf);
      } catch (e) {
        if (e instanceof RequestError && e.status === 409) await refresh(); // it moved on, or is refused: the message tells
        entry.state = (e as Error).message;
        throw e;
      } finally {
        dirty = true;
      }
    },
  };

  async function refresh(): Promise<void> {
    const list: Alarm[] = await api.alarms().catch(() => []);
    for (const alarm of list) apply(model, { kind: 'alarm', epoch: model.epoch, n: model.n, t: alarm.changed, alarm }, performance.now());
  }

  const units = (): UnitSet => unitSets[settings.system];
  const display: Display = {
    rig: rig.id, follows: rig.follows ?? [], model: () => model, palette, units, plots: () => settings.plots, choosePlots, acknowledger, session: () => session, operator: () => (session.open ? settings.operator : session.name),
    fresh: (now) => (link.opened ? freshness(model, link.connected, now) : { kind: 'waiting' }),
  };
  const head = header({
    rigs, rig, display, sound, settings,
    mute: (time) => sound.muteFor(performance.now(), time, warnings()),
    logout: () => { void api.logout().catch(() => undefined).then(() => location.reload()); },
    changed: trace,
  });
  const place = h('main', { id: 'main', tabindex: '-1' });
  document.body.replaceChildren(h('a', { class: 'skip', href: '#main', onclick: (e: Event) => { e.preventDefault(); place.focus(); } }, 'To the content'), head.el, place, h('footer', {}, footer));

  let view: View | null = null;
  let route = '';
  let page = 'watch';
  let runShown = '';
  function go(): void {
    const next = location.hash || '#/watch';
    if (next === route) return;
    route = next;
    view?.destroy();
    const [, name = 'watch', id = '', other = ''] = next.split('/');
    switch (name) {
      case 'alarms': view = alarmsPage(display); break;
      case 'log': view = logPage(display); break;
      case 'runs': view = runsPage(display); break;
      case 'compare': view = comparePage(display, decodeURIComponent(id), decodeURIComponent(other)); break;
      case 'run': view = replayPage(decodeURIComponent(id), rig.id, display); break;
      case 'checks': view = checksPage(display); break;
      case 'card': view = cardPage(display); break;
      case 'handover': view = handoverPage(display); break;
      case 'rig': view = rigPage(display); break;
      case 'help': view = helpPage(); break;
      default: view = watchDisplay(display, 'Watch', watchTools(display));
    }
    document.body.dataset['page'] = page = name;
    runShown = decodeURIComponent(id);
    hear();
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

void main();
