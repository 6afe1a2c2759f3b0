// How values of an operating point are put into words.

import type { Channel, ChannelValue, Num, PointFrame, Sensor, Speaking } from './frames';
import { duration, seconds } from './time';
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
  none: 'no source', rake: 'rake', exit_plane: 'exit plane', barometer: 'barometer', egt_factor: 'EGT × factor', heat_balance: 'heat balance', wall_static: 'wall static',
  one_dimensional: 'one-dimensional', calibration: 'calibration', entry: 'rig file',
};

/** Why a state is not steady, or why there is no forecast: reasons of an operating point. */
const reasons: Record<string, string> = {
  not_configured: 'not configured', phase: 'no steady phase', filling: 'window filling', gaps: 'data gaps', correlated: 'slow noise',
  trend: 'trend', scatter: 'scatter', swing: 'swing or step', dwell: 'settling',
  not_steady: 'no steady phase', not_enough: 'too little data yet', past_limit: 'past it', no_trend: 'no trend toward it',
  levelling: 'levels off before', too_far_ahead: 'too far ahead to tell', no_limit: 'no limit above',
};
export const reasonWord = (s: string): string => reasons[s] ?? s.replaceAll('_', ' ');

/** Whether the engine is steady, and if not why; "–" where it is not told. */
export function steadyText(p: PointFrame | null): string {
  if (p?.steady === undefined) return '–';
  return p.steady ? '● steady' : `○ not steady${p.steady_reason ? `: ${reasonWord(p.steady_reason)}` : ''}`;
}

/** "in 40 s (25–60)", the bounds being those of 95 %, or why there is no forecast. */
export function forecastText(s: Num | undefined, low: Num | undefined, high: Num | undefined, reason: string | null | undefined): string {
  if (typeof s !== 'number') return reason ? reasonWord(reason) : '–';
  const bounds = typeof low !== 'number' ? '' : typeof high === 'number' ? ` (${fixed(low, 0)}–${fixed(high, 0)})` : ` (${fixed(low, 0)} or later)`;
  return `in ${fixed(s, 0)} s${bounds}`;
}

/** What is left of the cool-down that the rig file asks for; without one how long the rotor rests. */
export function coolDownText(left: Num | undefined, rest: Num | undefined): string {
  if (typeof left === 'number') return left > 0 ? `${duration(Math.ceil(left))} left` : 'its time is over';
  return typeof rest === 'number' ? `at rest for ${duration(rest)}` : 'rotor turns';
}

/** What stands in for the first source of a value: one note each. */
export function standIns(p: PointFrame | null): string[] {
  if (!p) return [];
  const out: string[] = [];
  if (p.back_pressure_from === 'barometer') out.push('back pressure from barometer');
  if (p.total_pressure_from === 'wall_static') out.push('p7 from wall static');
  if (['heat_balance', 'egt_factor'].includes(p.total_temperature_from)) out.push(`T7 from ${sourceWord(p.total_temperature_from)}`);
  return out;
}

/** A source of a value, for people. */
export const sourceWord = (s: string): string => sources[s] ?? s.replaceAll('_', ' ');

/** What is on file of the sensor that a channel has at t, s. */
export function sensorAt(c: Channel, t: number): Sensor | null {
  const later = (c.swaps ?? []).filter((s) => !(seconds(s.valid_from) > t));
  return later[later.length - 1] ?? c.sensor ?? null;
}

/** The state of a sensor's calibration. */
export function calibrationText(s: Sensor | null, state: ChannelValue['calibration']): string {
  switch (state) {
    case 'in_date': return s?.due ? `due ${s.due}` : 'in date';
    case 'expired': return `▲ expired${s?.due ? ` ${s.due}` : ''}`;
    case 'waived': return `△ waived${s?.waiver ? ` by ${s.waiver.who}` : ''}`;
    case 'not_on_file': return 'not on file';
    default: return '–';
  }
}

/** All that is on file of a sensor, in words. */
export const sensorText = (s: Sensor | null): string => (s ? [`serial ${s.serial}`, s.certificate && `certificate ${s.certificate}`, s.calibrated && `calibrated ${s.calibrated}`, s.due && `due ${s.due}`,
  s.waiver && `waived by ${s.waiver.who}: ${s.waiver.why}${s.waiver.until ? `, until ${s.waiver.until}` : ''}`].filter(Boolean).join(', ') : 'nothing is on file');

/** What is wrong with a sensor, and whether that is proven; "" for nothing. */
export function findingText(v: ChannelValue): string {
  const what = v.finding === 'departs' ? 'departs, not told yet how' : v.finding?.replaceAll('_', ' ');
  return what ? `${what} (${v.proven ? 'proven' : 'suspected'})` : '';
}

/** Which of two watches speaks, "" for a watch that is alone; `here`: no other is heard to, so that this page sounds. */
export function speakingText(s: Speaking | undefined): { text: string; here: boolean; bad: boolean } {
  if (!s) return { text: '', here: true, bad: false };
  const other = s.other === null ? 'no other watch is heard' : `${s.other} stands by`;
  if (s.name === s.watch) return { text: `watch ${s.watch} speaks · ${other}`, here: true, bad: s.other === null };
  if (s.name !== null) return { text: `watch ${s.watch} is silent · ${s.name} speaks and sounds`, here: false, bad: false };
  return { text: `watch ${s.watch} is SILENT · none is heard that speaks${s.why ? `: ${s.why}` : ''}`, here: true, bad: true };
}
