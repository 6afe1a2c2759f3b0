// What a run has brought so far, for a page that comes to it in the middle: rows of
// the traces, alarms and marks, and the position at which the live link joins on.

import { api } from './api';
import type { AlarmFrame, HelloFrame, MarkFrame } from './frames';
import { type Row, columns, seriesNames, seriesRows } from './ring';
import { apply, newModel } from './state';
import { seconds } from './time';

export interface Stamped { t: number; row: Row }

/** The traces reach this far back, s. */
export const reach = 600;

/**
 * Rows of a run are stored in chunks of up to a minute; before its first one is
 * closed a run has no series at all. So long after its start that is sure, s.
 */
export const firstChunk = 75;

const points = 2000;

/** Where the requests go; a test puts its own here. */
export type Source = Pick<typeof api, 'hello' | 'series' | 'messages'>;

/** Rows made by stepping the records of [from, to) again: whole, but slow, so for a minute or so. */
async function steppedRows(source: Source, run: string, from: number, to: number, signal: AbortSignal, names: readonly string[]): Promise<{ rows: Stamped[]; through: string }> {
  const model = newModel(true, names);
  let through = '';
  await source.messages(run, from, to, '', signal, (f) => {
    if ('epoch' in f && f.kind !== 'hello') through = `${f.epoch}.${f.n}`;
    if (f.kind === 'operating_point' || f.kind === 'channels') apply(model, f, 0);
  });
  return { rows: model.ring.rows(), through };
}

/**
 * Rows of [from, to), seconds of the run that began at `start`: thinned as far as
 * they are stored, stepped again from there on. `young` says that nothing is stored;
 * `names` are the columns.
 */
export async function rowsOf(source: Source, run: string, start: number, from: number, to: number, young: boolean, signal: AbortSignal, names: readonly string[] = columns): Promise<Stamped[]> {
  const stored = young ? [] : seriesRows(await source.series(run, seriesNames(names), from, to, points, signal), start, names);
  const end = stored.length > 0 ? (stored[stored.length - 1] as Stamped).t - start : from;
  if (to - end < 1) return stored;
  return [...stored, ...(await steppedRows(source, run, end + 1e-3, to, signal, names)).rows];
}

export interface Opening {
  hello: HelloFrame;
  rows: Stamped[];
  events: (AlarmFrame | MarkFrame)[]; // of the run, oldest first
  from: string; // epoch.n: the link is to go on behind this
}

/** Everything up to the position `from`, so that a page opened in the middle of a run shows no hole. */
export async function opening(source: Source, rig: string, signal: AbortSignal, names: readonly string[] = columns): Promise<Opening> {
  const hello = await source.hello(rig, signal);
  const out: Opening = { hello, rows: [], events: [], from: `${hello.epoch}.${hello.n}` };
  const { run } = hello;
  if (!run) return out;
  const start = seconds(run.started);
  const age = seconds(hello.host_time) - start + 1;
  await source.messages(run.id, 0, age, 'alarm,mark', signal, (f) => {
    if (f.kind === 'alarm' || f.kind === 'mark') out.events.push(f);
  });
  const from = Math.max(0, age - reach);
  if (age > firstChunk) {
    const reply = await source.series(run.id, seriesNames(names), from, age, points, signal);
    out.rows = seriesRows(reply, start, names);
    if (reply.through.startsWith(`${hello.epoch}.`)) {
      out.from = reply.through;
      return out;
    }
  }
  // No chunk is closed yet, or none since a restart: the link has nothing from before it.
  const last = out.rows[out.rows.length - 1];
  const rest = await steppedRows(source, run.id, last ? last.t - start + 1e-3 : from, age, signal, names);
  out.rows.push(...rest.rows);
  if (rest.through) out.from = rest.through;
  return out;
}
