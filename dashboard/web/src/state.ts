// What the page knows, folded from frames. The same fold serves the live link and
// the replay. It has no DOM and reads no clock: `now` is the page's monotonic
// time in milliseconds.

import type {
  Alarm, AlarmFrame, AlarmState, Band, Card, Channel, ChannelValue, Checks, ConfigState, Frame, HelloFrame, Ledger, Life, LogEntry, MarkFrame, PointFrame, Priority, QuantityInfo, RigInfo, Run, StatusFrame,
} from './frames';
import { withFrame, withPoint } from './card';
import { withSet } from './checks';
import { enter } from './oplog';
import { Ring, columns, pointRow } from './ring';
import { Sparks } from './spark';
import { seconds } from './time';

export interface Flag { t: number; kind: Priority | 'mark'; text: string; id: string }
export interface HistoryEntry { t: number; alarm: Alarm; from: AlarmState; to: AlarmState; note: string }

export interface Model {
  readonly replay: boolean;
  rig: RigInfo | null;
  run: Run | null;
  channels: Channel[];
  quantities: QuantityInfo[];
  bands: Band[];
  armedAbove: number | null;
  scanRate: number;
  configHash: string;
  build: string;
  point: PointFrame | null;
  values: Record<string, ChannelValue>;
  valuesAt: number;
  valuesTime: number; // event time of the newest values, s
  alarms: Map<string, Alarm>;
  history: HistoryEntry[]; // oldest first, the last 500
  ledgers: Ledger[];
  status: StatusFrame | null;
  flags: Flag[]; // by time, the last 500
  log: LogEntry[]; // of the operators, oldest first, the last 500
  config: ConfigState | null;
  life: Life | null;
  nozzleLife: Life | null;
  card: Card | null;
  checks: Checks | null;
  sparks: Sparks;
  ring: Ring;
  epoch: number;
  n: number;
  ticks: number; // status frames so far
  frameAt: number; // page time of the newest frame, pointAt and statusAt alike; -Infinity before the first
  pointAt: number;
  statusAt: number;
  hostTime: number; // host time at statusAt, s
  newest: number; // event time of the newest frame that carries one, s
  resets: number; // how often the list was replaced after a reset
}

const kept = 500;

/** `names` are the columns of its ring. */
export function newModel(replay = false, names: readonly string[] = columns): Model {
  return {
    replay, rig: null, run: null, channels: [], quantities: [], bands: [], armedAbove: null, scanRate: 20, configHash: '', build: '',
    point: null, values: {}, valuesAt: -Infinity, valuesTime: NaN, alarms: new Map(), history: [], ledgers: [], status: null, flags: [], log: [], config: null, life: null, nozzleLife: null, card: null, checks: null, sparks: new Sparks(), ring: new Ring(names),
    epoch: 0, n: 0, ticks: 0, frameAt: -Infinity, pointAt: -Infinity, statusAt: -Infinity, hostTime: NaN, newest: NaN, resets: 0,
  };
}

/** Folds one frame into the model. A frame of an unknown kind is ignored: the server may be newer. */
export function apply(m: Model, f: Frame, now: number): void {
  m.frameAt = now;
  if (f.kind === 'reset') {
    m.resets++;
    return;
  }
  if (typeof f.n === 'number') [m.epoch, m.n] = [f.epoch, f.n];
  switch (f.kind) {
    case 'hello': hello(m, f, now); break;
    case 'operating_point':
      m.point = f;
      m.pointAt = now;
      m.newest = seconds(f.t);
      m.ring.push(m.newest, pointRow(f, m.ring.names));
      traceChannels(m, m.newest, m.values);
      break;
    case 'channels':
      m.values = { ...m.values, ...f.channels };
      m.valuesAt = now;
      m.valuesTime = seconds(f.t);
      traceChannels(m, m.valuesTime, f.channels);
      m.sparks.push(seconds(f.t), f.channels);
      break;
    case 'alarm': alarm(m, f.alarm, seconds(f.t)); break;
    case 'ledger': m.ledgers = f.bands; break;
    case 'status': status(m, f, now); break;
    case 'mark':
      mark(m, f);
      break;
    case 'log': enter(m.log, { t: f.t, ...f.entry }, kept); break;
    case 'config':
      m.config = f.config;
      m.configHash = f.config.hash;
      break;
    case 'card': m.card = withFrame(m.card, f.card); break;
    case 'card_point': m.card = withPoint(m.card, f.point); break;
    case 'checks': m.checks = withSet(m.checks, f.checks); break;
    case 'run':
      m.run = f.event === 'started' ? f.run : m.run && m.run.id === f.run.id ? f.run : m.run;
      break;
  }
}

/** Enters the channels that are traced into the row of their scan, whichever of the two came first. */
function traceChannels(m: Model, t: number, values: Record<string, ChannelValue>): void {
  if (t !== m.valuesTime) return;
  for (const name of m.ring.names) {
    if (name.startsWith('channel.')) m.ring.amend(t, name, values[name.slice(8)]?.value ?? NaN);
  }
}

