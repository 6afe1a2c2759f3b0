// Traces on one shared time axis: event time. Shading marks choked periods; flags mark
// alarms and the operator's marks. What is drawn is a viewer's choice.

import uPlot from 'uplot';
import 'uplot/dist/uPlot.min.css';
import { priorityLook } from '../alarms';
import type { Display } from '../context';
import { type View, attr, h, text } from '../dom';
import { type Flag, type Model, believable } from '../state';
import type { Palette } from '../palette';
import { Decimator, chokedSpans, gapSeconds } from '../ring';
import { clock, facility, signedClock } from '../time';
import { type UnitSet, age, fixed } from '../units';
import { type Stretch, zoomHelp, zoomed as afterKey } from '../zoom';
import { font } from './canvas';
import { picker } from './picker';
import { type Plot, chosenPlots } from './plots';

const spans = [60, 120, 300, 600];
/** Charts are drawn for this long in a frame, ms; the others have the next one. */
const drawTime = 6;

/** The smallest of 1, 2, 5 times a power of ten that is at least v. */
function niceStep(v: number): number {
  const p = 10 ** Math.floor(Math.log10(v));
  return p * (v <= p ? 1 : v <= 2 * p ? 2 : v <= 5 * p ? 5 : 10);
}

/** The axis range over data and cover, in whole steps so that it does not creep. */
export function axisRange(low: number, high: number, cover: [number, number]): [number, number] {
  const [a, b] = [Math.min(low, cover[0]), Math.max(high, cover[1])];
  if (!(a <= b)) return [0, 1]; // nothing to show yet
  const step = niceStep((b - a || 1) / 8);
  return [a >= cover[0] ? cover[0] : Math.floor(a / step) * step, b <= cover[1] ? cover[1] : Math.ceil(b / step) * step];
}

export interface Traces extends View {
  /** Freezes the picture, not the data behind it. */
  frozen(): boolean;
}

