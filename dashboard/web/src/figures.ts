// The figures of how the alarms of a run did, as lines of a table.

import { priorityLook } from './alarms';
import type { AlarmFigures, Priority } from './frames';
import { clock, seconds } from './time';
import { fixed } from './units';

export interface Line { name: string; value: string; target: string; met: boolean | null; source: string }

/** Names of figures that have a target. */
const titles: Record<string, string> = {
  per_10_min: 'Alarms in 10 min, mean', peak_10_min: 'Alarms in 10 min, most', standing_peak: 'Standing, most', standing_mean: 'Standing, mean', chattering: 'Chattering rules',
  share_warning: 'Share of warnings', share_caution: 'Share of cautions', share_advisory: 'Share of advisories', acknowledged_after_s_median: 'Acknowledged after, median',
};

const many: Record<Priority, string> = { warning: 'Warnings', caution: 'Cautions', advisory: 'Advisories', note: 'Notes' };

const percent = (v: number | null | undefined): string => (typeof v === 'number' ? `${fixed(v * 100, 0)} %` : '–');

/** The figures as lines of a table, each with its target where there is one. */
export function figureLines(f: AlarmFigures): Line[] {
  const targets = new Map((f.targets ?? []).map((t) => [t.figure, t]));
  const line = (figure: string, value: string, name = titles[figure] ?? figure.replaceAll('_', ' ')): Line => {
    const t = targets.get(figure);
    targets.delete(figure);
    return { name, value, target: t ? (figure.startsWith('share') ? `about ${percent(t.target)}` : t.target === 0 ? 'none' : `≤ ${fixed(t.target, t.target % 1 === 0 ? 0 : 2)}`) : '', met: t?.met ?? null, source: t?.source ?? '' };
  };
  const out = [
    line('raised', String(f.raised), 'Raised'),
    line('per_10_min', fixed(f.per_10_min, 1)),
    line('peak_10_min', `${fixed(f.peak_10_min, 0)}${f.peak_at ? ` at ${clock(seconds(f.peak_at))}` : ''}`),
    line('standing_now', String(f.standing_now), 'Standing now'),
    line('standing_peak', String(f.standing_peak)),
    line('standing_mean', fixed(f.standing_mean, 1)),
    line('chattering', (f.chattering ?? []).length === 0 ? '0' : (f.chattering ?? []).map((c) => `${c.rule} ${c.times}×`).join(', ')),
    line('acknowledged_after_s_median', f.acknowledged_after_s_median === null ? '–' : `${fixed(f.acknowledged_after_s_median, 0)} s`),
    ...(typeof f.stale === 'number' ? [line('stale', String(f.stale), 'Stale: standing for long')] : []),
    line('shelved', String(f.shelved), 'Shelved'),
    line('out_of_service', String(f.out_of_service), 'Out of service'),
  ];
  for (const p of Object.keys(priorityLook) as Priority[]) {
    const share = f.by_priority?.[p];
    if (share) out.push(line(`share_${p}`, `${share.raised} (${percent(share.share)})`, `${priorityLook[p].shape} ${many[p]}`));
  }
  // A target of a newer server: shown without its figure.
  for (const t of [...targets.values()]) out.push(line(t.figure, '–'));
  return out;
}
