// Two runs beside each other: the order of lists, the lines of plots and the words.

import type { AlarmChange, Num, RunSummary, Series } from './frames';
import { duration } from './time';
import { fixed } from './units';

/** The runs in their order, each reduction behind the run that it comes of. */
export function familiesOf(runs: readonly RunSummary[]): RunSummary[] {
  const out: RunSummary[] = [];
  const add = (r: RunSummary): void => {
    out.push(r);
    for (const child of runs.filter((c) => c.parent === r.id).sort((a, b) => (a.id < b.id ? -1 : 1))) add(child);
  };
  for (const r of runs) if (!r.parent || !runs.some((p) => p.id === r.parent)) add(r);
  return out;
}

export interface Drawn { t: number[]; y: Num[] }

/**
 * A thinned series as a line from `zero` on, s: a bucket of several samples gives its
 * lowest and its highest value, so that no spike is lost; a null stands in a gap.
 */
export function drawn(s: Series | undefined, zero: number, of: (si: number) => number): Drawn {
  const out: Drawn = { t: [], y: [] };
  const times = s?.t ?? [];
  const width = times.reduce((w, t, i) => (i > 0 ? Math.min(w, t - (times[i - 1] as number)) : w), Infinity);
  const put = (t: number, v: Num | undefined): void => {
    out.t.push(t - zero);
    out.y.push(typeof v === 'number' ? of(v) : null);
  };
  times.forEach((t, i) => {
    const before = times[i - 1];
    if (before !== undefined && t - before > Math.max(1, 2.5 * width)) put((t + before) / 2, null);
    put(t, s?.min?.[i] ?? s?.last?.[i]);
    if ((s?.n?.[i] ?? 1) > 1) put(t + width / 2, s?.max?.[i]);
  });
  return out;
}

/** The value of a line at t, of the nearest place within `reach`; null where there is none. */
export function valueAt(d: Drawn, t: number, reach: number): Num {
  let [low, high] = [0, d.t.length];
  while (low < high) {
    const middle = (low + high) >> 1;
    if ((d.t[middle] as number) < t) low = middle + 1; else high = middle;
  }
  const near = low > 0 && (low >= d.t.length || t - (d.t[low - 1] as number) < (d.t[low] as number) - t) ? low - 1 : low;
  return near < d.t.length && Math.abs((d.t[near] as number) - t) <= reach ? (d.y[near] as Num) : null;
}

/** What became of an alarm, told from the old run to the new one. */
export function changeText(a: AlarmChange): string {
  const at = (s: Num): string => (s === null ? '–' : `${duration(s)}.${Math.floor((s % 1) * 10)}`);
  switch (a.change) {
    case 'appears': return `only in the new run, at ${at(a.b_s)}`;
    case 'vanishes': return `only in the old run, at ${at(a.a_s)}`;
    case 'moves': return `${at(a.a_s)} in the old, ${at(a.b_s)} in the new: ${fixed(Math.abs(a.moved_s ?? 0), 2)} s ${(a.moved_s ?? 0) > 0 ? 'later' : 'earlier'}`;
  }
}
