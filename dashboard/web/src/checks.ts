// The checks of the data system before and after a run.

import type { CheckItem, CheckSet, Checks } from './frames';
import { type UnitSet, few, scaleOf } from './units';

const none: Checks = { before: null, after: null, running: null, window_s: 10, ticks: [] };

/** The checks with those of a frame. */
export function withSet(checks: Checks | null, set: CheckSet): Checks {
  const all = checks ?? none;
  if (set.state === 'running') return { ...all, running: set };
  return { ...all, running: null, [set.phase]: set };
}

const kinds: Record<string, string> = {
  signal: 'Signal', zero: 'Zero', temperature: 'Temperatures against each other', calibration: 'Calibration', clock: 'Clock', broker: 'Broker', input_path: 'Input path', sources: 'Sources',
  recording: 'Recording', disk: 'Disk', configuration: 'Rig and rule files', tick: 'By hand', shift: 'Zero shift',
};
export const kindWord = (kind: string): string => kinds[kind] ?? kind.replaceAll('_', ' ');

/** The items by kind, in their order; those that did not pass are not moved. */
export function byKind(items: readonly CheckItem[]): { kind: string; items: CheckItem[] }[] {
  const out: { kind: string; items: CheckItem[] }[] = [];
  for (const item of items) {
    const group = out.find((g) => g.kind === item.kind);
    if (group) group.items.push(item); else out.push({ kind: item.kind, items: [item] });
  }
  return out;
}

/** A figure of an item: an error or a scatter, in pascal where a viewer reads SI, for it is small. */
export function figure(item: CheckItem, v: number | null, set: UnitSet): string {
  if (v === null) return '–';
  const scale = item.unit === 'Pa' && set.system === 'si' ? { span: (x: number) => x, sign: 'Pa' } : scaleOf(set, item.unit, 'difference');
  return `${few(scale.span(v))}${scale.sign ? ` ${scale.sign}` : ''}`;
}

/** What stands over a result while there is none to show. */
export function stateText(set: CheckSet): string {
  switch (set.state) {
    case 'running': return 'The check goes on.';
    case 'broken_off': return `The check was broken off${set.why ? `: ${set.why}` : ''}.`;
    default: return set.summary;
  }
}
