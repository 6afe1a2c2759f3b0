// Two stored runs beside each other: the old one solid, the new one dashed.

import uPlot from 'uplot';
import { api } from '../api';
import { type Drawn, changeText, drawn, valueAt } from '../compare';
import type { Display } from '../context';
import { type View, attr, column, h, text } from '../dom';
import type { Curve, CurvesCompared, Num, QuantityInfo, ScansCompared } from '../frames';
import type { Palette } from '../palette';
import { digits } from '../points';
import { dateClock, duration, seconds } from '../time';
import { type Scale, type UnitSet, fixed, scaleOf, signed } from '../units';
import { font } from '../watch/canvas';
import { type Stretch, zoomHelp, zoomed } from '../zoom';

const ways = [['', 'by time; the same records scan by scan'], ['time', 'by time from light-off'], ['mark', 'by time from a mark'], ['npr', 'over NPR'], ['referred_speed', 'over referred speed']] as const;
/** What is drawn over time before more is asked for. */
const first = ['choke_margin_percent', 'mass_flow_kg_s', 'egt_indicated_k', 'speed_rpm'];
const points = 1200;
const plotHeight = 130;

const isCurves = (r: ScansCompared | CurvesCompared): r is CurvesCompared => 'curves' in r;
const table = (q: string, columns: string[], rows: Node[], none: string): HTMLElement => h('div', { class: 'scroll', tabindex: '0', role: 'region', 'aria-label': q.replace('-', ' ') }, h('table', { class: 'list', 'data-q': q },
  h('thead', {}, h('tr', {}, ...columns.map(column))), h('tbody', {}, ...(rows.length > 0 ? rows : [h('tr', {}, h('td', { colspan: String(columns.length), class: 'extra' }, none))]))));
const num = (words: string): HTMLElement => h('td', { class: 'num' }, words);
const times = (t: Num): string => (t === null ? '–' : duration(t));

