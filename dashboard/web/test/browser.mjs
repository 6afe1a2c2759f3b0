// Drives the page in Chromium as an operator would: against THROATWATCH_URL, or
// against the mock when that is not set. Writes screenshots to SHOTS if given.
// Waits up to WITHIN seconds (default 90) for the run to choke, unchoke and alarm.
import assert from 'node:assert/strict';
import { mkdirSync, mkdtempSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { chromium } from 'playwright-core';
import { start } from './mock.mjs';

const mock = process.env.THROATWATCH_URL ? null : await start();
const base = process.env.THROATWATCH_URL ?? mock.url;
const shots = process.env.SHOTS ?? '';
const within = Number(process.env.WITHIN ?? 90) * 1000;
if (shots) mkdirSync(shots, { recursive: true });

const profile = mkdtempSync(join(tmpdir(), 'throatwatch-page-'));
const context = await chromium.launchPersistentContext(profile, {
  executablePath: process.env.CHROMIUM ?? '/usr/bin/chromium',
  viewport: { width: 1440, height: 900 },
  args: ['--no-sandbox', '--disable-gpu', '--disable-quic', '--no-first-run', '--disable-background-networking', '--disable-component-update', '--disable-sync', '--disable-dev-shm-usage'],
});
const page = context.pages()[0] ?? (await context.newPage());
const faults = [];
const outside = [];
page.on('pageerror', (e) => faults.push(String(e)));
page.on('request', (r) => { if (new URL(r.url()).origin !== new URL(base).origin && !r.url().startsWith('data:')) outside.push(r.url()); });

// The live socket runs through the test, so that a frozen link can be made of it.
let frozen = false;
await page.routeWebSocket(/\/live\?/, (ws) => {
  const server = ws.connectToServer();
  server.onMessage((m) => { if (!frozen) ws.send(m); });
});

const q = (name) => page.locator(`[data-q="${name}"]`);
const words = (name) => q(name).first().innerText();
let passed = 0;
let failed = 0;
async function check(name, f) {
  const began = Date.now();
  try {
    await f();
    passed++;
    console.log(`ok   ${name} (${((Date.now() - began) / 1000).toFixed(1)} s)`);
  } catch (e) {
    failed++;
    console.log(`FAIL ${name}: ${e instanceof Error ? e.message : e}`);
    if (shots) await page.screenshot({ path: join(shots, `failed-${failed}.png`) });
  }
}
async function until(what, f, limit = within) {
  const end = Date.now() + limit;
  while (Date.now() < end) {
    if (await f()) return;
    await page.waitForTimeout(100);
  }
  throw new Error(`not within ${limit / 1000} s: ${what}`);
}
async function shoot(name) {
  if (!shots) return;
  for (const [width, height] of [[820, 1180], [1440, 900]]) {
    await page.setViewportSize({ width, height });
    await page.waitForTimeout(400);
    await page.screenshot({ path: join(shots, `${name}-${width}x${height}.png`) });
  }
}

try {
  await page.goto(`${base}#/watch`);

  await check('a live margin is shown and changes', async () => {
    const seen = new Set();
    await until('three different margins', async () => {
      const m = await words('margin');
      if (/\d/.test(m)) seen.add(m);
      return seen.size >= 3;
    });
    assert.match(await words('data-age'), /data age \d/);
  });

  const states = new Set();
  let caution = '';
  let warned = false;
  await check('an unchoked and a choked period are seen', () => until('both states', async () => {
    const state = (await words('state')).trim();
    if (state === 'choked' && !states.has(state)) await shoot('choked');
    if (state === 'unchoked' && !states.has(state)) await shoot('unchoked');
    states.add(state);
    return states.has('choked') && states.has('unchoked');
  }));

  await check('an alarm appears with its caution', async () => {
    await until('a caution or warning with a caution text', async () => {
      const priority = await words('alarm-priority');
      caution = await words('alarm-caution');
      return /WARNING|CAUTION/.test(priority) && caution.length > 10 && (await q('acknowledge').isEnabled());
    });
    await shoot('alarm');
  });

  await check('the alarm can be acknowledged', async () => {
    await until('an acknowledged alarm', async () => {
      const before = await words('alarm-text');
      const button = q('acknowledge');
      if (!(await button.isEnabled())) return true;
      const answer = page.waitForResponse((r) => r.url().includes('/acknowledge'), { timeout: 5000 });
      await button.click();
      const status = (await answer).status();
      if (status === 409) return false; // it moved on: look again, press again
      assert.equal(status, 202);
      await page.waitForFunction((was) => {
        const line = document.querySelector('[data-q="alarm-text"]');
        const b = document.querySelector('[data-q="acknowledge"]');
        return line?.textContent !== was || b?.textContent === 'Acknowledged';
      }, before, { timeout: 5000 });
      return true;
    }, 30_000);
  });

  await check('a warning of the exhaust temperature appears with its caution', async () => {
    await until('a warning', async () => {
      warned = (await words('alarm-priority')).includes('WARNING') && (await words('alarm-caution')).length > 10;
      return warned;
    });
    await shoot('warning');
  });

  await check('Watch fits 1440×900 and 820 wide', async () => {
    await page.setViewportSize({ width: 1440, height: 900 });
    await page.waitForTimeout(300);
    const wide = await page.evaluate(() => [document.documentElement.scrollHeight, document.documentElement.scrollWidth]);
    assert.deepEqual(wide, [900, 1440]);
    await page.setViewportSize({ width: 820, height: 1180 });
    await page.waitForTimeout(300);
    assert.equal(await page.evaluate(() => document.documentElement.scrollWidth), 820);
    await page.setViewportSize({ width: 1440, height: 900 });
  });

  await check('sound is off until armed, and says so', async () => {
    assert.match(await words('sound'), /off/);
    await q('sound').click();
    await until('armed', async () => /armed/.test(await words('sound')), 5000);
  });

  await check('a frozen link greys the page and it comes back', async () => {
    const told = Date.now();
    frozen = true;
    await page.locator('.veiled[data-veiled]').waitFor({ timeout: 6000 });
    assert.ok(Date.now() - told < 5000, 'within 5 s');
    assert.match(await page.locator('.veilwords').innerText(), /NO DATA LINK since \d\d:\d\d:\d\d/);
    assert.equal((await words('margin')).trim(), '–', 'no stale margin');
    assert.ok(await q('acknowledge').isDisabled(), 'nothing to press without a link');
    await shoot('no-link');
    frozen = false;
    await until('the veil is gone', async () => (await page.locator('.veiled[data-veiled]').count()) === 0, 15_000);
    await until('a margin again or its cause', async () => /\d/.test(await words('margin')) || (await words('cause')) !== '', 15_000);
  });

  for (const name of ['alarms', 'rig', 'help']) {
    await check(`the page ${name} opens`, async () => {
      await page.goto(`${base}#/${name}`);
      await page.locator('h1').waitFor({ timeout: 5000 });
      await page.waitForTimeout(600);
      assert.match(await page.locator('footer').innerText(), /only watches.*not protection/);
      if (name === 'rig') assert.ok((await page.locator('.channels tbody tr').count()) > 3);
      await shoot(name);
    });
  }

  await check('a stored run plays, framed REPLAY', async () => {
    await page.goto(`${base}#/runs`);
    await page.locator('[data-q="replay"]').first().waitFor({ timeout: 10_000 });
    await shoot('runs');
    const ended = page.locator('[data-q="replay"][data-state="ended"]');
    await ((await ended.count()) > 0 ? ended : page.locator('[data-q="replay"]')).first().click();
    await page.locator('[data-q="replay-frame"] [data-q="margin"]').waitFor({ timeout: 20_000 });
    assert.match(await page.title(), /REPLAY/);
    assert.equal(await page.locator('.watermark').innerText(), 'REPLAY');
    assert.equal(await q('acknowledge').count(), 0, 'nothing is acknowledged in a replay');
    const border = await page.locator('[data-q="replay-frame"]').evaluate((e) => parseFloat(getComputedStyle(e).borderTopWidth));
    assert.ok(border >= 6, `frame of ${border} px`);
    const before = await words('replay-clock');
    await q('speed').selectOption('10');
    await q('play').click();
    const seen = new Set();
    await until('the replay clock and the margin move', async () => {
      seen.add(await words('margin'));
      return seen.size >= 3 && (await words('replay-clock')) !== before;
    }, 30_000);
    await page.waitForTimeout(2500);
    await shoot('replay');
    if ((await words('play')) === 'Pause') await q('play').click();
    const held = await words('replay-clock');
    await page.waitForTimeout(600);
    assert.equal(await words('replay-clock'), held, 'pause holds');
    await q('scrub').focus();
    await page.keyboard.press('Home');
    await until('scrubbed to the start', async () => (await words('replay-clock')).startsWith('0:00:00'), 10_000);
  });

  await check('no fault in the page, nothing loaded from outside', async () => {
    assert.deepEqual(faults, []);
    assert.deepEqual(outside, []);
  });
} finally {
  await context.close();
  rmSync(profile, { recursive: true, force: true });
  await mock?.stop();
}
console.log(`${passed} passed, ${failed} failed`);
process.exitCode = failed > 0 ? 1 : 0;
