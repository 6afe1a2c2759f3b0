// Every channel as it comes in and as it is used, what is wrong with it, its last
// minute, and what an engineer does to a sensor.

import { api, withFaults } from '../api';
import { type Field, askForm } from '../ask';
import { type Display, gate } from '../context';
import { type View, attr, column, h, refill, text } from '../dom';
import type { Channel, ChannelValue } from '../frames';
import { sparkSpan } from '../spark';
import { believable, hostNow } from '../state';
import { facility, rfc3339, typed, typedClock } from '../time';
import { age, inUnit, plain, significant } from '../units';
import { calibrationText, findingText, sensorAt, sensorText } from '../words';

const [sparkWidth, sparkHeight] = [96, 18];

interface Row { el: HTMLElement; raw: HTMLElement; value: HTMLElement; sign: HTMLElement; quality: HTMLElement; age: HTMLElement; spark: HTMLCanvasElement; back: HTMLElement; swap: HTMLElement; calibration: HTMLElement }

/** Draws the values of the last minute up to `end`, over their own range. */
function drawSpark(canvas: HTMLCanvasElement, colour: string, end: number, s: { t: readonly number[]; v: readonly (number | null)[] }): void {
  const ratio = window.devicePixelRatio || 1;
  const [w, hgt] = [Math.round(sparkWidth * ratio), Math.round(sparkHeight * ratio)];
  if (canvas.width !== w || canvas.height !== hgt) [canvas.width, canvas.height] = [w, hgt];
  const c = canvas.getContext('2d');
  if (!c) return;
  c.setTransform(ratio, 0, 0, ratio, 0, 0);
  c.clearRect(0, 0, sparkWidth, sparkHeight);
  let [low, high] = [Infinity, -Infinity];
  for (const v of s.v) {
    if (v === null) continue;
    low = Math.min(low, v);
    high = Math.max(high, v);
  }
  if (low > high) return;
  const least = Math.max(Math.abs(high), Math.abs(low)) * 1e-3 || 1; // noise of a still channel does not fill the height
  const middle = (low + high) / 2;
  const half = Math.max(high - low, least) / 2;
  c.strokeStyle = colour;
  c.lineWidth = 1.25;
  c.beginPath();
  let pen = false;
  s.v.forEach((v, i) => {
    if (v === null) {
      pen = false;
      return;
    }
    const x = sparkWidth * (1 - (end - (s.t[i] as number)) / sparkSpan);
    const y = sparkHeight / 2 - ((v - middle) / half) * (sparkHeight / 2 - 2);
    if (pen) c.lineTo(x, y); else c.moveTo(x, y);
    pen = true;
  });
  c.stroke();
}

function swap(d: Display, c: Channel): void {
  const now = hostNow(d.model(), performance.now());
  const fields: Field[] = [
    { name: 'serial', label: 'Serial number of the new sensor' },
    { name: 'from', label: `Valid from, ${facility.sign(facility.offset(now))}`, value: typedClock(now), pattern: '\\d{4}-\\d\\d-\\d\\d \\d\\d:\\d\\d:\\d\\d' },
    { name: 'calibration', label: 'Its calibration, as text of a rig file, for a later reduction', kind: 'area', optional: true, hint: 'calibration: {scale: 1.0012, offset: -0.08}' },
    { name: 'reason', label: 'Reason' },
  ];
  askForm(`A sensor of ${c.id} (${c.title}) was swapped.`, fields, 'Enter the swap', async (v) => {
    const t = typed(v['from'] ?? '');
    if (Number.isNaN(t)) throw new Error('“valid from” is no time');
    await api.swap(d.rig, { channel: c.id, serial: v['serial'] ?? '', valid_from: rfc3339(t), reason: v['reason'] ?? '', ...(v['calibration'] ? { calibration: v['calibration'] } : {}) }, d.operator()).catch((e: unknown) => { throw withFaults(e); });
  });
}

function readmit(d: Display, c: Channel): void {
  askForm(`Take ${c.id} (${c.title}) back: it counts again, and its pattern is learned anew. With proof of a failure it is refused.`, [{ name: 'reason', label: 'Reason' }], 'Take it back', async (v) => {
    await api.readmit(d.rig, c.id, v['reason'] ?? '', d.operator());
  });
}

