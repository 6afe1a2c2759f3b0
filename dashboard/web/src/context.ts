// What a display needs to know of the world: its model, how far that can be
// believed, how a viewer wants it shown and, on the live side only, how to act.

import type { AlarmPath } from './alarms';
import { attr } from './dom';
import type { Alarm } from './frames';
import type { Palette } from './palette';
import { type Deed, type Session, refusal } from './session';
import type { Freshness, Model } from './state';
import type { UnitSet } from './units';

export type AckState = 'idle' | 'pending' | string; // else: what went wrong

/** Sends what a person does to an alarm. */
export interface Acknowledger {
  state(a: Alarm): AckState;
  /** `shelf` is the time of shelving, s. Ends when the server has taken it, fails with why not. */
  send(a: Alarm, path: AlarmPath, reason?: string, shelf?: number): Promise<void>;
}

/** How a viewer wants it shown. */
export interface Taste {
  palette(): Palette;
  units(): UnitSet;
  /** The keys of the plots of the traces. */
  plots(): readonly string[];
  choosePlots(keys: readonly string[]): void;
}

export interface Display extends Taste {
  rig: string;
  /** What follows the record and is set up, of "database" and "webhook". */
  follows: readonly string[];
  model(): Model;
  fresh(now: number): Freshness;
  /** Who acts at this page; the name goes with every action. */
  operator(): string;
  session(): Session;
  acknowledger: Acknowledger | null; // null in replay: nothing is acknowledged there
}

/** Why a deed cannot be sent from this page now; "" when nothing stands against it. */
export function hindrance(d: Display, deed: Deed, now: number): string {
  const { kind } = d.fresh(now);
  return kind === 'no_link' || kind === 'waiting' ? 'no data link' : refusal(d.session(), deed);
}

/** Lets a button be pressed only when its deed can be sent, and says why not. */
export function gate(button: HTMLElement, d: Display, deed: Deed, now: number, busy = false): void {
  const why = hindrance(d, deed, now);
  attr(button, 'disabled', busy || why !== '');
  attr(button, 'title', why || null);
}
