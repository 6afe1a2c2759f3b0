// The throat plane: NPR across, flow parameter W√(R T0)/(A p0) up. The curve of
// the present gas, with the nozzle's Cd in it, rises and goes flat past the critical
// NPR. The computed point lies on it by construction and is drawn hollow; only
// air flow + fuel flow gives an independent, solid point.

import { api } from '../api';
import type { Display } from '../context';
import { type View, attr, h, refill } from '../dom';
import type { PointFrame, ThroatCurve } from '../frames';
import { chokeBand } from '../interval';
import { columns } from '../ring';
import { believable } from '../state';
import { fixed, shown, significant } from '../units';
import { causeWord, sourceWord, standIns, stateLook } from '../words';
import { font, hatch, surface } from './canvas';

const trailSeconds = 60;
/** Semi-axes of the joint 95 % region of two normal errors over their single 95 % intervals: √χ²₂(0.95)/1.96. */
const jointRegion = Math.sqrt(5.991) / 1.96;
const nprColumn = columns.indexOf('npr');
const flowColumn = columns.indexOf('flow_parameter');

interface Gas { t: number; f: number; w: number }

/** The gas that a curve was made for, rounded so that noise does not ask for a new one. */
function gasOf(p: PointFrame | null): Gas | null {
  if (typeof p?.total_temperature_k !== 'number') return null;
  return {
    t: Math.min(1800, Math.max(200, Math.round(p.total_temperature_k / 10) * 10)),
    f: Math.round(Math.max(0, p.fuel_air_ratio ?? 0) * 1000) / 1000,
    w: Math.round(Math.max(0, p.water_air_ratio ?? p.humidity_ratio ?? 0) * 1000) / 1000,
  };
}

