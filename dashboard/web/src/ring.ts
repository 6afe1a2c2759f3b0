// The samples behind the traces: named columns in one ring, filled in event-time
// order. A missing value is NaN. When the ring is full the oldest row goes.

import type { PointFrame, Series, SeriesReply } from './frames';

/** The columns that are always there; a viewer's choice adds to them. */
export const columns: readonly string[] = [
  'npr', 'choke_npr', 'choke_margin_percent', 'egt_indicated_k',
  'mass_flow_kg_s', 'independent_flow_kg_s', 'speed_rpm', 'flow_parameter',
];

/** Samples further apart than this are not joined by a line, s. */
export const gapSeconds = 1;

const capacity = 1 << 15; // 600 s at 50 scans/s; a power of two

/** One row: the columns in their order, then 1 choked, 0 not choked, NaN unknown. */
export type Row = ArrayLike<number>;

export class Ring {
  private readonly time = new Float64Array(capacity);
  private readonly data: Float64Array[];
  private head = 0; // where the next row goes
  size = 0;
  /** Grows when rows changed other than at the end: what was derived from them is void. */
  version = 0;

  constructor(readonly names: readonly string[] = columns) {
    this.data = Array.from({ length: names.length + 1 }, () => new Float64Array(capacity));
  }

  /** All rows, oldest first. */
  rows(): { t: number; row: Row }[] {
    return Array.from({ length: this.size }, (_, i) => ({ t: this.t(i), row: this.data.map((_c, k) => this.value(k, i)) }));
  }

  /** Enters a value into the newest row, if that is the one of t. */
  amend(t: number, name: string, v: number): void {
    const k = this.names.indexOf(name);
    if (k >= 0 && this.size > 0 && this.t(this.size - 1) === t) (this.data[k] as Float64Array)[this.at(this.size - 1)] = v;
  }

  /** Adds a row; one that is not newer than the last is ignored. */
  push(t: number, row: Row): void {
    if (!Number.isFinite(t) || (this.size > 0 && t <= this.t(this.size - 1))) return;
    this.time[this.head] = t;
    this.data.forEach((column, k) => { column[this.head] = row[k] ?? NaN; });
    this.head = (this.head + 1) % capacity;
    this.size = Math.min(this.size + 1, capacity);
  }

  /** Puts rows where the ring has none: before its first row and into its gaps. */
  fill(rows: { t: number; row: Row }[]): void {
    const kept = this.rows();
    const added = rows.filter((r) => {
      const i = this.lower(r.t);
      const before = i > 0 ? this.t(i - 1) : -Infinity;
      if (i === this.size) return i === 0; // newer than the last row: that is the link's to bring
      return this.t(i) - before > gapSeconds;
    });
    this.clear();
    for (const r of [...kept, ...added].sort((a, b) => a.t - b.t)) this.push(r.t, r.row);
  }

  /** Forgets the rows after t. */
  cut(t: number): void {
    this.version++;
    while (this.size > 0 && this.t(this.size - 1) > t) {
      this.head = (this.head - 1 + capacity) % capacity;
      this.size--;
    }
  }

  clear(): void {
    this.version++;
    this.head = 0;
    this.size = 0;
  }

  private at(i: number): number { return (this.head - this.size + i) & (capacity - 1); }

  /** Time of row i, 0 being the oldest. */
  t(i: number): number { return this.time[this.at(i)] as number; }

  value(column: number, i: number): number { return (this.data[column] as Float64Array)[this.at(i)] as number; }

  choked(i: number): number { return this.value(this.names.length, i); }

  /** Index of the first row at or after t. */
  lower(t: number): number {
    let [low, high] = [0, this.size];
    while (low < high) {
      const middle = (low + high) >> 1;
      if (this.t(middle) < t) low = middle + 1; else high = middle;
    }
    return low;
  }
}

/** The row of an operating point; channels are not in it. */
export function pointRow(p: PointFrame, names: readonly string[] = columns): number[] {
  const row = names.map((c) => (p as unknown as Record<string, number | null>)[c] ?? NaN);
  row.push(p.choke_state === 'choked' ? 1 : p.choke_state === 'unknown' ? NaN : 0);
  return row;
}