/** Quality and finding of a channel in words. */
function qualityText(v: ChannelValue | undefined): string {
  if (!v) return 'not present';
  const found = findingText(v);
  return `${v.quality.replaceAll('_', ' ')}${found ? `, ${found}` : ''}`;
}

export function channelsView(d: Display): View {
  const body = h('tbody');
  const names = ['Channel', 'Title', 'Station', '>Raw', '>Value', 'Unit', 'Quality, finding', '>Age', '>Range', 'Last minute', 'Calibration', 'Sensor'];
  const el = h('div', { class: 'scroll', role: 'region', tabindex: '0', 'aria-label': 'Channels' }, h('table', { class: 'list channels' }, h('thead', {}, h('tr', {}, ...names.map(column))), body));
  let rows = new Map<string, Row>();

  function build(c: Channel): HTMLElement {
    const set = d.units();
    const back = h('button', { type: 'button', class: 'small', 'data-focus': `back ${c.id}`, 'aria-label': `Take ${c.id} back`, 'data-q': `readmit-${c.id}`, onclick: () => readmit(d, c) }, 'Take back…');
    const exchange = h('button', { type: 'button', class: 'small', 'data-focus': `swap ${c.id}`, 'aria-label': `Sensor swap of ${c.id}`, 'data-q': `swap-${c.id}`, onclick: () => swap(d, c) }, 'Swap…');
    const r: Row = {
      el: h('tr'), raw: h('td', { class: 'num' }), value: h('td', { class: 'num' }), sign: h('td'), quality: h('td', { class: 'quality' }), age: h('td', { class: 'num' }),
      spark: h('canvas', { class: 'spark', 'aria-hidden': 'true' }), back, swap: exchange, calibration: h('td', { class: 'calibration' }),
    };
    const range = [c.low, c.high].map((v) => (v === null ? '–' : plain(inUnit(v, set.channel(c.unit), c.dimension).value))).join(' … ') + (c.reference === 'gauge' ? ' gauge' : '');
    const station = [c.station.replaceAll('_', ' '), c.recorded_only ? 'recorded only' : ''].filter(Boolean).join(', ');
    r.el.append(h('th', { scope: 'row' }, c.id), h('td', { class: 'extra title', title: c.title }, c.title), h('td', {}, station), r.raw, r.value, r.sign, r.quality, r.age,
      h('td', { class: 'num' }, range), h('td', { class: 'sparkcell' }, r.spark), r.calibration, h('td', { class: 'sensor' }, exchange, back));
    rows.set(c.id, r);
    return r.el;
  }

  return {
    el,
    update(now) {
      const m = d.model();
      const set = d.units();
      const fresh = d.fresh(now);
      refill(body, `${set.system}|${m.channels.map((c) => c.id + c.unit).join()}`, () => {
        rows = new Map();
        return m.channels.map(build);
      });
      const present = believable(fresh) || fresh.kind === 'no_points';
      const end = hostNow(m, now);
      const colour = d.palette().data;
      for (const c of m.channels) {
        const r = rows.get(c.id);
        if (!r) continue;
        const v = present ? m.values[c.id] : undefined;
        const shown = v && v.value !== null ? inUnit(v.value, set.channel(c.unit), c.dimension) : null;
        text(r.raw, significant(v?.raw, 6));
        text(r.value, shown ? significant(shown.value, 5) : '–');
        text(r.sign, shown ? `${shown.sign}${c.reference && c.dimension === 'pressure' ? (c.reference === 'differential' ? ' diff' : ' abs') : ''}` : '');
        text(r.quality, qualityText(v));
        attr(r.quality, 'data-finding', v ? findingText(v) !== '' : false);
        text(r.age, age(v?.age_s));
        const sensor = sensorAt(c, end);
        text(r.calibration, calibrationText(sensor, v?.calibration));
        attr(r.calibration, 'title', sensorText(sensor));
        attr(r.calibration, 'data-bad', v?.calibration === 'expired');
        attr(r.el, 'data-none', !v || v.value === null);
        gate(r.swap, d, 'swap', now);
        gate(r.back, d, 'readmit', now);
        attr(r.back, 'hidden', v?.quality !== 'excluded');
        drawSpark(r.spark, colour, end, m.sparks.of(c.id));
      }
    },
    destroy: () => undefined,
  };
}
