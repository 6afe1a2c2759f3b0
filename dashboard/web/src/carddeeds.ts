// What people do to a test card.

import { type CardStep, api } from './api';
import { askForm } from './ask';
import type { Display } from './context';
import type { Card } from './frames';

/** Asks for the reason of a step of the card and sends it. */
export function step(d: Display, name: CardStep, e: { point?: number; number?: number }, question: string, action: string, optional = false): void {
  askForm(question, [{ name: 'reason', label: 'Reason', optional }], action, async (v) => { await api.cardStep(d.rig, name, { ...e, reason: v['reason'] ?? '' }, d.operator()); });
}

/** Takes the current point; one that is not stabilised only with a reason. */
export async function take(d: Display, c: Card): Promise<void> {
  const name = c.points[c.current]?.name ?? '';
  if (c.now?.stabilised) await api.cardStep(d.rig, 'take', {}, d.operator());
  else step(d, 'take', {}, `“${name}” is not stabilised. Take it all the same?`, 'Take the point');
}
