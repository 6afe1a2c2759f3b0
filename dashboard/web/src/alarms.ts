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

/** What an operator can do to a standing alarm next. */
export interface Step {
  path: 'acknowledge' | 'reset';
  word: string;
  doing: string;
}

/** The next step: to acknowledge; a latched one whose condition is gone is reset after that. */
export function nextStep(a: Alarm): Step | null {
  if (needsAcknowledge(a)) return { path: 'acknowledge', word: 'Acknowledge', doing: 'Acknowledging…' };
  return a.state === 'latched_acknowledged' ? { path: 'reset', word: 'Reset', doing: 'Resetting…' } : null;
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
