// What a display needs to know of the world: its model, how far that can be
// believed, how a viewer wants it shown and, on the live side only, how to act.

import type { Alarm } from './frames';
import type { Freshness, Model } from './state';
import type { Palette } from './palette';
import type { UnitSet } from './units';

export type AckState = 'idle' | 'pending' | string; // else: what went wrong

export interface Acknowledger {
  state(a: Alarm): AckState;
  send(a: Alarm): void;
}

/** How a viewer wants it shown. */
export interface Taste {
  palette(): Palette;
  units(): UnitSet;
}

export interface Display extends Taste {
  rig: string;
  model(): Model;
  fresh(now: number): Freshness;
  /** Who acts at this page; the name goes with every action. */
  operator(): string;
  acknowledger: Acknowledger | null; // null in replay: nothing is acknowledged there
}
