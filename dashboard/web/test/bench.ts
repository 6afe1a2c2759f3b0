// How often 12 charts of 10 min at 20 scans/s can be drawn: the traces of the page
// with a full ring, fed and drawn as the page does it. Run by the browser test.

import type { Display } from '../src/context';
import { light, paint } from '../src/palette';
import { columns } from '../src/ring';
import { newModel } from '../src/state';
import { openSession } from '../src/session';
import '../src/style.css';
import { fixed, unitSets } from '../src/units';
import { type Plot, standardPlots } from '../src/watch/plots';
import { traces } from '../src/watch/traces';

const [charts, span, rate, drawEvery] = [12, 600, 20, 50];

export interface Figures {
  charts: number;
  rows: number;
  drawsPerSecond: number;
  longestTask: number; // ms; 0 when none was over 50 ms
}

/** A row at time t: every column moves, with noise that no two scans share. */
function row(t: number): number[] {
  const noise = Math.abs(Math.sin(t * 12_989.8) * 43_758.5) % 1;
  return [...columns.map((_, k) => 10 + 5 * Math.sin(t / (7 + k)) + noise), Math.sin(t / 40) > 0 ? 1 : 0];
}

async function run(seconds: number): Promise<Figures> {
  const model = newModel();
  const t0 = 1_700_000_000;
  let begun = Infinity;
  let draws = 0; // of all charts
  for (let i = 0; i < span * rate; i++) model.ring.push(t0 + i / rate, row(i / rate));
  model.newest = t0 + span - 1 / rate;
  const plot = (i: number): Plot => ({
    title: `trace ${i}`, unit: '', convert: (v) => v, cover: () => [0, 20],
    limits: () => { // asked for once in each draw
      if (i === charts - 1 && performance.now() >= begun) draws++;
      return [{ v: 18, name: 'limit' }];
    },
    lines: [{ column: columns[i % columns.length] as string, name: '', show: (v) => fixed(v, 2) }],
  });
  const units = unitSets.si;
  const display: Display = { rig: '', follows: [], model: () => model, fresh: () => ({ kind: 'live', age: 0 }), palette: () => light, units: () => units, plots: () => standardPlots, choosePlots: () => undefined, operator: () => '', session: () => openSession, acknowledger: null };
  const view = traces(display, null, () => Array.from({ length: charts }, (_, i) => plot(i)));
  const style = document.createElement('style');
  paint(document.documentElement.style, light);
  style.textContent = `body{display:block}.traces{height:880px;width:1400px}`;
  document.head.append(style);
  document.body.replaceChildren(view.el);
  ([...view.el.querySelectorAll('button')].find((b) => b.textContent === `${span} s`) as HTMLButtonElement).click();

  const tasks: number[] = [];
  const observer = new PerformanceObserver((list) => { tasks.push(...list.getEntries().map((e) => e.duration)); });
  let last = -Infinity;
  let scan = span * rate;
  const feed = setInterval(() => {
    model.newest = t0 + scan / rate;
    model.ring.push(model.newest, row(scan / rate));
    scan++;
  }, 1000 / rate);
  await new Promise<void>((done) => {
    const from = performance.now();
    const draw = (now: number): void => {
      if (now - from > 1000 && begun === Infinity) { // the first second compiles and lays out
        begun = now;
        performance.mark('bench');
        observer.observe({ type: 'longtask' });
      }
      if (now - begun > seconds * 1000) return done();
      if (now - last >= drawEvery) {
        last = now;
        view.update(now);
      }
      requestAnimationFrame(draw);
    };
    requestAnimationFrame(draw);
  });
  clearInterval(feed);
  tasks.push(...observer.takeRecords().map((e) => e.duration));
  view.destroy();
  return {
    charts, rows: model.ring.size, drawsPerSecond: draws / seconds, longestTask: Math.max(0, ...tasks),
  };
}

Object.assign(window, { bench: run });
