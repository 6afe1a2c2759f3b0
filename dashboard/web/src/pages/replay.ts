// Replay of one stored run on the Watch display, by the page's own clock.

import { priorityLook } from '../alarms';
import { api } from '../api';
import type { Display, Taste } from '../context';
import { type View, attr, h, text } from '../dom';
import type { Frame, RunSummary } from '../frames';
import { firstChunk, reach, rowsOf } from '../history';
import { Player, speeds } from '../player';
import { type Period, periods } from '../ring';
import { openSession } from '../session';
import type { Flag } from '../state';
import { dateClock, duration, seconds } from '../time';
import { recordView } from './record';
import { font, surface } from '../watch/canvas';
import { watchDisplay } from '../watch/display';
import { columnsOf } from '../watch/plots';

export function replayPage(runID: string, rig: string, taste: Taste): View {
  let player: Player | null = null;
  let run: RunSummary | null = null;
  let start = NaN;
  let inner: View | null = null;
  let last = NaN;
  let events: Flag[] = [];
  let complete = false; // events holds those of the whole run
  let choke: Period[] = [];
  let phases: Period[] = [];
  let scrubbing: number | null = null;
  let record: View | null = null;
  let shown: 'Display' | 'Record' = 'Display';
  const over = new AbortController();

  const button = (label: string, name: string, act: () => void): HTMLButtonElement => h('button', { type: 'button', 'aria-label': name, title: name, onclick: act }, label);
  const play = h('button', { type: 'button', class: 'play', 'data-q': 'play', onclick: () => toggle() }, 'Play');
  const speed = h('select', { 'aria-label': 'Replay speed', 'data-q': 'speed', onchange: () => { if (player) player.speed = Number(speed.value); } }, ...speeds.map((s) => h('option', { value: String(s) }, `${s}×`)));
  const clockText = h('span', { class: 'at', 'data-q': 'replay-clock' });
  const trouble = h('span', { class: 'trouble', role: 'status' });
  const bar = surface('scrubshade', 'Choked periods, phases, alarms and marks of the run');
  const scrub = h('input', { type: 'range', min: '0', max: '1', step: '0.05', value: '0', 'aria-label': 'Position in the run', 'data-q': 'scrub',
    oninput: () => { scrubbing = Number(scrub.value); }, onchange: () => { scrubbing = null; go(Number(scrub.value)); } });
  const choices = (['Display', 'Record'] as const).map((w) => h('button', { type: 'button', 'data-q': `show-${w.toLowerCase()}`, 'aria-pressed': String(w === 'Display'), onclick: () => choose(w) }, w));
  const controls = h('div', { class: 'controls', role: 'group', 'aria-label': 'Replay controls' },
    h('span', { class: 'replayword' }, 'REPLAY'), play,
    button('◂|', 'Back one scan', () => back()), button('|▸', 'Forward one scan', () => forward()),
    speed, button('⚑ ◂', 'Previous alarm or mark', () => jump(-1)), button('▸ ⚑', 'Next alarm or mark', () => jump(1)),
    h('div', { class: 'scrub' }, bar.el, scrub), clockText, trouble, ...choices);
  const body = h('div', { class: 'replaybody' }, h('p', { class: 'loading' }, 'Reading the run…'));
  const el = h('div', { class: 'replay', 'data-q': 'replay-frame' }, controls, body, h('div', { class: 'watermark', 'aria-hidden': 'true', 'data-word': 'REPLAY' }));

  /** The display as it was at the position, or what is on record of the whole run. */
  function choose(what: 'Display' | 'Record'): void {
    if (!inner) return;
    if (what === 'Record') record ??= recordView(runID, () => run?.ended === null, taste.units, () => player?.model.quantities ?? []);
    shown = what;
    choices.forEach((b) => attr(b, 'aria-pressed', String(b.textContent === what)));
    body.replaceChildren(what === 'Record' && record ? record.el : inner.el);
  }

  const now = (): number => performance.now();
  function go(position: number): void {
    void player?.seek(position, now());
  }
  function toggle(): void {
    if (!player) return;
    player.playing = !player.playing;
    if (player.playing && player.position >= player.length) go(0);
  }
  function forward(): void {
    if (!player) return;
    player.playing = false;
    player.step(now());
  }
  function back(): void {
    if (!player) return;
    player.playing = false;
    if (!player.back(now())) go(player.position - 1);
  }
  function jump(way: 1 | -1): void {
    if (!player) return;
    const at = start + player.position;
    // A second before the event, so that it is seen to happen; hence the 1.5 s either way.
    const next = way > 0 ? events.find((e) => e.t > at + 1.5) : [...events].reverse().find((e) => e.t < at);
    if (next) go(next.t - start - 1);
  }
  function onKey(e: KeyboardEvent): void {
    const tag = (e.target as HTMLElement).tagName;
    if (tag === 'INPUT' || tag === 'SELECT' || e.ctrlKey || e.metaKey || e.altKey) return;
    const act = { ' ': tag === 'BUTTON' || tag === 'A' ? undefined : toggle, 'ArrowLeft': back, 'ArrowRight': forward, 'PageDown': () => jump(1), 'PageUp': () => jump(-1) }[e.key];
    if (!act) return;
    e.preventDefault();
    act();
  }
  document.addEventListener('keydown', onKey);

  /** Other traces are read from what is stored. */
  function choosePlots(keys: readonly string[]): void {
    taste.choosePlots(keys);
    if (player) go(player.position);
  }

  async function open(): Promise<void> {
    run = await api.runSummary(runID);
    start = seconds(run.started);
    // A run that goes on: up to now, by the host's clock.
    const length = run.duration_s ?? Math.max(1, seconds((await api.hello(rig)).host_time) - start);
    const young = run.ended === null && length < firstChunk;
    attr(scrub, 'max', length);
    const p = new Player({
      async window(from, to, signal) {
        const frames: Frame[] = [];
        await api.messages(runID, from, to, '', signal, (f) => { frames.push(f); });
        return frames;
      },
      before: async (to, signal) => (to <= 0 ? [] : rowsOf(api, runID, start, Math.max(0, to - reach), to, young, signal, columnsOf(taste.plots()))),
    }, start, length, () => columnsOf(taste.plots()));
    const display: Display = { rig, follows: [], model: () => p.model, fresh: () => ({ kind: 'replay' }), palette: taste.palette, units: taste.units, plots: taste.plots, choosePlots, operator: () => '', session: () => openSession, acknowledger: null };
    inner = watchDisplay(display, `Replay of run ${runID}`, null);
    body.replaceChildren(inner.el);
    player = p;
    void p.seek(0, now());
    void overview(length, young);
  }

  /** Choke shading, phases and flags of the whole run for the scrub bar. */
  async function overview(length: number, young: boolean): Promise<void> {
    const found: Flag[] = [];
    try {
      await api.messages(runID, 0, length + 1, 'alarm,mark', over.signal, (f) => {
        if (f.kind === 'alarm' && f.alarm.state === 'unacknowledged') found.push({ t: seconds(f.alarm.raised), kind: f.alarm.priority, text: f.alarm.title, id: f.alarm.id });
        if (f.kind === 'mark') found.push({ t: seconds(f.t), kind: 'mark', text: f.mark.text, id: `mark ${f.t}` });
      });
      events = found.sort((a, b) => a.t - b.t);
      complete = true;
      if (young) return; // no series is stored yet
      const { series } = await api.series(runID, ['choke_state', 'phase'], 0, length + 1, 10, over.signal);
      choke = periods(series['choke_state'], length);
      phases = periods(series['phase'], length);
    } catch { /* left page or lost server: the bar shows what was found, the display itself shows all */ }
  }

  function paintBar(length: number): void {
    const s = bar.begin();
    if (!s) return;
    const { c, width, height } = s;
    const p = taste.palette();
    const x = (t: number): number => 8 + (t / length) * (width - 16); // the thumb of the range input is 16 wide
    c.fillStyle = p.panel;
    c.fillRect(8, 0, width - 16, height);
    c.fillStyle = p.choked;
    for (const k of choke) if (k.word === 'choked') c.fillRect(x(k.from), 0, Math.max(1, x(k.to) - x(k.from)), height);
    c.font = font(11);
    c.textBaseline = 'bottom';
    c.textAlign = 'left';
    for (const k of phases) {
      c.fillStyle = p.edge;
      c.fillRect(x(k.from), height - 14, 1, 14);
      c.fillStyle = p.soft;
      if (c.measureText(k.word).width < x(k.to) - x(k.from) - 6) c.fillText(k.word, x(k.from) + 4, height);
    }
    c.textAlign = 'center';
    c.textBaseline = 'top';
    c.font = font(11, 600);
    for (const e of events) {
      c.fillStyle = e.kind === 'warning' ? p.warningInk : e.kind === 'caution' ? p.cautionInk : p.soft;
      c.fillText(e.kind === 'mark' ? '⚑' : priorityLook[e.kind].shape, x(e.t - start), 0);
    }
  }

  open().catch((e: Error) => body.replaceChildren(h('p', { class: 'trouble' }, `Run ${runID} could not be read: ${e.message}.`), h('p', {}, h('a', { href: '#/runs' }, 'Back to the runs'))));

  return {
    el,
    update(time) {
      const dt = Number.isNaN(last) ? 0 : Math.min(1, (time - last) / 1000); // a hidden page does not leap
      last = time;
      if (!player || !inner || !run) return;
      player.advance(dt, time);
      // The fold knows no flags from before a jump; the overview does.
      if (complete) player.model.flags = events.filter((e) => e.t <= start + (player as Player).position);
      const at = scrubbing ?? player.position;
      if (scrubbing === null && Math.abs(Number(scrub.value) - at) > 0.04) scrub.value = String(at);
      const phase = phases.find((k) => at >= k.from && at < k.to)?.word ?? '';
      attr(scrub, 'aria-valuetext', `${duration(at)} of ${duration(player.length)}${phase && `, ${phase}`}`);
      text(play, player.playing ? 'Pause' : 'Play');
      text(clockText, `${duration(at)} of ${duration(player.length)} · ${dateClock(start + at)}`);
      text(trouble, player.problem ? `Stopped: ${player.problem}` : player.playing && player.waiting ? 'reading…' : '');
      paintBar(player.length);
      if (shown === 'Display') inner.update(time); else record?.update(time);
    },
    destroy() {
      over.abort();
      player?.stop();
      inner?.destroy();
      record?.destroy();
      bar.destroy();
      document.removeEventListener('keydown', onKey);
    },
  };
}
