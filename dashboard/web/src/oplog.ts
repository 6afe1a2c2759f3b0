// The operator log in words: who did what, when and why.

import type { LogEntry } from './frames';
import { clock, dateClock, day, seconds, signedClock } from './time';

const deeds: Record<string, string> = {
  acknowledge: 'acknowledged', reset: 'reset', shelve: 'shelved', unshelve: 'taken from the shelf', out_of_service: 'out of service', in_service: 'back in service',
  mark: 'mark', entry: 'entry', swap: 'sensor swapped', readmit: 'probe taken back', config: 'files changed',
  card_load: 'test card loaded', take: 'point taken', accept: 'point accepted', reject: 'point rejected', skip: 'point skipped', go_to_point: 'went to point', check: 'checks',
};

/** What was done. */
export const deedWord = (e: LogEntry): string => deeds[e.what] ?? e.what.replaceAll('_', ' ');

/** What it was done to, with what was entered. A value stays in the unit in which it was entered. */
export function subject(e: LogEntry): string {
  const parts: string[] = [];
  if (e.rule) parts.push(e.rule);
  if (e.channel) parts.push(e.channel);
  if (e.name) parts.push(e.name);
  if (typeof e.value === 'number') parts.push(`${String(Number(e.value.toPrecision(9))).replace('-', '−')}${e.unit ? ` ${e.unit}` : ''}`);
  if (e.serial) parts.push(`serial ${e.serial}`);
  if (e.valid_from) parts.push(`from ${signedClock(seconds(e.valid_from))}`);
  const said = parts.join(' ');
  return e.text ? (said ? `${said}: ${e.text}` : e.text) : said;
}

/** Who did it, with the role where it is told. */
export const actor = (e: LogEntry): string => (e.by ? `${e.by}${e.role ? `, ${e.role}` : ''}` : e.role ?? '');

/** Puts an entry where it belongs by time, once; keeps the newest `most`. */
export function enter(log: LogEntry[], e: LogEntry, most: number): void {
  const t = seconds(e.t ?? null);
  const key = JSON.stringify(e);
  let i = log.length;
  while (i > 0 && seconds((log[i - 1] as LogEntry).t ?? null) > t) i--;
  for (let k = i - 1; k >= 0 && seconds((log[k] as LogEntry).t ?? null) === t; k--) if (JSON.stringify(log[k]) === key) return;
  log.splice(i, 0, e);
  if (log.length > most) log.splice(0, log.length - most);
}

/** The time of an entry; with its day when that is not the day of `now`, both s. */
export function entryTime(e: LogEntry, now: number): string {
  const t = seconds(e.t ?? null);
  return day(t) === day(now) ? clock(t) : dateClock(t);
}
