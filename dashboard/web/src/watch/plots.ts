// What can be traced: the plots that are there from the start, and any quantity or
// channel, two of one unit to a plot.

import type { Display } from '../context';
import type { Channel, QuantityInfo } from '../frames';
import { columns } from '../ring';
import type { Model } from '../state';
import { type UnitSet, fixed, inUnit, scaleOf, signed, significant } from '../units';

export interface Line { column: string; name: string; show: (v: number) => string }
export interface Plot {
  title: string;
  unit: string;
  lines: Line[];
  convert: (v: number) => number;
  /** Values that the axis always covers, so that it seldom moves. */
  cover: (m: Model) => [number, number];
  limits: (m: Model) => { v: number; name: string }[];
}

export const same = (v: number): number => v;
const none = (): { v: number; name: string }[] => [];

/** Keys of the plots that are drawn until a viewer chooses others. */
export const standardPlots: readonly string[] = ['ratio', 'margin', 'egt', 'flow', 'speed'];
export const standardTitles: Record<string, string> = { ratio: 'NPR and choke NPR', margin: 'Choke margin', egt: 'Indicated EGT with limits', flow: 'W8 and metered flow', speed: 'Rotor speed' };

/** More plots than this leave none of them readable. */
export const mostPlots = 8;

const standard = (key: string, u: UnitSet): Plot | null => {
  switch (key) {
    case 'ratio': return {
      title: 'Pressure ratio', unit: '', convert: same, cover: () => [1, 2.5], limits: none,
      lines: [{ column: 'npr', name: 'NPR', show: (v) => fixed(v, 3) }, { column: 'choke_npr', name: 'choke NPR', show: (v) => fixed(v, 3) }],
    };
    case 'margin': return {
      title: 'Choke margin', unit: '%', convert: same, cover: () => [-50, 25], limits: () => [{ v: 0, name: '' }],
      lines: [{ column: 'choke_margin_percent', name: 'margin', show: (v) => signed(v, 1) }],
    };
    case 'egt': return {
      title: 'Indicated EGT', unit: u.temperature.sign, convert: u.temperature.of, cover: (m) => [0, u.temperature.of(Math.max(1073, ...m.bands.map((b) => b.limit_k + 70)))],
      limits: (m) => m.bands.map((b) => ({ v: u.temperature.of(b.limit_k), name: `${fixed(u.temperature.of(b.limit_k), 0)} ${b.kind}` })),
      lines: [{ column: 'egt_indicated_k', name: 'EGT', show: (v) => fixed(v, 0) }],
    };
    case 'flow': return {
      title: 'Flow', unit: u.flow.sign, convert: u.flow.of, cover: () => [0, u.flow.of(8)], limits: none,
      lines: [{ column: 'mass_flow_kg_s', name: 'W8', show: (v) => fixed(v, 2) }, { column: 'independent_flow_kg_s', name: 'metered', show: (v) => fixed(v, 2) }],
    };
    case 'speed': return {
      title: 'Rotor speed', unit: 'rpm', convert: same, cover: (m) => [0, m.armedAbove ? m.armedAbove * 1.15 : 1000],
      limits: (m) => (m.armedAbove ? [{ v: m.armedAbove, name: 'choke armed above' }] : []),
      lines: [{ column: 'speed_rpm', name: 'speed', show: (v) => fixed(v, 0) }],
    };
    default: return null;
  }
};

/** One line of a viewer's own: its name, its unit and how it is converted. */
interface Own { column: string; name: string; unit: string; convert: (v: number) => number }

function own(key: string, u: UnitSet, channels: readonly Channel[], quantities: readonly QuantityInfo[]): Own | null {
  const channel = channels.find((c) => key === `channel.${c.id}`);
  if (channel) {
    const unit = u.channel(channel.unit);
    const convert = (v: number): number => inUnit(v, unit, channel.dimension).value;
    return { column: key, name: channel.id, unit: inUnit(0, unit, channel.dimension).sign, convert };
  }
  const quantity = quantities.find((q) => q.name === key);
  if (!quantity) return null;
  const s = scaleOf(u, quantity.unit, quantity.name);
  return { column: key, name: quantity.title, unit: s.sign, convert: /_u95$/.test(key) ? s.span : s.of };
}

/** The plots of some keys; what this rig does not have is left out. */
export function plotsOf(keys: readonly string[], u: UnitSet, channels: readonly Channel[], quantities: readonly QuantityInfo[]): Plot[] {
  const out: Plot[] = [];
  const open: { plot: Plot; unit: string; kind: string }[] = []; // plots with room for a second line
  for (const key of keys) {
    const plot = standard(key, u);
    if (plot) out.push(plot);
    const line = plot ? null : own(key, u, channels, quantities);
    if (!line) continue;
    const kind = key.startsWith('channel.') ? 'channel' : 'quantity';
    const drawn: Line = { column: key, name: line.name, show: (v) => significant(v, 5) };
    const at = line.unit === '' ? -1 : open.findIndex((o) => o.unit === line.unit && o.kind === kind);
    if (at >= 0) {
      const [first] = open.splice(at, 1);
      first?.plot.lines.push(drawn);
      if (first) first.plot.title = kind === 'channel' ? 'Channels' : 'Quantities';
      continue;
    }
    const fresh: Plot = { title: line.name, unit: line.unit, lines: [drawn], convert: line.convert, cover: () => [Infinity, -Infinity], limits: none };
    out.push(fresh);
    open.push({ plot: fresh, unit: line.unit, kind });
  }
  return out.slice(0, mostPlots);
}

/** The plots that a viewer has chosen. */
export const chosenPlots = (d: Display): Plot[] => plotsOf(d.plots(), d.units(), d.model().channels, d.model().quantities);

/** The columns that the ring needs for some keys. */
export const columnsOf = (keys: readonly string[]): string[] => [...columns, ...keys.filter((k) => !standardPlots.includes(k) && !columns.includes(k))];