/** A ring of other columns with the rows of one; columns that it had not are empty. */
export function widened(ring: Ring, names: readonly string[]): Ring {
  const out = new Ring(names);
  const from = names.map((name) => ring.names.indexOf(name));
  for (const { t, row } of ring.rows()) out.push(t, [...from.map((k) => (k < 0 ? NaN : row[k] as number)), row[ring.names.length] as number]);
  return out;
}

/** The ring with `rows` in the place of what it has of their time. */
export function renewed(ring: Ring, rows: readonly { t: number; row: Row }[]): Ring {
  const out = new Ring(ring.names);
  const [first, last] = [rows[0]?.t ?? Infinity, rows[rows.length - 1]?.t ?? Infinity];
  const old = ring.rows();
  for (const r of [...old.filter((o) => o.t < first), ...rows, ...old.filter((o) => o.t > last)]) out.push(r.t, r.row);
  return out;
}

/** What a /series request has to name for seriesRows. */
export const seriesNames = (names: readonly string[] = columns): string[] => [...names, 'choke_state'];

/**
 * Rows of a /series reply; `start` is the time of second 0 of the run. A bucket
 * of several samples becomes two rows, its lowest and its highest values, so that
 * no excursion is lost. Choked comes from the transitions of the choke state.
 */
export function seriesRows(reply: SeriesReply, start: number, names: readonly string[] = columns): { t: number; row: number[] }[] {
  const rows = new Map<number, number[]>();
  const put = (t: number, k: number, v: unknown): void => {
    let row = rows.get(t);
    if (!row) rows.set(t, (row = new Array<number>(names.length + 1).fill(NaN)));
    if (typeof v !== 'number') return;
    row[k] = v;
  };
  // The width of a bucket, one for all columns; where data is missing the next one is further away.
  let width = Infinity;
  for (const name of names) {
    reply.series[name]?.t.forEach((t, i, all) => { if (i > 0) width = Math.min(width, t - (all[i - 1] as number)); });
  }
  names.forEach((name, k) => {
    const s = reply.series[name];
    if (!s) return;
    s.t.forEach((t, i) => {
      put(start + t, k, s.min?.[i]);
      if ((s.n?.[i] ?? 1) > 1 && width < Infinity) put(start + t + width / 2, k, s.max?.[i]);
    });
  });
  const sorted = [...rows].map(([t, row]) => ({ t, row })).sort((a, b) => a.t - b.t);
  const states = reply.series['choke_state'];
  let next = 0;
  let choked = NaN;
  for (const r of sorted) {
    for (; states && next < states.t.length && start + (states.t[next] as number) <= r.t; next++) {
      const word = states.state?.[next];
      choked = word === 'choked' ? 1 : word === 'unknown' ? NaN : 0;
    }
    r.row[names.length] = choked;
  }
  return sorted;
}

export interface Period { from: number; to: number; word: string } // seconds of the run

/** Transitions of a state as the periods between them, the last one up to `end`. */
export function periods(s: Series | undefined, end: number): Period[] {
  return (s?.t ?? []).map((from, i) => ({ from, to: s?.t[i + 1] ?? end, word: s?.state?.[i] ?? '' }));
}

export interface Window { t: number[]; y: (number | null)[][] }

/**
 * The rows of the last `span` seconds up to `end` for drawing, at most about 2 per bucket:
 * each bucket gives its lowest and highest value in the order of their occurrence, so a
 * spike of one scan stays visible at any zoom. Bucket edges are multiples of their width:
 * the picture does not shimmer while the window slides. Gaps become nulls.
 *
 * Earlier buckets are kept: while the window slides, only the rows from the last one on are
 * read. The arrays are the decimator's own and change with the next call. `convert` has
 * to be rising.
 */
export class Decimator {
  private readonly out: Window;
  private ring: Ring | null = null;
  private index: number[] = [];
  private version = -1;
  private width = NaN; // of a bucket, s; 0 when rows stand as they are
  private from = NaN; // time of the first row that is kept
  private tail = 0; // where the last bucket begins in out
  private tailAt = NaN; // time of its first row

