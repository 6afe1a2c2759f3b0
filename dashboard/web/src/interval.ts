// What the uncertainty of an operating point says about the choke state.

import type { PointFrame } from './frames';
import { fixed } from './units';

/** How far the choke line may lie below and above its value in NPR, so that the margin keeps its 95 % interval. */
export function chokeBand(p: PointFrame): [below: number, over: number] {
  const { choke_npr: choke, choke_margin_percent: margin, choke_margin_percent_u95: u95, choke_margin_percent_low95: low, choke_margin_percent_high95: high } = p;
  if (typeof choke !== 'number' || typeof margin !== 'number') return [0, 0];
  if (typeof u95 === 'number') return [(u95 / 100) * choke, (u95 / 100) * choke];
  return typeof low === 'number' && typeof high === 'number' ? [((high - margin) / 100) * choke, ((margin - low) / 100) * choke] : [0, 0];
}

/** A probability in percent; near 0 and 1 as a bound, for no sample tells more. */
export function probability(p: number | null | undefined): string {
  if (typeof p !== 'number' || !Number.isFinite(p)) return '–';
  return p > 0.999 ? '> 99.9 %' : p < 0.001 ? '< 0.1 %' : `${fixed(p * 100, 1)} %`;
}
