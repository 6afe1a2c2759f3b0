// Starts the program under test, waits until it answers, and ends it.
import { spawn, spawnSync } from 'node:child_process';
import { createServer } from 'node:net';

/** A TCP port that was free a moment ago. */
export function freePort() {
  return new Promise((done, failed) => {
    const server = createServer().once('error', failed).listen(0, '127.0.0.1', () => {
      const { port } = server.address();
      server.close(() => done(port));
    });
  });
}

/** Runs a command of the program to its end; throws with its output when it fails. */
export function command(program, ...args) {
  const r = spawnSync(program, args, { encoding: 'utf8' });
  if (r.status !== 0) throw new Error(`${program} ${args.join(' ')}: ${r.error ?? r.stderr}`);
  return r.stdout;
}

/** A running `throatwatch watch`; `end` and `kill` come back when it is gone. */
export async function watch(program, rig, data, port, ...more) {
  const args = ['watch', rig, '--data', data, '--listen', `127.0.0.1:${port}`, '--broker-listen', '127.0.0.1:0', ...more];
  const child = spawn(program, args, { stdio: ['ignore', 'ignore', 'pipe'] });
  let said = '';
  child.stderr.on('data', (b) => { said = (said + b).slice(-4000); });
  const gone = new Promise((done) => { child.once('exit', done); });
  const url = `http://127.0.0.1:${port}/`;
  for (const began = Date.now(); ; await new Promise((r) => setTimeout(r, 50))) {
    if (child.exitCode !== null) throw new Error(`${program} ${args.join(' ')} ended with ${child.exitCode}: ${said}`);
    try {
      if ((await fetch(`${url}healthz`)).ok) break;
    } catch { /* not listening yet */ }
    if (Date.now() - began > 20_000) {
      child.kill('SIGKILL');
      throw new Error(`${program} does not answer on ${url}: ${said}`);
    }
  }
  const stop = (signal) => {
    if (child.exitCode === null && child.signalCode === null) child.kill(signal);
    return gone;
  };
  return { url, end: () => stop('SIGTERM'), kill: () => stop('SIGKILL') };
}
