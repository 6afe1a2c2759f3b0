// Plays run after run through the page’s own fold and displays, as fast as it goes. The
// browser test compares the heap after half an hour and after an hour of frames.

import type { Display } from '../src/context';
import type { Frame } from '../src/frames';
import { light, paint } from '../src/palette';
import { logPage } from '../src/pages/log';
import { openSession } from '../src/session';
import { apply, newModel } from '../src/state';
import '../src/style.css';
import { unitSets } from '../src/units';
import { standardPlots } from '../src/watch/plots';
import { watchDisplay } from '../src/watch/display';
import { Run, runLength } from './sim.mjs';

const model = newModel();
let runs = 0;
const display: Display = {
  rig: '', follows: [], model: () => model, fresh: () => ({ kind: 'live', age: 0 }), palette: () => light, units: () => unitSets.si, plots: () => standardPlots, choosePlots: () => undefined, operator: () => '', session: () => openSession,
  acknowledger: { state: () => 'idle', send: () => Promise.resolve() },
};
paint(document.documentElement.style, light);
const views = [watchDisplay(display, 'Watch', null), logPage(display)];
document.body.replaceChildren(...views.map((v) => v.el));

/** Plays this many minutes of runs; gives how many frames there were. A draw for each 10 s is enough to keep what drawing keeps. */
async function play(minutes: number): Promise<number> {
  let frames = 0;
  for (const first = runs; (runs - first) * runLength < minutes * 60; runs++) {
    const run = new Run(`r${runs}`, runs, (1_700_000_000 + runs * runLength) * 1000, runs + 1, 1, model.n);
    const take = (f: Frame): void => {
      frames++;
      apply(model, JSON.parse(JSON.stringify(f)) as Frame, performance.now());
    };
    take(run.hello());
    for (let i = 0; !run.done; i++) {
      for (const f of run.next()) take(f);
      if (i % 200 !== 0) continue;
      await new Promise((next) => { requestAnimationFrame(next); });
      for (const v of views) v.update(performance.now());
    }
  }
  return frames;
}

Object.assign(window, { play });
