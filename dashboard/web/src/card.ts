// The test card in words: what a point asks for, how far off it is, and what hinders it.

import type { Card, CardNow, CardPoint, CardTarget, Num, TakenPoint } from './frames';
import { digits } from './points';
import { type UnitSet, few, fixed, scaleOf, signed, significant } from './units';
import { reasonWord } from './words';

/** The card of a frame, with the values that are known of its points. */
export function withFrame(before: Card | null, card: Card | null): Card | null {
  if (!card) return null;
  const known = new Map((before?.taken ?? []).map((p) => [p.number, p.values]));
  return { ...card, taken: (card.taken ?? []).map((p) => ({ ...p, values: p.values ?? known.get(p.number) ?? null })) };
}

/** The card with a point that was taken or judged. */
export function withPoint(card: Card | null, point: TakenPoint): Card | null {
  if (!card) return null;
  return { ...card, taken: [...(card.taken ?? []).filter((p) => p.number !== point.number), point].sort((a, b) => a.number - b.number) };
}

export const cardName = (c: { title: string; number: string; revision: string }): string => [c.number, c.revision, c.title].filter(Boolean).join(' ');

/** The point that is to be taken next. */
export const currentPoint = (c: Card): CardPoint | null => c.points[c.current] ?? null;

/** Numbers that were taken and wait for a verdict. */
export const awaiting = (c: Card): TakenPoint[] => (c.taken ?? []).filter((p) => p.status === 'taken');

/** A number that was chosen, without trailing zeros. */
const chosen = (v: number): string => significant(v, 6).replace(/(\.\d*?)0+$/, '$1').replace(/\.$/, '');
const unit = (sign: string): string => (sign ? ` ${sign}` : '');

/** What is asked of a quantity, in a viewer's units: "20240 ± 66 rpm", "above 5 %". */
export function askedFor(t: CardTarget, set: UnitSet): string {
  const scale = scaleOf(set, t.unit, t.quantity);
  const of = (v: number): string => chosen(scale.of(v));
  if (t.target !== null) return `${of(t.target)}${t.tolerance === null ? '' : ` ± ${chosen(scale.span(t.tolerance))}`}${unit(scale.sign)}`;
  if (t.low !== null && t.high !== null) return `${of(t.low)} … ${of(t.high)}${unit(scale.sign)}`;
  return t.low !== null ? `above ${of(t.low)}${unit(scale.sign)}` : t.high !== null ? `below ${of(t.high)}${unit(scale.sign)}` : '';
}

/** The present value of a target and how far off it is, to a hundredth of the tolerance or about four digits. */
export function distance(t: CardTarget, now: { value: Num; off: Num; off_tolerances: Num; inside: boolean } | undefined, set: UnitSet): { value: string; off: string } {
  if (!now || now.value === null) return { value: '–', off: 'not known' };
  const scale = scaleOf(set, t.unit, t.quantity);
  const decimals = t.tolerance === null ? digits(null, scale.of(now.value) * 10) : digits(scale.span(t.tolerance), null);
  const value = `${fixed(scale.of(now.value), decimals)}${unit(scale.sign)}`;
  if (now.inside || now.off === null) return { value, off: now.inside ? 'inside' : 'outside' };
  return { value, off: `${signed(scale.span(now.off), decimals)}${now.off_tolerances === null ? '' : `, ${fixed(Math.abs(now.off_tolerances), 1)} × tolerance`}` };
}

/** Whether the current point is stabilised, and if not why. */
export function standing(p: CardPoint, now: CardNow | null | undefined, set: UnitSet): string {
  if (!now) return 'no data';
  const target = (p.targets ?? []).find((t) => t.quantity === now.quantity);
  const title = target?.title ?? now.quantity.replaceAll('_', ' ');
  const rest = now.averaging && now.averaging_left_s !== null && now.averaging_left_s > 0 ? `, averaging: ${fixed(now.averaging_left_s, 0)} s left` : '';
  if (now.stabilised) return `● stabilised${rest}`;
  switch (now.why) {
    case 'target': return `○ ${title} is outside its target`;
    case 'channel': return `○ ${now.channel} is not good`;
    case 'soak': return `○ soaking: ${fixed(now.soak_left_s, 0)} s left`;
    case 'unsteady': {
      const slope = target && now.slope !== null ? `, ${now.slope > 0 ? '+' : ''}${few(scaleOf(set, target.unit, target.quantity).span(now.slope))} ${scaleOf(set, target.unit, target.quantity).sign}/s` : '';
      return `○ ${title} is not steady: ${reasonWord(now.steady_reason)}${slope}`;
    }
    default: return '○ no data';
  }
}

/** Soak, averaging and who takes it. */
export const howTaken = (p: CardPoint): string => `soak ${chosen(p.soak_s)} s, average ${chosen(p.average_s)} s, ${p.automatic ? 'taken by itself' : 'taken by hand'}${p.expect_choke ? `, choke watch ${p.expect_choke}` : ''}`;
