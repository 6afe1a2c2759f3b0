// What a display needs to know of the world: its model, how far that can be
// believed, and, on the live side only, how to acknowledge.

import type { Alarm } from './frames';
import type { Freshness, Model } from './state';
import type { Palette } from './palette';

export type AckState = 'idle' | 'pending' | string; // else: what went wrong

export interface Acknowledger {
  state(a: Alarm): AckState;
  send(a: Alarm): void;
}

export interface Display {
  rig: string;
  model(): Model;
  fresh(now: number): Freshness;
  palette(): Palette;
  acknowledger: Acknowledger | null; // null in replay: nothing is acknowledged there
}