function hello(m: Model, f: HelloFrame, now: number): void {
  const list = new Map((f.alarms ?? []).map((a) => [a.id, a]));
  for (const a of m.alarms.values()) {
    if (!list.has(a.id)) remember(m, { t: seconds(f.t), alarm: a, from: a.state, to: 'normal', note: 'shown before the restart or gap, not in the list after it' });
  }
  for (const a of list.values()) {
    if (!m.alarms.has(a.id)) flag(m, { t: seconds(a.raised), kind: a.priority, text: a.title, id: a.id });
  }
  m.alarms = list;
  m.ledgers = f.ledgers ?? [];
  m.channels = f.channels ?? [];
  m.quantities = f.quantities ?? [];
  m.bands = f.bands ?? [];
  m.rig = f.rig;
  m.run = f.run;
  m.armedAbove = f.choke_armed_above_rpm;
  m.scanRate = f.scan_rate;
  m.configHash = f.config_hash;
  m.build = f.build;
  m.config = f.config ?? null;
  m.life = f.life ?? null;
  m.nozzleLife = f.nozzle_life ?? null;
  m.card = f.card ?? null;
  m.checks = f.checks ?? null;
  for (const e of f.log ?? []) enter(m.log, e, kept);
  if (f.status) status(m, f.status, now);
  const host = seconds(f.host_time);
  if (Number.isFinite(host)) [m.hostTime, m.statusAt] = [host, now];
}

function status(m: Model, f: StatusFrame, now: number): void {
  m.status = f;
  m.statusAt = now;
  m.ticks++;
  const host = seconds(f.host_time);
  if (Number.isFinite(host)) m.hostTime = host;
}

function alarm(m: Model, a: Alarm, t: number): void {
  const before = m.alarms.get(a.id);
  if (before && before.revision > a.revision) return; // an older copy after a resume
  if (a.state === 'normal') m.alarms.delete(a.id); else m.alarms.set(a.id, a);
  transition(m, a, before?.state ?? 'normal', t);
}

/** Takes stored alarm and mark frames into history and flags; what stands now is the hello's to say. */
export function recall(m: Model, frames: readonly (AlarmFrame | MarkFrame)[]): void {
  const states = new Map<string, AlarmState>();
  for (const f of frames) {
    const t = seconds(f.t);
    if (f.kind === 'mark') mark(m, f);
    else {
      transition(m, f.alarm, states.get(f.alarm.id) ?? 'normal', t);
      states.set(f.alarm.id, f.alarm.state);
    }
  }
}

function mark(m: Model, f: MarkFrame): void {
  flag(m, { t: seconds(f.t), kind: 'mark', text: f.mark.text, id: `mark ${f.t}` });
}

function transition(m: Model, a: Alarm, from: AlarmState, t: number): void {
  if (from === a.state) return;
  remember(m, { t, alarm: a, from, to: a.state, note: a.past ? 'past: judged after the event' : '' });
  if (a.raised !== null && (from === 'normal' || (a.state === 'unacknowledged' && from !== 'unacknowledged'))) {
    // A latched alarm that comes again keeps its id and its first raise.
    flag(m, { t: from === 'normal' ? seconds(a.raised) : seconds(a.changed), kind: a.priority, text: a.title, id: a.id });
  }
}

/** Enters a transition, unless it is there: stored events and the link overlap. */
function remember(m: Model, e: HistoryEntry): void {
  if (m.history.some((h) => h.alarm.id === e.alarm.id && h.alarm.revision === e.alarm.revision && h.to === e.to)) return;
  m.history.push(e);
  if (m.history.length > kept) m.history.shift();
}

function flag(m: Model, f: Flag): void {
  if (Number.isNaN(f.t) || m.flags.some((g) => g.id === f.id && g.t === f.t)) return;
  let i = m.flags.length;
  while (i > 0 && (m.flags[i - 1] as Flag).t > f.t) i--;
  m.flags.splice(i, 0, f);
  if (m.flags.length > kept) m.flags.shift();
}

/** Host time by the page's own count since the last status, s; NaN before the first. */
export function hostNow(m: Model, now: number): number {
  return m.hostTime + (now - m.statusAt) / 1000;
}

/** Age of the newest data, s: what the last status said plus the time since data last came. */
export function dataAge(m: Model, now: number): number | null {
  const said = m.status?.data_age_s;
  if (said === null || said === undefined) return null;
  return said + (now - Math.max(m.statusAt, m.pointAt)) / 1000;
}

export type Freshness =
  | { kind: 'replay' }
  | { kind: 'waiting' } // the first hello has not come
  | { kind: 'no_link'; since: number } // host time of the last frame, s
  | { kind: 'catching_up'; age: number }
  | { kind: 'no_points'; age: number } // the link lives, no operating point comes
  | { kind: 'live'; age: number | null };

/** Without any frame for this long the link is gone, s: one comes each second, and a page is to be grey within 2 s. */
export const linkTimeout = 1.75;
/** Without a status for this long what else comes is not believed, s. */
export const statusTimeout = 2;
/** An operating point older than this is not shown as present, s. */
export const pointTimeout = 1;

/** How far what is shown can be believed. `connected`: the socket is open. */
export function freshness(m: Model, connected: boolean, now: number): Freshness {
  if (m.replay) return { kind: 'replay' };
  if (!Number.isFinite(m.statusAt)) return { kind: 'waiting' };
  if (!connected || now - m.frameAt > linkTimeout * 1000) return { kind: 'no_link', since: hostNow(m, m.frameAt) };
  if (now - m.statusAt > statusTimeout * 1000) return { kind: 'no_link', since: hostNow(m, m.statusAt) };
  const age = dataAge(m, now);
  if (m.status?.catching_up && age !== null) return { kind: 'catching_up', age };
  if (now - m.pointAt > pointTimeout * 1000) return { kind: 'no_points', age: (now - m.pointAt) / 1000 };
  return { kind: 'live', age };
}

/** Whether numbers of the operating point may be drawn as present. */
export function believable(f: Freshness): boolean {
  return f.kind === 'live' || f.kind === 'replay' || f.kind === 'catching_up';
}

/** The run that is on. */
export function activeRun(m: Model): Run | null {
  return m.run && !m.run.ended ? m.run : null;
}

/** The position on the run's clock, s; NaN without a run. */
export function runSeconds(m: Model): number {
  return m.run ? m.newest - seconds(m.run.started) : NaN;
}
