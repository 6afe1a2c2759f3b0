// A rehearsed test day on the page, as its people would have it: checks that find two planted
// faults, a card of five points of which one is rejected and taken again, a sensor swap,
// a zero that has shifted after the run, the hand-over sheet and the report. Needs THROATWATCH
// and RIG; SHOTS is a folder for screenshots. The browser test runs it beside itself.
import assert from 'node:assert/strict';
import { spawn } from 'node:child_process';
import { mkdirSync, mkdtempSync, readFileSync, rmSync, writeFileSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { dirname, join } from 'node:path';
import axe from 'axe-core';
import { chromium } from 'playwright-core';
import { freePort, watch } from './daemon.mjs';

const { THROATWATCH: program, RIG: rig, SHOTS: shots, CHROMIUM = '/usr/bin/chromium' } = process.env;
if (!program || !rig) {
  console.error('give THROATWATCH, the path of the program, and RIG, the path of a rig file');
  process.exit(2);
}
const speed = 1.5; // the rehearsed engine lives this many times faster
const place = mkdtempSync(join(tmpdir(), 'throatwatch-day-'));
if (shots) mkdirSync(shots, { recursive: true });

// Windows of the rig and the card in time with that engine.
const own = join(place, 'rig.yaml');
const paced = readFileSync(rig, 'utf8').replace('window: 20 s', 'window: 8 s').replace('dwell: 3 s', 'dwell: 1 s').replace(/(checks:[^]*?window: )10 s/, (_, head) => `${head}5 s`)
  .replace('pressure_slope: 0.25 %/min', 'pressure_slope: 1 %/min').replace('temperature_slope: 6 K/min', 'temperature_slope: 30 K/min').replace('speed_slope: 0.25 %/min', 'speed_slope: 1 %/min');
writeFileSync(own, paced);
const cardFile = join(place, 'card.yaml');
const points = ['well below choking', 'below choking', 'choked', 'near the top', 'full speed'];
writeFileSync(cardFile, readFileSync(join(dirname(rig), '../cards/example.yaml'), 'utf8').replaceAll(/(soak|average): \d+ s/g, '$1: 2 s'));

let page;
const q = (name) => page.locator(`[data-q="${name}"]`);
const words = async (name) => (await q(name).first().textContent()).trim();
async function until(what, f, limit = 30_000) {
  const end = Date.now() + limit;
  do {
    if (await f()) return;
    await page.waitForTimeout(100);
  } while (Date.now() < end);
  throw new Error(`not within ${limit / 1000} s: ${what}`);
}
async function shoot(name) {
  if (!shots) return;
  for (const [width, height] of [[820, 1180], [1920, 1080], [1440, 900]]) {
    await page.setViewportSize({ width, height });
    await page.waitForTimeout(250);
    await page.screenshot({ path: join(shots, `day-${name}-${width}.png`) });
  }
}
async function accessible(name) {
  await page.evaluate(axe.source);
  const { violations } = await page.evaluate(() => window.axe.run(document, { resultTypes: ['violations'] }));
  assert.deepEqual(violations.map((v) => `${v.id}: ${v.nodes.slice(0, 3).map((n) => n.target.join(' ')).join(', ')}`), [], name);
  assert.equal(await page.evaluate(() => document.documentElement.scrollWidth), page.viewportSize().width, `${name} is as wide as the window`);
}
async function go(name) {
  await page.goto(`${daemon.url}#/${name}`);
  await page.locator('h1').first().waitFor();
}
async function confirm(reason) {
  await page.locator('[data-q="field-reason"]').fill(reason);
  await q('confirm').click();
  await until('taken', async () => (await page.getByRole('dialog').count()) === 0);
}
/** The check of a phase; gives how many did not pass. */
async function checked(phase, ticks) {
  await go('checks');
  await page.locator('[data-q="field-phase"]').selectOption(phase);
  if (ticks) for (const box of await page.locator('.ticks input').all()) await box.check();
  const before = await page.locator(`[data-q="checks-${phase}"]`).count();
  assert.equal(before, 0, 'none yet');
  await until('at rest', async () => { // it is refused until the engine is known to be at rest
    await q('check-begin').click();
    await page.waitForTimeout(500);
    return /^The check/.test(await words('check-running')) || (await q(`checks-${phase}`).count()) > 0;
  });
  await until('a result', async () => (await q(`checks-${phase}`).count()) > 0 && /passed/.test(await words(`checks-${phase}`)));
  const said = /^Data-system checks passed (\d+) of (\d+)\. Not a clearance to start\.$/.exec(await words(`checks-${phase}`));
  assert.ok(said, await words(`checks-${phase}`));
  return Number(said[2]) - Number(said[1]);
}

const brokerPort = await freePort();
let playing = null;
/** Lets the rehearsed engine play; one that plays is ended. */
async function play(...args) {
  await rest();
  playing = spawn(program, ['rehearse', own, '--broker', `mqtt://127.0.0.1:${brokerPort}`, ...args], { stdio: 'ignore' });
}
async function rest() {
  if (!playing || playing.exitCode !== null) return;
  const gone = new Promise((done) => { playing.once('exit', done); });
  playing.kill('SIGTERM');
  await gone;
}

const daemon = await watch(program, own, join(place, 'data'), await freePort(), '--broker-listen', `127.0.0.1:${brokerPort}`, '--open-role', 'engineer');
const browser = await chromium.launch({ executablePath: CHROMIUM, args: ['--no-sandbox', '--disable-gpu', '--disable-quic', '--no-first-run', '--disable-background-networking', '--disable-component-update', '--disable-sync', '--disable-dev-shm-usage'] });
const began = Date.now();
const step = (name) => console.log(`${((Date.now() - began) / 1000).toFixed(0)} s  ${name}`);
try {
  page = await browser.newPage({ viewport: { width: 1440, height: 900 } });
  page.setDefaultTimeout(15_000);
  const faults = [];
  page.on('pageerror', (e) => faults.push(String(e)));

  // Before: the engine is off for 3 s of its own time, which passes slowly here.
  await play('--points', '--speed', '0.1', '--fault', 'probe-offset@0s+1h:egt_3', '--fault', 'pressure-zero-shift@0s+1h:p7_2');
  await go('watch');
  await q('operator').fill('Ida Holm');
  assert.equal(await checked('before', true), 2, 'two faults are planted');
  const failed = await words('failed-before');
  assert.match(failed, /p7_2/);
  assert.match(failed, /egt_3/);
  await shoot('checks');
  await accessible('checks');
  step('checks before: two planted faults found');

  // The card.
  await go('card');
  await until('no card', async () => /No card is loaded/.test(await words('card-points')));
  await q('card-file').setInputFiles({ name: 'bad.yaml', mimeType: 'text/yaml', buffer: Buffer.from('card: {number: TC-1}\npoints: [{name: x, targets: {npr: about 2}}]\n') });
  await page.locator('[data-q="field-reason"]').fill('test');
  await q('confirm').click();
  await until('its faults', async () => /Not done: .*\d+:\d+/s.test(await page.getByRole('dialog').innerText()));
  await page.keyboard.press('Escape');
  await q('card-file').setInputFiles(cardFile);
  await confirm('the test of today');
  await until('five points', async () => (await page.locator('.cardpoints tr[data-first]').count()) === 5);

  await play('--points', '--speed', String(speed));
  await go('watch');
  let rejected = false;
  const taken = async () => (await (await fetch(`${daemon.url}api/rigs/cell_2/card`)).json()).card.taken;
  for (let i = 0; i < points.length;) {
    await until(`at point ${i + 1}`, async () => (await words('card-name')).includes(`point ${i + 1} of 5: ${points[i]}`));
    const count = (await taken()).length;
    if (i === 2) await until('stabilised', async () => /● stabilised/.test(await words('card-state')), 90_000).then(() => shoot('card-line'));
    const byItself = points[i] === 'near the top';
    await until(`${points[i]} taken`, async () => { // what moved in the meantime is told; a person presses again
      if ((await taken()).length > count) return true;
      if (await page.getByRole('dialog').count()) await page.getByRole('button', { name: 'Cancel' }).click();
      else if (!byItself && /● stabilised(?!, averaging)/.test(await words('card-state'))) await q('card-take').click();
      await page.waitForTimeout(500);
      return false;
    }, 90_000);
    await go('card');
    const last = (await taken()).at(-1).number;
    const deed = i === 1 && !rejected ? 'reject' : 'accept';
    await page.getByRole('button', { name: new RegExp(`^${deed}… point ${last}$`, 'i') }).click();
    if (deed === 'reject') {
      await confirm('bleed valve was open');
      rejected = true;
    } else {
      await confirm('as asked for');
      i++;
    }
    await go('watch');
  }
  await go('card');
  const all = await taken();
  assert.deepEqual(all.map((p) => p.status), ['accepted', 'rejected', 'accepted', 'accepted', 'accepted', 'accepted']);
  assert.equal(new Set(all.map((p) => p.number)).size, 6, 'no number is given twice');
  await until('nothing is left', async () => /accepted/.test(await words('card-points')) && (await page.locator('.cardpoints tr[data-here]').count()) === 0);
  assert.match(await words('card-taken'), /rejected.*bleed valve was open/);
  await shoot('card');
  await accessible('card');
  step('five points taken: one rejected and taken again');

  // A swap, then a zero that has shifted.
  await go('rig');
  await q('swap-egt_5').click();
  await page.locator('[data-q="field-serial"]').fill('TC-77');
  await confirm('connector worn');
  step('sensor swapped');
  await play('--points', '--speed', '0.1', '--fault', 'pressure-zero-shift@0s+1h:p_oil', '--fault', 'probe-offset@0s+1h:egt_3', '--fault', 'pressure-zero-shift@0s+1h:p7_2');
  assert.ok(await checked('after', false) >= 3);
  assert.match(await words('failed-after'), /p_oil[^]*\(zero shift\)/);
  assert.doesNotMatch(await words('failed-after'), /p7_2[^)]*\(zero shift\)/, 'its error was there before');
  await shoot('checks-after');
  step('zero shift found');

  await go('handover');
  await page.reload();
  await until('the sheet', async () => /Data-system checks passed/.test(await words('handover')) && /TC-042/.test(await words('handover')) && /LC-0093.*waived by Tomas Eklund/.test(await words('handover')));
  await shoot('handover');
  await accessible('handover');
  const sheet = (await page.pdf({ format: 'A4' })).toString('latin1').match(/\/Type \/Page\b/g)?.length ?? 0;
  assert.ok(sheet >= 1 && sheet <= 4, `${sheet} pages`);

  const run = (await (await fetch(`${daemon.url}api/runs`)).json())[0];
  const report = await (await fetch(`${daemon.url}api/runs/${run.id}/report`)).text();
  assert.deepEqual(['Not a clearance to start.', 'moved by', 'TC-042', 'bleed valve was open', 'TC-77', 'connector worn'].filter((part) => !report.includes(part)), [], 'missing in the report');
  const stored = await (await fetch(`${daemon.url}api/runs/${run.id}/checks`)).json();
  assert.deepEqual([...new Set(stored.map((c) => c.phase))], ['before', 'after'], 'checks stored with the run');
  step('sheet and report tell of all');
  assert.deepEqual(faults, []);
} finally {
  if (shots && page) await page.screenshot({ path: join(shots, 'day-last.png') }).catch(() => undefined);
  await rest();
  await browser.close();
  await daemon.kill();
  rmSync(place, { recursive: true, force: true });
}