  constructor(private readonly wanted: readonly string[], private readonly convert: (v: number) => number) {
    this.out = { t: [], y: wanted.map(() => []) };
  }

  window(ring: Ring, end: number, span: number, buckets: number): Window {
    const first = Math.max(0, ring.lower(end - span) - 1);
    const last = Math.min(ring.size, ring.lower(end) + 1);
    const width = last - first <= 2 * buckets ? 0 : span / buckets;
    const kept = width > 0 && width === this.width && ring === this.ring && ring.version === this.version && ring.t(first) >= this.from && ring.t(last - 1) >= this.tailAt;
    if (ring !== this.ring) this.index = this.wanted.map((c) => ring.names.indexOf(c));
    this.ring = ring;
    this.version = ring.version;
    this.width = width;
    this.from = last > first ? ring.t(first) : NaN;
    this.cut(kept ? this.tail : 0);
    if (kept) this.drop((Math.floor(this.from / width) + 0.25) * width);
    if (width === 0) this.rows(ring, first, last);
    else this.buckets(ring, kept ? ring.lower(this.tailAt) : first, last, width);
    return this.out;
  }

  /** Forgets what was put out from i on. */
  private cut(i: number): void {
    this.out.t.length = i;
    for (const y of this.out.y) y.length = i;
  }

  /** Forgets the buckets before t. */
  private drop(t: number): void {
    let n = 0;
    while (n < this.out.t.length && (this.out.t[n] as number) < t) n++;
    this.out.t.splice(0, n);
    for (const y of this.out.y) y.splice(0, n);
  }

  private gap(t: number): void {
    this.out.t.push(t);
    for (const y of this.out.y) y.push(null);
  }

  private rows(ring: Ring, first: number, last: number): void {
    for (let i = first; i < last; i++) {
      const t = ring.t(i);
      if (i > first && t - ring.t(i - 1) > gapSeconds) this.gap((t + ring.t(i - 1)) / 2);
      this.out.t.push(t);
      this.index.forEach((k, s) => {
        const v = ring.value(k, i);
        this.out.y[s]?.push(Number.isFinite(v) ? this.convert(v) : null);
      });
    }
  }

  private buckets(ring: Ring, first: number, last: number, width: number): void {
    for (let i = first; i < last;) {
      const bucket = Math.floor(ring.t(i) / width);
      let end = i + 1;
      while (end < last && Math.floor(ring.t(end) / width) === bucket) end++;
      this.tail = this.out.t.length;
      this.tailAt = ring.t(i);
      if (this.out.t.length > 0 && ring.t(i) - ring.t(i - 1) > Math.max(gapSeconds, width)) this.gap((ring.t(i) + ring.t(i - 1)) / 2);
      this.out.t.push((bucket + 0.25) * width, (bucket + 0.75) * width);
      this.index.forEach((k, s) => {
        let [low, high, lowAt, highAt] = [Infinity, -Infinity, -1, -1];
        for (let j = i; j < end; j++) {
          const v = ring.value(k, j);
          if (v < low) { low = v; lowAt = j; }
          if (v > high) { high = v; highAt = j; }
        }
        const y = this.out.y[s] as (number | null)[];
        if (lowAt < 0) y.push(null, null);
        else if (lowAt <= highAt) y.push(this.convert(low), this.convert(high));
        else y.push(this.convert(high), this.convert(low));
      });
      i = end;
    }
  }
}

/** The periods within [t0, t1] in which the throat was choked. */
export function chokedSpans(ring: Ring, t0: number, t1: number): [number, number][] {
  const spans: [number, number][] = [];
  const last = Math.min(ring.size, ring.lower(t1) + 1);
  let start = NaN;
  let before = NaN;
  for (let i = Math.max(0, ring.lower(t0) - 1); i < last; i++) {
    const t = ring.t(i);
    const choked = ring.choked(i) === 1;
    const gap = t - before > gapSeconds;
    if (!Number.isNaN(start) && (!choked || gap)) {
      spans.push([start, gap ? before : t]);
      start = NaN;
    }
    if (choked && Number.isNaN(start)) start = t;
    before = t;
  }
  if (!Number.isNaN(start)) spans.push([start, before]);
  return spans;
}