/** `tools` stand at the end of the bar; `make` gives the plots. */
export function traces(d: Display, tools: HTMLElement | null, make: (d: Display) => Plot[] = chosenPlots): Traces {
  const host = h('div', { class: 'plots', tabindex: '0', role: 'group', 'aria-label': `Traces: ${zoomHelp}; with shift the arrow keys move the cursor`, 'data-q': 'plots', onkeydown: (e: Event) => onKey(e as KeyboardEvent), onblur: () => rows[0]?.chart.setCursor({ left: -10, top: -10 }) });
  const at = h('span', { class: 'at' });
  let span = 120;
  let frozenAt = NaN;
  let zoomed: Stretch | null = null;
  let held = NaN; // the end of the axis while a stretch is being drawn on it
  const choices = spans.map((s) => h('button', { type: 'button', 'aria-pressed': String(s === span), onclick: () => choose(s) }, `${s} s`));
  const freeze = h('button', { type: 'button', 'aria-pressed': 'false', onclick: () => { frozenAt = Number.isNaN(frozenAt) ? d.model().newest : NaN; } }, 'Freeze');
  const whole = h('button', { type: 'button', 'data-q': 'trace-reset', hidden: true, title: 'Also by a double click', onclick: () => { zoomed = null; } }, 'Reset zoom');
  const pick = picker(d);
  const bar = h('div', { class: 'tracebar' }, h('span', { class: 'label' }, 'Last'), ...choices, freeze, whole, pick.el, at, tools ?? '');
  const el = h('section', { class: 'traces', 'aria-label': 'Traces' }, bar, host);

  function choose(s: number): void {
    span = s;
    zoomed = null;
    choices.forEach((b, i) => attr(b, 'aria-pressed', String(spans[i] === span)));
  }

  /** The end of the axis. */
  function axisEnd(): number {
    if (zoomed) return zoomed[1];
    return !Number.isNaN(frozenAt) ? frozenAt : Number.isNaN(held) ? d.model().newest : held;
  }

  function onKey(e: KeyboardEvent): void {
    const m = d.model();
    if (e.ctrlKey || e.metaKey || e.altKey || m.ring.size === 0) return;
    const end = axisEnd();
    const shown: Stretch = zoomed ?? [end - span, end];
    if (e.shiftKey && (e.key === 'ArrowLeft' || e.key === 'ArrowRight')) point(e.key === 'ArrowLeft' ? -1 : 1);
    else {
      const next = afterKey(e.key, shown, [Math.min(shown[0], m.ring.t(0)), Math.max(end, m.newest)]);
      if (next === undefined) return;
      zoomed = next;
    }
    e.preventDefault();
    e.stopPropagation(); // in a replay the arrow keys step scans elsewhere
  }

  /** Moves the cursor by a hundredth of the axis; it begins at the end. */
  function point(way: -1 | 1): void {
    const first = rows[0]?.chart;
    if (!first) return;
    const wide = first.over.clientWidth;
    const left = (first.cursor.left ?? -1) < 0 ? wide - 1 : first.cursor.left as number;
    first.setCursor({ left: Math.max(0, Math.min(wide - 1, left + (way * wide) / 100)), top: 1 });
  }

  interface Row { el: HTMLElement; box: HTMLElement; width: number; plot: Plot; chart: uPlot; thin: Decimator; values: HTMLElement[] }
  let rows: Row[] = [];
  let round: { end: number; span: number; next: number } | null = null; // what of it is drawn
  let pal: Palette | null = null;
  let units: UnitSet | null = null;
  let drawn: readonly string[] | null = null;
  let known = NaN; // how many channels and quantities
  let [width, height] = [0, 0];
  let shading: [number, number][] = [];
  let flags: Flag[] = [];
  let hover: number | null = null; // time under the cursor, s
  const sync = uPlot.sync(`traces ${Math.random()}`);
  let frame = 0; // the request for the next part of a round
  const axisHeight = 24;

  const observer = new ResizeObserver(([entry]) => {
    if (!entry) return;
    [width, height] = [Math.floor(entry.contentRect.width), Math.floor(entry.contentRect.height)];
    layout();
  });
  observer.observe(host);
  host.addEventListener('mousedown', (e) => e.preventDefault()); // a press draws a stretch, it does not take the keys
  host.addEventListener('pointerdown', () => { held = d.model().newest; });
  const letGo = (): void => { held = NaN; };
  window.addEventListener('pointerup', letGo);

  function layout(): void {
    if (width < 200 || height < 150 || rows.length === 0) return;
    const each = Math.floor((height - axisHeight) / rows.length);
    rows.forEach((r, i) => {
      const hgt = each + (i === rows.length - 1 ? axisHeight : 0);
      r.el.style.height = `${hgt}px`;
      r.width = r.box.clientWidth; // kept: asking at each draw would lay the page out each time
      if (r.width > 50) r.chart.setSize({ width: r.width, height: hgt });
    });
  }

  function build(p: Palette): void {
    for (const r of rows) r.chart.destroy();
    round = null;
    cancelAnimationFrame(frame);
    host.replaceChildren();
    const plots = make(d);
    host.dataset['rows'] = String(plots.length);
    rows = plots.map((plot, i) => {
      const lastRow = i === plots.length - 1;
      const values = plot.lines.map(() => h('span', { class: 'value' }, '–'));
      const box = h('div', { class: 'chart' });
      const row = h('div', { class: 'tracerow' },
        h('div', { class: 'key' }, h('div', { class: 'keytitle', title: plot.title }, plot.title, plot.unit ? h('span', { class: 'unit' }, ` ${plot.unit}`) : ''),
          ...plot.lines.map((l, k) => h('div', { class: 'keyline' }, h('span', { class: `swatch s${k}`, 'aria-hidden': 'true' }), plot.lines.length > 1 ? `${l.name} ` : '', values[k] as HTMLElement))),
        box);
      host.append(row);
      const axis: uPlot.Axis = { stroke: p.soft, font: font(12), grid: { stroke: p.grid, width: 1 }, ticks: { show: false } };
      const chart = new uPlot({
        width: Math.max(60, box.clientWidth || width - 130), height: 80, padding: [9, 30, 5, 0],
        legend: { show: false },
        cursor: { sync: { key: sync.key }, drag: { x: true, y: false, setScale: false }, points: { show: false }, y: false, bind: { dblclick: () => () => { zoomed = null; return null; } } },
        tzDate: (t) => uPlot.tzDate(new Date(t * 1e3), 'Etc/UTC'),
        scales: {
          x: { time: true },
          y: { range: (_u, low, high) => axisRange(low ?? Infinity, high ?? -Infinity, plot.cover(d.model())) },
        },
        axes: [
          { ...axis, show: true, size: lastRow ? axisHeight : 0, values: lastRow ? (_u, ticks) => ticks.map(clock) : () => [], space: 90 },
          { ...axis, size: 46, space: 24, gap: 4, values: (_u, ticks) => ticks.map((v) => fixed(v, v % 1 === 0 ? 0 : 1)) },
        ],
        // One pixel wide: a browser without a graphics processor draws that three times as fast as 1.5.
        series: [{}, ...plot.lines.map((_, k) => ({ stroke: k === 0 ? p.data : p.data2, width: 1, ...(k > 0 ? { dash: [6, 3] } : {}), points: { show: false }, spanGaps: false }))],
        hooks: {
          drawClear: [(u) => paintShading(u, p)],
          draw: [(u) => paintLimits(u, plot, p), (u) => paintFlags(u, p, i === 0)],
          setSelect: [(u) => {
            if (u.select.width < 4) return;
            zoomed = [u.posToVal(u.select.left, 'x'), u.posToVal(u.select.left + u.select.width, 'x')];
            u.setSelect({ left: 0, top: 0, width: 0, height: 0 }, false);
          }],
          setCursor: [(u) => {
            const left = u.cursor.left ?? -1;
            hover = left >= 0 ? u.posToVal(left, 'x') : null;
          }],
        },
      }, [[], ...plot.lines.map(() => [])] as unknown as uPlot.AlignedData, box);
      return { el: row, box, width: 0, plot, chart, thin: new Decimator(plot.lines.map((l) => l.column), plot.convert), values };
    });
    layout();
  }

  function paintShading(u: uPlot, p: Palette): void {
    const { left, top, width: w, height: hgt } = u.bbox;
    u.ctx.fillStyle = p.panel;
    u.ctx.fillRect(left, top, w, hgt);
    u.ctx.fillStyle = p.choked;
    for (const [a, b] of shading) {
      const x0 = Math.max(left, u.valToPos(a, 'x', true));
      const x1 = Math.min(left + w, u.valToPos(b, 'x', true));
      if (x1 > x0) u.ctx.fillRect(x0, top, x1 - x0, hgt);
    }
  }

  function paintLimits(u: uPlot, plot: Plot, p: Palette): void {
    const { left, top, width: w, height: hgt } = u.bbox;
    const c = u.ctx;
    const ratio = uPlot.pxRatio;
    c.save();
    c.strokeStyle = p.soft;
    c.fillStyle = p.soft;
    c.lineWidth = ratio;
    c.font = font(11 * ratio);
    c.textAlign = 'left';
    c.textBaseline = 'bottom';
    const limits = plot.limits(d.model()).sort((a, b) => a.v - b.v);
    for (const l of limits) {
      const y = u.valToPos(l.v, 'y', true);
      if (y < top || y > top + hgt) continue;
      c.setLineDash(l.name ? [2 * ratio, 3 * ratio] : []);
      c.beginPath();
      c.moveTo(left, y);
      c.lineTo(left + w, y);
      c.stroke();
    }
    const highest = limits[limits.length - 1]; // limits lie close: one text above them all
    if (highest?.name) c.fillText(limits.map((l) => l.name).join(' · '), left + 4 * ratio, u.valToPos(highest.v, 'y', true) - ratio);
    c.restore();
  }

  function paintFlags(u: uPlot, p: Palette, withShape: boolean): void {
    const { left, top, width: w, height: hgt } = u.bbox;
    const c = u.ctx;
    const ratio = uPlot.pxRatio;
    c.save();
    c.font = font(12 * ratio, 600);
    c.textAlign = 'center';
    c.textBaseline = 'top';
    c.lineWidth = ratio;
    c.setLineDash([]);
    for (const f of flags) {
      const x = u.valToPos(f.t, 'x', true);
      if (x < left || x > left + w) continue;
      const colour = f.kind === 'warning' ? p.warningInk : f.kind === 'caution' ? p.cautionInk : p.soft;
      c.strokeStyle = c.fillStyle = colour;
      c.beginPath();
      c.moveTo(x, top + (withShape ? 14 * ratio : 0));
      c.lineTo(x, top + hgt);
      c.stroke();
      if (withShape) c.fillText(f.kind === 'mark' ? '⚑' : priorityLook[f.kind].shape, x, top);
    }
    c.restore();
  }

  /** Draws the next charts of the round, and asks for a frame for those that are left. */
  function drawSome(): void {
    const began = performance.now();
    const { ring } = d.model();
    while (round && performance.now() - began < drawTime) {
      const r = rows[round.next++];
      if (!r) {
        round = null;
        return;
      }
      const { end, span: shown } = round;
      const w = r.thin.window(ring, end, shown, Math.max(60, Math.floor(r.width / 2)));
      r.chart.batch(() => {
        r.chart.setData([w.t, ...w.y] as uPlot.AlignedData, false);
        r.chart.setScale('x', { min: end - shown, max: end });
      });
    }
    if (round) frame = requestAnimationFrame(drawSome);
  }

  function update(now: number): void {
    const { channels, quantities } = d.model(); // those of the rig come with the first hello
    if (d.palette() !== pal || d.units() !== units || d.plots() !== drawn || channels.length + quantities.length !== known) {
      [units, drawn, known] = [d.units(), d.plots(), channels.length + quantities.length];
      build((pal = d.palette()));
    }
    pick.update(now);
    const m = d.model();
    const isFrozen = !Number.isNaN(frozenAt);
    const end = axisEnd();
    attr(freeze, 'aria-pressed', String(isFrozen));
    if (!Number.isFinite(end) || width < 200) return;
    attr(whole, 'hidden', zoomed === null);
    attr(freeze, 'hidden', zoomed !== null);
    const wide = zoomed ? zoomed[1] - zoomed[0] : span;
    const start = end - wide;
    if (!round) {
      shading = chokedSpans(m.ring, start, end);
      flags = m.flags.filter((f) => f.t >= start && f.t <= end);
      round = { end, span: wide, next: 0 };
      drawSome();
    }
    const cursor = hover !== null ? hover : null;
    const past = cursor !== null || isFrozen || zoomed !== null; // values of a chosen instant; otherwise they claim to be present
    const shown = past || believable(d.fresh(now));
    const atRow = !shown ? -1 : cursor === null ? m.ring.lower(end + 1e-6) - 1 : nearest(m, cursor, wide);
    for (const r of rows) {
      r.plot.lines.forEach((l, i) => {
        const k = m.ring.names.indexOf(l.column);
        const v = atRow >= 0 && k >= 0 ? m.ring.value(k, atRow) : NaN;
        text(r.values[i] as HTMLElement, Number.isNaN(v) ? '–' : l.show(r.plot.convert(v)));
      });
    }
    text(at, cursor !== null && atRow >= 0 ? `at ${signedClock(m.ring.t(atRow))}` : zoomed ? `ZOOMED to ${age(wide)}` : isFrozen ? `FROZEN at ${signedClock(frozenAt)}` : `${facility.sign()}; shaded: choked`);
    attr(at, 'data-frozen', isFrozen || zoomed !== null);
  }

  /** The row at t; -1 in a gap. */
  function nearest(m: Model, t: number, shown: number): number {
    const i = m.ring.lower(t);
    const near = i > 0 && (i >= m.ring.size || t - m.ring.t(i - 1) < m.ring.t(i) - t) ? i - 1 : i;
    return near < m.ring.size && Math.abs(m.ring.t(near) - t) <= Math.max(gapSeconds, shown / 200) ? near : -1;
  }

  return {
    el,
    update,
    frozen: () => !Number.isNaN(frozenAt) || zoomed !== null,
    destroy() {
      observer.disconnect();
      window.removeEventListener('pointerup', letGo);
      pick.destroy();
      cancelAnimationFrame(frame);
      for (const r of rows) r.chart.destroy();
    },
  };
}
