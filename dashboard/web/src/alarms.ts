// Words, shapes and order of alarms. Priorities after 14 CFR 25.1322, states
// after ISA-18.2 / IEC 62682.

import type { Alarm, AlarmState, Priority } from './frames';

/** Shape and word go with the colour everywhere: none is told by colour alone. */
export const priorityLook: Record<Priority, { shape: string; word: string }> = {
  warning: { shape: '■', word: 'WARNING' },
  caution: { shape: '▲', word: 'CAUTION' },
  advisory: { shape: '◆', word: 'ADVISORY' },
  note: { shape: '●', word: 'NOTE' },
};

export const stateWord: Record<AlarmState, string> = {
  normal: 'normal',
  unacknowledged: 'unacknowledged',
  acknowledged: 'acknowledged',
  returned_unacknowledged: 'returned, unacknowledged',
  latched_unacknowledged: 'latched, unacknowledged',
  latched_acknowledged: 'latched, acknowledged',
  shelved: 'shelved',
  suppressed_by_design: 'suppressed by design',
  out_of_service: 'out of service',
};

const waiting = new Set<AlarmState>(['unacknowledged', 'returned_unacknowledged', 'latched_unacknowledged']);
const silent = new Set<AlarmState>(['normal', 'shelved', 'suppressed_by_design', 'out_of_service']);

export const needsAcknowledge = (a: Alarm): boolean => waiting.has(a.state);

/** The last part of the address of an action on an alarm. */
export type AlarmPath = 'acknowledge' | 'reset' | 'shelve' | 'unshelve' | 'out-of-service' | 'in-service';

/** What can be done to an alarm. */
export interface Step {
  path: AlarmPath;
  word: string;
  doing: string;
}

/** The next step: to acknowledge; a latched one whose condition is gone is reset after that. */
export function nextStep(a: Alarm): Step | null {
  if (needsAcknowledge(a)) return { path: 'acknowledge', word: 'Acknowledge', doing: 'Acknowledging…' };
  return a.state === 'latched_acknowledged' ? { path: 'reset', word: 'Reset', doing: 'Resetting…' } : null;
}

/** What puts an alarm aside, also one that has returned to normal, or brings it back, each with a reason. A warning is never shelved. */
export function asideSteps(a: Alarm): Step[] {
  if (a.state === 'out_of_service') return [{ path: 'in-service', word: 'Back in service…', doing: 'Restoring…' }];
  const out: Step[] = [];
  if (a.state === 'shelved') out.push({ path: 'unshelve', word: 'Unshelve', doing: 'Unshelving…' });
  else if (a.priority !== 'warning' && a.state !== 'suppressed_by_design') out.push({ path: 'shelve', word: 'Shelve…', doing: 'Shelving…' });
  out.push({ path: 'out-of-service', word: 'Out of service…', doing: 'Removing…' });
  return out;
}

/** Listed as standing: neither back to normal nor taken out of annunciation. */
export const isStanding = (a: Alarm): boolean => !silent.has(a.state);
/** Sounds until acknowledged: present now, not only told of as past. */
export const sounds = (a: Alarm): boolean =>
  a.state === 'unacknowledged' && !a.past && (a.priority === 'warning' || a.priority === 'caution');

const rank: Record<Priority, [unacknowledged: number, acknowledged: number]> = {
  // An acknowledged warning outranks a new advisory, not a new caution.
  warning: [0, 2], caution: [1, 3], advisory: [4, 5], note: [6, 7],
};

const order = (a: Alarm): number[] => [
  a.past ? 1 : 0,
  rank[a.priority][needsAcknowledge(a) ? 0 : 1],
  a.state === 'returned_unacknowledged' ? 1 : 0,
  a.first_out ? 0 : 1,
];

/** Most urgent first; among equals the newest. */
export function byUrgency(a: Alarm, b: Alarm): number {
  const [x, y] = [order(a), order(b)];
  for (let i = 0; i < x.length; i++) {
    const d = (x[i] as number) - (y[i] as number);
    if (d !== 0) return d;
  }
  const [s, t] = [a.raised ?? '', b.raised ?? ''];
  return t < s ? -1 : t > s ? 1 : a.id < b.id ? -1 : 1;
}

/** The standing alarms, most urgent first. */
export function standing(alarms: Iterable<Alarm>): Alarm[] {
  return [...alarms].filter(isStanding).sort(byUrgency);
}

export interface Branch { alarm: Alarm; under: boolean }

/** Standing alarms with the consequences of each under it, the most urgent tree first. */
export function grouped(list: readonly Alarm[]): Branch[] {
  const ids = new Set(list.map((a) => a.id));
  const head = (a: Alarm): string => (a.under && a.under !== a.id && ids.has(a.under) ? a.under : a.id);
  const trees = new Map<string, Alarm[]>();
  // In order of urgency the first of a tree gives its place.
  for (const a of [...list].sort(byUrgency)) {
    const tree = trees.get(head(a));
    if (tree) tree.push(a); else trees.set(head(a), [a]);
  }
  return [...trees].flatMap(([id, tree]) => [...tree].sort((a, b) => Number(b.id === id) - Number(a.id === id)).map((alarm) => ({ alarm, under: alarm.id !== id })));
}

/** Names an occurrence of an alarm that asks for attention: new whenever it asks again. */
export const occurrence = (a: Alarm): string => `${a.id} ${a.changed}`;

/** The title of the page: the most urgent alarm and how many others stand. */
export function pageTitle(list: readonly Alarm[], linkLost: boolean, place: string, replay: string): string {
  const first = list[0];
  const alarm = linkLost ? 'NO DATA LINK' : first ? `${priorityLook[first.priority].shape} ${first.title}${list.length > 1 ? ` (+${list.length - 1})` : ''}` : '';
  return [alarm && replay ? `live: ${alarm}` : alarm, replay ? `REPLAY ${replay}` : place, 'throatwatch'].filter(Boolean).slice(0, alarm ? 2 : 3).join(' – ');
}

/** What a list of alarms is narrowed to; empty fields let everything pass. */
export interface AlarmFilter { priority: string; words: string }

/** Whether an alarm passes: its priority, and every word somewhere in its rule or texts. */
export function passes(a: Alarm, f: AlarmFilter): boolean {
  if (f.priority && a.priority !== f.priority) return false;
  const all = `${a.rule} ${a.title} ${a.text} ${a.group}`.toLowerCase();
  return f.words.toLowerCase().split(/\s+/).every((w) => all.includes(w));
}