export function throatPlane(d: Display): View {
  const plane = surface('throat', 'Throat plane');
  const notes = h('div', { class: 'planenotes', 'data-q': 'plane-notes' }); // lower right, where no gas curve passes
  plane.el.append(notes);
  let curve: ThroatCurve | null = null;
  let curveGas = '';
  let curveOf: Gas | null = null;
  let asking = false;
  let askedAt = -Infinity;
  let spokenAt = -Infinity;

  function wantCurve(p: PointFrame | null, now: number): void {
    const gas = gasOf(p) ?? (curve ? null : { t: 290, f: 0, w: 0 });
    if (!gas || asking || now - askedAt < 1000) return;
    const key = `${gas.t}/${gas.f}/${gas.w}`;
    if (key === curveGas) return;
    asking = true;
    askedAt = now;
    api.throatCurve(d.rig, gas.t, gas.f, gas.w).then((c) => {
      curve = c;
      curveGas = key;
      curveOf = gas;
    }, () => undefined).finally(() => { asking = false; });
  }

  function update(now: number): void {
    const m = d.model();
    const p = m.point;
    wantCurve(p, now);
    const s = plane.begin();
    if (!s) return;
    const { c, width, height } = s;
    const pal = d.palette();
    const live = believable(d.fresh(now)) && p !== null;
    const npr = live ? p.npr ?? null : null;

    const ring = m.ring;
    const from = ring.size > 0 ? ring.lower(ring.t(ring.size - 1) - trailSeconds) : 0;
    let highest = 2.4;
    for (let i = from; i < ring.size; i += 8) highest = Math.max(highest, ring.value(nprColumn, i) || 0);
    const xMax = Math.ceil((highest + 0.1) * 2) / 2;
    const yMax = Math.max(0.8, Math.ceil(((live ? p.independent_flow_parameter ?? 0 : 0) + 0.02) * 10) / 10); // a fault may lift it far above the curve
    const [left, right, top, bottom] = [46, width - 10, 10, height - 36];
    const x = (v: number): number => left + ((v - 1) / (xMax - 1)) * (right - left);
    const y = (v: number): number => bottom - (v / yMax) * (bottom - top);

    c.fillStyle = pal.panel;
    c.fillRect(left, top, right - left, bottom - top);
    const choke = p?.choke_npr ?? null;
    if (choke !== null) {
      c.fillStyle = pal.choked;
      c.fillRect(x(Math.min(choke, xMax)), top, right - x(Math.min(choke, xMax)), bottom - top);
    }
    c.font = font(12);
    c.lineWidth = 1;
    c.fillStyle = pal.soft;
    c.strokeStyle = pal.grid;
    c.textAlign = 'center';
    c.textBaseline = 'top';
    for (let v = 1; v <= xMax + 1e-9; v += 0.25) {
      line(c, x(v), top, x(v), bottom);
      if (Math.abs(v * 2 - Math.round(v * 2)) < 1e-9) c.fillText(fixed(v, 1), x(v), bottom + 4);
    }
    c.textAlign = 'right';
    c.textBaseline = 'middle';
    for (let v = 0; v <= yMax + 1e-9; v += 0.2) {
      line(c, left, y(v), right, y(v));
      c.fillText(fixed(v, 1), left - 5, y(v));
    }
    c.textBaseline = 'bottom';
    c.textAlign = 'right';
    c.fillText('nozzle pressure ratio NPR', right, height - 2);
    c.save();
    c.translate(9, top);
    c.rotate(-Math.PI / 2);
    c.textBaseline = 'middle';
    c.textAlign = 'right';
    c.fillText(height < 230 ? 'W√(R T₀)/(A p₀)' : 'flow parameter W√(R T₀)/(A p₀)', 0, 0);
    c.restore();

    c.save();
    c.beginPath();
    c.rect(left, top, right - left, bottom - top);
    c.clip();
    if (choke !== null) {
      // Where the line lies against the point, within 95 %: the interval of the margin.
      const [below, over] = live ? chokeBand(p) : [0, 0];
      if (below + over > 0) {
        c.fillStyle = pal.data2;
        c.globalAlpha = 0.25;
        c.fillRect(x(choke - below), top, Math.max(1, x(choke + over) - x(choke - below)), bottom - top);
        c.globalAlpha = 1;
      }
      c.strokeStyle = pal.text;
      c.setLineDash([5, 4]);
      line(c, x(choke), top, x(choke), bottom);
      c.setLineDash([]);
    }
    if (curve) {
      c.strokeStyle = live ? pal.text : pal.data2;
      c.lineWidth = 1.5;
      c.beginPath();
      curve.npr.forEach((v, i) => {
        const f = curve?.flow_parameter[i];
        if (f !== undefined) c.lineTo(x(v), y(f));
      });
      const end = curve.flow_parameter[curve.flow_parameter.length - 1];
      if (end !== undefined) c.lineTo(right + 5, y(end));
      c.stroke();
    }

    if (ring.size > from) {
      const newest = ring.t(ring.size - 1);
      const stride = Math.max(1, Math.floor((ring.size - from) / 300));
      c.lineWidth = 2;
      c.strokeStyle = pal.data;
      for (let i = from + stride; i < ring.size; i += stride) {
        const [x0, y0, x1, y1] = [ring.value(nprColumn, i - stride), ring.value(flowColumn, i - stride), ring.value(nprColumn, i), ring.value(flowColumn, i)];
        if (Number.isNaN(x0 + y0 + x1 + y1)) continue;
        c.globalAlpha = 0.55 * (1 - (newest - ring.t(i)) / trailSeconds) * (live ? 1 : 0.4);
        line(c, x(x0), y(y0), x(x1), y(y1));
      }
      c.globalAlpha = 1;
    }

    if (live && npr !== null) {
      const independent = p.independent_flow_parameter ?? null;
      let region = ''; // half width of the flow in percent, for a region that the dot covers
      if (independent !== null) {
        const flow = p.independent_flow_kg_s ?? null;
        const flowU = p.independent_flow_kg_s_u95 ?? null;
        const share = flow !== null && flow > 0 && flowU !== null ? flowU / flow : null;
        const ux = p.npr_u95 ?? null;
        if (ux !== null && share !== null) {
          region = ` ± ${share < 0.0995 ? fixed(share * 100, 1) : share < 1 ? fixed(share * 100, 0) : '100 and more'} %`;
          c.beginPath();
          c.ellipse(x(npr), y(independent), Math.max(2, x(1 + ux * jointRegion) - x(1)), Math.max(2, y(0) - y(independent * share * jointRegion)), 0, 0, 2 * Math.PI);
          c.fillStyle = pal.data;
          c.globalAlpha = 0.22;
          c.fill();
          c.globalAlpha = 1;
          c.strokeStyle = pal.data;
          c.lineWidth = 1;
          c.stroke();
        }
        dot(c, x(npr), y(independent), 3);
        c.fillStyle = pal.data;
        c.fill();
      }
      const computed = p.flow_parameter ?? null;
      if (computed !== null) {
        dot(c, x(npr), y(computed), 7);
        c.strokeStyle = pal.data;
        c.lineWidth = 2.5;
        c.stroke();
      }
      // The labels keep clear of the curve: above and below the points at high flow,
      // to their right at low; a far independent point has its label beside it.
      const anchor = computed ?? independent;
      if (anchor !== null) {
        const flat = anchor > 0.55;
        const toLeft = x(npr) > right - 110;
        const far = independent !== null && Math.abs(y(independent) - y(anchor)) > 26;
        c.font = font(12, 600);
        c.textBaseline = 'middle';
        c.strokeStyle = pal.panel; // a halo, where a label crosses a line
        c.lineWidth = 4;
        c.lineJoin = 'round';
        const label = (words: string, colour: string, px: number, py: number, align: CanvasTextAlign): void => {
          c.textAlign = align;
          c.strokeText(words, px, py);
          c.fillStyle = colour;
          c.fillText(words, px, py);
        };
        const nearAxis = x(npr) - left < 90; // a label in the middle would be cut off there
        const [lx, align]: [number, CanvasTextAlign] = !flat || nearAxis ? [x(npr) + 14, 'left'] : toLeft ? [x(npr) + 8, 'right'] : [x(npr), 'center'];
        const low = Math.min(y(anchor) + 2, bottom - 25); // a point on the axis keeps its labels inside
        const under = independent !== null && y(anchor) - y(independent) > 9; // the computed point has the other above it
        if (computed !== null) label('○ computed', pal.text, lx, flat ? y(anchor) + (under ? 22 : -18) : low, align);
        if (independent !== null && far) label(`● metered flow${region}`, pal.data, x(npr) + (toLeft ? -9 : 9), Math.max(top + 9, y(independent)), toLeft ? 'right' : 'left');
        else if (independent !== null) label(`● metered flow${region}`, pal.data, lx, !flat ? low + 16 : under ? Math.max(top + 9, y(independent) - 14) : y(anchor) + 22, align);
      }
    }
    const { temperature } = d.units();
    const said: string[] = [...(curveOf ? [`gas ${shown(temperature, curveOf.t)} ${temperature.sign}, f ${fixed(curveOf.f, 3)}, Cd ${fixed(p?.discharge_coefficient, 3)}`] : []), ...standIns(live ? p : null)];
    if (live && (p.independent_flow_parameter ?? null) === null) said.push('no independent flow');
    if (choke !== null) {
      c.font = font(12);
      c.fillStyle = pal.text;
      c.textAlign = 'right';
      c.textBaseline = 'bottom';
      const widest = Math.max(0, ...said.map((n) => n.length)) * 6.6;
      const base = right - x(choke) < widest + 12 ? bottom - 8 - 15 * said.length : bottom - 5; // above the notes where they need the width
      c.fillText(`choke NPR ${fixed(choke, 3)}`, x(choke) - 5, base - 15);
      c.fillStyle = pal.soft;
      c.fillText(sourceWord(p?.choke_npr_from ?? 'none'), x(choke) - 5, base);
    }
    c.restore();

    refill(notes, said.join(), () => said.map((n) => h('div', {}, n)));

    if (!live || npr === null) {
      hatch(c, left, top, right - left, bottom - top, pal.soft);
      c.font = font(15, 600);
      c.textAlign = 'center';
      c.textBaseline = 'middle';
      const why = live ? `–  ${causeWord(p.cause) || stateLook(p).cause}` : '–  no present operating point';
      const w = c.measureText(why).width + 24;
      c.fillStyle = pal.panel;
      c.fillRect((left + right) / 2 - w / 2, top + 24, w, 30);
      c.fillStyle = pal.text;
      c.fillText(why, (left + right) / 2, top + 39);
    }
    c.strokeStyle = pal.line;
    c.lineWidth = 1;
    c.strokeRect(left + 0.5, top + 0.5, right - left - 1, bottom - top - 1);

    if (now - spokenAt > 2000) {
      spokenAt = now;
      attr(plane.canvas, 'aria-label', `Throat plane: NPR ${significant(npr, 4)}, flow parameter ${significant(live ? p.flow_parameter : null, 3)}, choke NPR ${significant(choke, 4)}, ${stateLook(live ? p : null).word}`);
    }
  }

  return { el: plane.el, update, destroy: plane.destroy };
}

function line(c: CanvasRenderingContext2D, x0: number, y0: number, x1: number, y1: number): void {
  c.beginPath();
  c.moveTo(x0, y0);
  c.lineTo(x1, y1);
  c.stroke();
}

function dot(c: CanvasRenderingContext2D, x: number, y: number, r: number): void {
  c.beginPath();
  c.arc(x, y, r, 0, 2 * Math.PI);
}