export function comparePage(d: Display, a: string, b: string): View {
  const by = h('select', { 'aria-label': 'Laid over each other', 'data-q': 'compare-by', onchange: () => void read() }, ...ways.map(([v, word]) => h('option', { value: v }, word)));
  const mark = h('input', { type: 'text', placeholder: 'text in the mark; empty: the first', 'aria-label': 'Text in the mark', maxlength: '200', 'data-q': 'compare-mark', onchange: () => void read() });
  const more = h('select', { 'aria-label': 'Draw also', 'data-q': 'compare-more', onchange: () => { if (more.value) names.push(more.value); void draw(); } });
  const reset = h('button', { type: 'button', 'data-q': 'zoom-reset', onclick: () => zoom(null) }, 'Reset zoom');
  const said = h('p', { role: 'status', 'data-q': 'compare-said' });
  const plots = h('div', { class: 'overlay', 'data-q': 'overlay', tabindex: '0', role: 'group', 'aria-label': `Plots of both runs: ${zoomHelp}`, onkeydown: (e: Event) => onKey(e as KeyboardEvent) });
  const tables = h('div', {});
  const el = h('div', { class: 'page compare' }, h('h1', {}, 'Two runs beside each other'),
    h('p', {}, h('span', { class: 'swatch s0', 'aria-hidden': 'true' }), 'old, solid: ', h('a', { href: `#/run/${encodeURIComponent(a)}` }, a), '  ·  ', h('span', { class: 'swatch s1', 'aria-hidden': 'true' }), 'new, dashed: ', h('a', { href: `#/run/${encodeURIComponent(b)}` }, b), '  ·  ',
      h('a', { href: `#/compare/${encodeURIComponent(b)}/${encodeURIComponent(a)}` }, 'exchange old and new')),
    h('div', { class: 'filter' }, by, mark, more, reset), said, plots, tables);

  const names = [...first];
  let reply: ScansCompared | CurvesCompared | null = null;
  let charts: uPlot[] = [];
  let drawnFor = '';
  let reading = new AbortController();
  const title = (name: string): string => d.model().quantities.find((q: QuantityInfo) => q.name === name)?.title ?? name;
  const observer = new ResizeObserver(() => { for (const c of charts) c.setSize({ width: (c.root.parentElement as HTMLElement).clientWidth, height: plotHeight }); });
  observer.observe(plots);

  async function read(): Promise<void> {
    reading.abort();
    const own = (reading = new AbortController());
    attr(said, 'class', 'extra');
    text(said, 'comparing…');
    attr(mark, 'hidden', by.value !== 'mark');
    try {
      reply = await api.compare(a, b, by.value, by.value === 'mark' ? mark.value.trim() : '', own.signal);
      text(said, isCurves(reply) ? `Curve and scatter of the old run, and where the new one lies${reply.steady_only ? '; steady scans only' : ''}.`
        : `${reply.same ? 'The same to the bit. ' : ''}${reply.by === 'records' ? 'The same records, scan by scan' : `Time from ${reply.zero}`}: ${reply.paired} scans of both, ${reply.only_a} only of the old, ${reply.only_b} only of the new.`);
    } catch (e) {
      if (own.signal.aborted) return;
      reply = null;
      attr(said, 'class', 'trouble');
      text(said, `Not compared: ${(e as Error).message}`);
    }
    await draw();
  }

  function clear(): void {
    for (const c of charts) c.destroy();
    charts = [];
    plots.replaceChildren();
  }

  /** Shows a stretch in all plots; null the whole. */
  function zoom(to: { min: number; max: number } | null): void {
    for (const c of charts) {
      const x = c.data[0];
      c.setScale('x', to ?? { min: x[0] as number, max: x[x.length - 1] as number });
    }
    attr(reset, 'disabled', to === null);
  }

  function onKey(e: KeyboardEvent): void {
    const c = charts[0];
    const x = c?.data[0];
    if (!c || !x || x.length < 2 || !reply || isCurves(reply) || e.ctrlKey || e.metaKey || e.altKey) return;
    const shown: Stretch = [c.scales['x']?.min ?? 0, c.scales['x']?.max ?? 0];
    const next = zoomed(e.key, shown, [x[0] as number, x[x.length - 1] as number]);
    if (next === undefined) return;
    e.preventDefault();
    zoom(next && { min: next[0], max: next[1] });
  }

  const axes = (p: Palette, values: (ticks: number[]) => string[]): uPlot.Axis[] => {
    const axis: uPlot.Axis = { stroke: p.soft, font: font(12), grid: { stroke: p.grid, width: 1 }, ticks: { show: false } };
    return [{ ...axis, size: 24, space: 80, values: (_c, t) => values(t) }, { ...axis, size: 56, space: 26, gap: 4 }];
  };

  /** A row of the overlay with its key; gives the box of the chart. */
  function row(name: string, sign: string, values: Node[]): HTMLElement {
    const box = h('div', { class: 'chart' });
    plots.append(h('div', { class: 'tracerow' }, h('div', { class: 'key' }, h('div', { class: 'keytitle', title: title(name) }, title(name)), sign ? h('div', { class: 'unit' }, sign) : '', ...values), box));
    return box;
  }

  async function draw(): Promise<void> {
    const [p, u] = [d.palette(), d.units()];
    drawnFor = `${u.system} ${p.ground}`;
    const r = reply;
    attr(more, 'hidden', !r || isCurves(r));
    attr(reset, 'hidden', !r || isCurves(r));
    if (!r) {
      clear();
      tables.replaceChildren();
      return;
    }
    if (isCurves(r)) {
      clear();
      for (const c of r.curves) curve(c, p, u);
      tables.replaceChildren(...curveTables(r, u));
      return;
    }
    more.replaceChildren(h('option', { value: '' }, 'draw also…'), ...r.differences.map((x) => x.name).concat(r.equal).filter((n) => !names.includes(n)).map((n) => h('option', { value: n }, title(n))));
    tables.replaceChildren(...scanTables(r, u));
    await overTime(r, p, u);
  }

  async function overTime(r: ScansCompared, p: Palette, u: UnitSet): Promise<void> {
    const own = reading;
    try {
      const series = await Promise.all([a, b].map(async (id) => {
        const run = await api.runSummary(id);
        return (await api.series(id, names, 0, (run.duration_s ?? 86_400) + 1, points, own.signal)).series;
      }));
      if (own.signal.aborted || r !== reply) return;
      clear();
      const sync = uPlot.sync(`compare ${Math.random()}`);
      for (const name of names) {
        const unit = series[0]?.[name]?.unit || series[1]?.[name]?.unit || '';
        const s = scaleOf(u, unit, name);
        const lines = [r.zero_a_s, r.zero_b_s].map((zero, i) => drawn(series[i]?.[name], zero, s.of)) as [Drawn, Drawn];
        const values = [0, 1, 2].map(() => h('span', { class: 'value' }, '–'));
        const box = row(name, s.sign, ['old ', 'new ', 'new − old '].map((word, k) => h('div', { class: 'keyline' }, k < 2 ? h('span', { class: `swatch s${k}`, 'aria-hidden': 'true' }) : '', word, values[k] as HTMLElement)));
        const line = (k: number): uPlot.Series => ({ stroke: k === 0 ? p.data : p.data2, width: 1, ...(k > 0 ? { dash: [6, 3] } : {}), points: { show: false }, spanGaps: false });
        charts.push(new uPlot({
          width: Math.max(200, box.clientWidth), height: plotHeight, padding: [9, 20, 2, 0], legend: { show: false },
          cursor: { sync: { key: sync.key }, drag: { x: true, y: false, setScale: false }, points: { show: false }, y: false },
          scales: { x: { time: false } }, axes: axes(p, (t) => t.map((v) => (v < 0 ? `−${duration(-v)}` : duration(v)))), series: [{}, line(0), line(1)],
          hooks: {
            setSelect: [(c) => {
              if (c.select.width < 4) return;
              zoom({ min: c.posToVal(c.select.left, 'x'), max: c.posToVal(c.select.left + c.select.width, 'x') });
              c.setSelect({ left: 0, top: 0, width: 0, height: 0 }, false);
            }],
            setCursor: [(c) => {
              const left = c.cursor.left ?? -1;
              const t = left >= 0 ? c.posToVal(left, 'x') : NaN;
              const reach = Math.max(1, ((c.scales['x']?.max ?? 0) - (c.scales['x']?.min ?? 0)) / 200);
              const [old, now] = lines.map((l) => valueAt(l, t, reach)) as [Num, Num];
              const decimals = digits(null, old ?? now);
              [fixed(old, decimals), fixed(now, decimals), old === null || now === null ? '–' : signed(now - old, decimals)].forEach((v, k) => text(values[k] as HTMLElement, v));
            }],
          },
        }, uPlot.join([[lines[0].t, lines[0].y], [lines[1].t, lines[1].y]]), box));
      }
      attr(reset, 'disabled', true);
    } catch (e) {
      if (own.signal.aborted) return;
      clear();
      plots.append(h('p', { class: 'trouble' }, `The traces could not be read: ${(e as Error).message}`));
    }
  }

  /** The curve of the old run with twice its scatter, the new run as points on it. */
  function curve(c: Curve, p: Palette, u: UnitSet): void {
    const [x, y] = [scaleOf(u, c.x_unit, c.x), scaleOf(u, c.y_unit, c.y)];
    const bins = c.bins.filter((bin) => bin.x !== null);
    const of = (s: Scale, v: Num): Num => (v === null ? null : s.of(v));
    const off = (bin: Curve['bins'][number], way: number): Num => (bin.baseline === null || bin.scatter === null ? null : y.of(bin.baseline + way * 2 * bin.scatter));
    const box = row(c.y, y.sign, [h('div', { class: 'extra' }, `over ${title(c.x)}${x.sign && `, ${x.sign}`}`)]);
    charts.push(new uPlot({
      width: Math.max(200, box.clientWidth), height: plotHeight, padding: [9, 20, 2, 0], legend: { show: false },
      cursor: { drag: { x: false, y: false }, points: { show: false }, y: false },
      scales: { x: { time: false } }, axes: axes(p, (t) => t.map(String)),
      series: [{}, { stroke: p.data, width: 1, points: { show: false } }, { stroke: p.line, width: 1, points: { show: false } }, { stroke: p.line, width: 1, points: { show: false } },
        { stroke: p.text, width: 1, dash: [6, 3], points: { show: true, size: 6, stroke: p.text, fill: p.panel } }],
      bands: [{ series: [2, 3], fill: p.choked }],
    }, [bins.map((bin) => x.of(bin.x as number)), bins.map((bin) => of(y, bin.baseline)), bins.map((bin) => off(bin, 1)), bins.map((bin) => off(bin, -1)), bins.map((bin) => of(y, bin.value))] as uPlot.AlignedData, box));
  }

  function scanTables(r: ScansCompared, u: UnitSet): Node[] {
    return [
      h('h2', {}, 'Largest differences, new − old'),
      table('differences', ['Quantity', '>Largest', '>at', '>old', '>new', '>Mean', '>RMS', 'Unit', '>only old', '>only new'], r.differences.map((x) => {
        const s = scaleOf(u, x.unit, x.name);
        const span = (v: Num): Num => (v === null ? null : s.span(v));
        const dec = Math.min(6, digits(x.largest === null ? null : Math.abs(s.span(x.largest)), null));
        return h('tr', {}, h('th', { scope: 'row' }, title(x.name)), num(signed(span(x.largest), dec)), num(times(x.at_s)), num(x.a === null ? '–' : fixed(s.of(x.a), dec)), num(x.b === null ? '–' : fixed(s.of(x.b), dec)),
          num(signed(span(x.mean), dec)), num(fixed(span(x.rms), dec)), h('td', {}, s.sign), num(x.only_a ? String(x.only_a) : ''), num(x.only_b ? String(x.only_b) : ''));
      }), 'No quantity differs'),
      h('p', { class: 'extra' }, r.equal.length > 0 ? `The same to the bit in all scans: ${r.equal.map(title).join('; ')}.` : ''),
      h('h2', {}, 'Alarms'),
      table('alarm-changes', ['Alarm', 'Change'], r.alarms.map((x) => h('tr', {}, h('th', { scope: 'row' }, x.title), h('td', {}, `${x.change}: ${changeText(x)}`))), 'None appears, vanishes or moves'),
      h('p', { class: 'extra' }, `${r.alarms_same} raised at the same instant in both.`),
    ];
  }

  function curveTables(r: CurvesCompared, u: UnitSet): Node[] {
    const pair = (s: Scale, v: Num, u95: Num, f: (v: Num, dec: number) => string, of: (v: number) => number): string => {
      const dec = digits(u95 === null ? null : s.span(u95), v === null ? null : of(v));
      return v === null ? '–' : `${f(of(v), dec)}${u95 === null ? '' : ` ± ${fixed(s.span(u95), dec)}`}`;
    };
    return [
      h('h2', {}, 'The new run against the curve of the old'),
      table('departures', ['Quantity', '>At', '>Old', '>New', '>Departure ± U95', 'Unit', ''], r.curves.flatMap((c) => {
        const [x, y] = [scaleOf(u, c.x_unit, c.x), scaleOf(u, c.y_unit, c.y)];
        return c.bins.filter((bin) => bin.value !== null).map((bin) => h('tr', {}, h('th', { scope: 'row' }, title(c.y)), num(pair(x, bin.x, null, fixed, x.of)), num(pair(y, bin.baseline, null, fixed, y.of)), num(pair(y, bin.value, null, fixed, y.of)),
          num(pair(y, bin.departure, bin.departure_u95, signed, y.span)), h('td', {}, y.sign), h('td', {}, bin.beyond ? '◆ beyond its uncertainty' : '')));
      }), 'The new run has no scan within the range of the old'),
      h('h2', {}, 'From run to run'),
      table('drift', ['Run', 'Started', '>Effective area', '>Drift, %', '>EGT margin'], r.runs.map((x) => h('tr', {}, h('th', { scope: 'row' }, x.run), h('td', {}, `${dateClock(seconds(x.started))}`),
        num(`${pair(u.area, x.effective_area_m2, x.effective_area_m2_u95, fixed, u.area.of)} ${u.area.sign}`), num(x.area_drift_percent_u95 === null ? signed(x.area_drift_percent, 3) : pair(scaleOf(u, '%', ''), x.area_drift_percent, x.area_drift_percent_u95, signed, (v) => v)),
        num(x.egt_margin_k === null ? '–' : `${fixed(u.difference.of(x.egt_margin_k), 1)} ${u.difference.sign}`))), 'Not known'),
    ];
  }

  void read();
  return {
    el,
    update() {
      if (reply && drawnFor !== `${d.units().system} ${d.palette().ground}`) void draw();
    },
    destroy() {
      reading.abort();
      observer.disconnect();
      clear();
    },
  };
}
