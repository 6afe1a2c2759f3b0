// How values of an operating point are put into words.

import type { Num, PointFrame } from './frames';
import { fixed, signed } from './units';

export interface StateLook { shape: string; word: string; marginal: boolean; cause: string }

/** The choke state with its shape; no_flow and unknown are words of their own, never a guess. */
export function stateLook(p: PointFrame | null): StateLook {
  if (!p) return { shape: '?', word: 'unknown', marginal: false, cause: 'no operating point' };
  switch (p.choke_state) {
    case 'choked': return { shape: '●', word: 'choked', marginal: p.choke_marginal, cause: '' };
    case 'unchoked': return { shape: '○', word: 'unchoked', marginal: p.choke_marginal, cause: '' };
    case 'no_flow': return { shape: '—', word: 'no flow', marginal: false, cause: 'below resolution' };
    default: return { shape: '?', word: 'unknown', marginal: false, cause: causeWord(p.cause) || 'cause not given' };
  }
}

/** "± 1.2", or an interval where the bounds are not symmetric; "" when neither is known. */
export function uncertainty(u95: Num | undefined, decimals: number, low?: Num, high?: Num): string {
  if (u95 !== null && u95 !== undefined && Number.isFinite(u95)) return `± ${fixed(u95, decimals)}`;
  if (typeof low === 'number' && typeof high === 'number') return `${signed(low, decimals)} … ${signed(high, decimals)}`;
  return '';
}

/** A cause for people: the id of a channel stays as it is, what is wrong with it is put into words. */
export function causeWord(s: string | null | undefined): string {
  if (!s) return '';
  const space = s.indexOf(' ');
  return space < 0 ? s.replaceAll('_', ' ') : s.slice(0, space) + s.slice(space).replaceAll('_', ' ');
}

const sources: Record<string, string> = {
  none: 'no source', rake: 'rake', exit_plane: 'exit plane', barometer: 'barometer', egt_factor: 'EGT × factor',
  one_dimensional: 'one-dimensional', calibration: 'calibration', entry: 'rig file',
};

/** A source of a value, for people. */
export const sourceWord = (s: string): string => sources[s] ?? s.replaceAll('_', ' ');
