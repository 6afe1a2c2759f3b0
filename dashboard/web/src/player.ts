// Replay by the page's own clock: frames of a stored run are fetched in windows
// ahead of the position and folded into a model of their own.

import type { Frame } from './frames';
import { type Model, apply, newModel } from './state';
import { seconds } from './time';
import { type Row, columns } from './ring';

export const speeds = [1, 2, 5, 10, 20, 50] as const;

/** Where the frames come from; a test puts its own here. */
export interface Store {
  /** Frames of [from, to), seconds of the run, the first a hello as of `from`. */
  window(from: number, to: number, signal: AbortSignal): Promise<Frame[]>;
  /** Thinned rows before `to` for the traces. */
  before(to: number, signal: AbortSignal): Promise<{ t: number; row: Row }[]>;
}

interface Part { from: number; to: number; frames: Frame[]; times: number[] }

/** Length of one window, seconds of the run. */
export const windowLength = (speed: number): number => (speed > 10 ? 60 : 30);

export class Player {
  model: Model = newModel(true);
  position = 0; // seconds of the run
  playing = false;
  speed = 1;
  waiting = false; // for frames
  problem = '';
  private parts: Part[] = []; // at most the one before, the present and those ahead
  private part = 0; // index of the present part
  private next = 0; // index of the next frame in it
  private seeking = new AbortController();
  private loading = false;

  /** `start` is the time of second 0, `length` the length of the run, both in s; `names` gives the columns of the traces. */
  constructor(private readonly store: Store, private readonly start: number, readonly length: number, private readonly names: () => readonly string[] = () => columns) {}

  /** Shows the run as it was at `position`. */
  async seek(position: number, now: number): Promise<void> {
    this.seeking.abort();
    const seeking = (this.seeking = new AbortController());
    this.position = Math.min(Math.max(0, position), this.length);
    this.parts = [];
    this.part = this.next = 0;
    this.loading = false;
    this.waiting = true;
    this.problem = '';
    const model = newModel(true, this.names());
    const prefill = this.store.before(this.position, seeking.signal).then(
      (rows) => { if (!seeking.signal.aborted) model.ring.fill(rows); },
      () => undefined, // the traces then begin at the position
    );
    await this.load();
    if (seeking.signal.aborted) return;
    this.model = model;
    const first = this.parts[0];
    if (first) {
      const opening = first.frames[0];
      if (opening?.kind === 'hello') {
        apply(model, opening, now);
        this.next = 1;
      }
      this.fold(now);
      if (!model.point) this.step(now);
    }
    await prefill;
  }

  stop(): void {
    this.playing = false;
    this.seeking.abort();
  }

  /** Moves on by dt seconds of the page's clock. */
  advance(dt: number, now: number): void {
    if (this.playing) {
      const end = this.parts.length > 0 ? (this.parts[this.parts.length - 1] as Part).to : this.position;
      const wanted = Math.min(this.position + dt * this.speed, this.length);
      this.waiting = wanted > end && end < this.length;
      this.position = Math.max(this.position, Math.min(wanted, end));
      if (this.position >= this.length) this.playing = false;
      this.fold(now);
    }
    void this.load();
  }

  /** Goes on by one scan; true when there was one within what is loaded. */
  step(now: number): boolean {
    for (let f = this.take(Infinity, now); f; f = this.take(Infinity, now)) {
      if (f.kind === 'operating_point') {
        this.position = Math.max(this.position, seconds(f.t) - this.start);
        void this.load();
        return true;
      }
    }
    return false;
  }

  /** Goes back by one scan, within what is loaded. */
  back(now: number): boolean {
    const shown = this.model.point?.scan;
    for (let p = this.part; p >= 0; p--) {
      const part = this.parts[p] as Part;
      const end = p === this.part ? this.next : part.frames.length;
      for (let i = end - 1; i >= 0; i--) {
        const f = part.frames[i] as Frame;
        if (f.kind !== 'operating_point' || f.scan === shown) continue;
        const model = newModel(true);
        model.ring = this.model.ring;
        model.ring.cut(part.times[i] as number);
        for (let j = 0; j <= i; j++) apply(model, part.frames[j] as Frame, now);
        this.model = model;
        [this.part, this.next] = [p, i + 1];
        this.position = (part.times[i] as number) - this.start;
        return true;
      }
    }
    return false;
  }

  private fold(now: number): void {
    while (this.take(this.start + this.position, now));
  }

  /** Applies and gives the next frame if it is not after t. */
  private take(t: number, now: number): Frame | null {
    let part = this.parts[this.part];
    while (part && this.next >= part.frames.length && this.part + 1 < this.parts.length) {
      part = this.parts[++this.part] as Part;
      this.next = part.frames[0]?.kind === 'hello' ? 1 : 0; // it says what the fold knows already
      if (this.part > 1) {
        this.parts.shift();
        this.part--;
      }
    }
    if (!part || this.next >= part.frames.length || (part.times[this.next] as number) > t) return null;
    const f = part.frames[this.next++] as Frame;
    apply(this.model, f, now);
    return f;
  }

  private async load(): Promise<void> {
    const last = this.parts[this.parts.length - 1];
    const from = last ? last.to : this.position;
    const span = windowLength(this.speed);
    if (this.loading || from >= this.length || from - this.position > span) return;
    if (this.problem && !this.playing) return; // pressing play tries again
    this.loading = true;
    const { signal } = this.seeking;
    try {
      const to = Math.min(from + span, this.length + 1);
      const frames = await this.store.window(from, to, signal);
      if (signal.aborted) return;
      let t = -Infinity;
      const times = frames.map((f) => {
        const at = 't' in f ? seconds(f.t) : NaN;
        return (t = at > t ? at : t); // in the order of the record, even where an event is older
      });
      this.parts.push({ from, to, frames, times });
      this.waiting = false;
      this.problem = '';
    } catch (e) {
      if (signal.aborted) return;
      this.problem = e instanceof Error ? e.message : String(e);
      this.playing = false;
    } finally {
      if (!signal.aborted) this.loading = false;
    }
  }
}
