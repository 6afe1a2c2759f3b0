// Excursions above EGT limits in words.

import type { Exceedance } from './frames';
import { clock, seconds } from './time';
import { type UnitSet, fixed, shown } from './units';

const name = (s: string): string => s.replaceAll('_', ' ');

/** A temperature with its sign. */
export const degrees = (u: UnitSet, k: number | null): string => (k === null ? '–' : `${shown(u.temperature, k)} ${u.temperature.sign}`);

/** "■ exceeded" for a used-up allowance, else how much of it was used. */
export function exceedanceWord(e: Exceedance): string {
  const of = e.allowance_s > 0 ? `of ${fixed(e.allowance_s, 1)} s` : 'none allowed';
  return e.exceeded ? `■ exceeded (${of})` : `within (${of})`;
}

/** The exceedances of a run in a line; "" without any. */
export function exceedanceSummary(list: readonly Exceedance[], u: UnitSet): string {
  const over = list.filter((e) => e.exceeded);
  if (list.length === 0) return '';
  const worst = over.length > 0 ? over : list;
  return `${over.length} of ${list.length} excursion${list.length > 1 ? 's' : ''} exceeded: ${worst.map((e) => `${name(e.band)} at ${clock(seconds(e.began))}, ${e.ended ? `${fixed(e.duration_s, 1)} s, peak ${degrees(u, e.peak_k)}` : 'goes on'}`).join('; ')}`;
}
