// The last minute of every channel, thinned, for the small traces of the Rig page.

import type { ChannelValue } from './frames';

/** How far back, and the least time between two values kept, s. */
export const sparkSpan = 60;
const spacing = 0.5;

export class Sparks {
  private times: number[] = [];
  private readonly rows = new Map<string, (number | null)[]>();

  /** Takes the values of time t, s; a value that is not usable leaves a hole. */
  push(t: number, channels: Record<string, ChannelValue>): void {
    const last = this.times[this.times.length - 1];
    if (!Number.isFinite(t) || (last !== undefined && t - last < spacing)) return;
    for (const [id, v] of Object.entries(channels)) {
      let row = this.rows.get(id);
      if (!row) this.rows.set(id, (row = new Array<number | null>(this.times.length).fill(null)));
      row.push(v.value);
    }
    this.times.push(t);
    for (const row of this.rows.values()) if (row.length < this.times.length) row.push(null);
    while (t - (this.times[0] as number) > sparkSpan) {
      this.times.shift();
      for (const row of this.rows.values()) row.shift();
    }
  }

  clear(): void {
    this.times = [];
    this.rows.clear();
  }

  /** Times and values of a channel, oldest first. */
  of(id: string): { t: readonly number[]; v: readonly (number | null)[] } {
    return { t: this.times, v: this.rows.get(id) ?? [] };
  }
}
