// A small server with the shapes of the real one, for tests of the page alone.
// `node test/mock.mjs [port]` serves dist with a made-up run that repeats.
import { createHash } from 'node:crypto';
import { readFileSync } from 'node:fs';
import { createServer } from 'node:http';
import { extname, join, normalize } from 'node:path';
import { fileURLToPath } from 'node:url';
import { Run, chokeNPR, flowParameter, rig, runLength, scanRate } from './sim.mjs';

const dist = fileURLToPath(new URL('../dist', import.meta.url));
const types = { '.html': 'text/html; charset=utf-8', '.js': 'text/javascript', '.css': 'text/css' };

/** One unmasked text frame [RFC 6455 5.2]. */
function textFrame(s) {
  const body = Buffer.from(s);
  const head = body.length < 126 ? Buffer.from([0x81, body.length]) : body.length < 65536 ? Buffer.from([0x81, 126, body.length >> 8, body.length & 255]) : Buffer.from([0x81, 127, 0, 0, 0, 0, body.length >>> 24, (body.length >> 16) & 255, (body.length >> 8) & 255, body.length & 255]);
  return Buffer.concat([head, body]);
}

function stored() {
  const run = new Run('r0001', 1, Date.parse('2026-11-30T09:12:00Z'), 7);
  const frames = [run.hello()];
  const hellos = [run.hello()]; // one a second, to open a window with
  while (!run.done) {
    frames.push(...run.next());
    if (run.scan % scanRate === 0) hellos.push(run.hello());
  }
  run.info.ended = run.stamp();
  return { info: run.info, frames, hellos };
}

/** Starts the server; gives its address and a function to stop it. */
export async function start(port = 0) {
  const old = stored();
  let live = new Run('r0002', 2, Date.now(), 11);
  let seen = []; // frames of the live run
  const sockets = new Set();
  const send = (f) => { for (const s of sockets) s.write(textFrame(JSON.stringify(f))); };
  const timer = setInterval(() => {
    while (live.start + live.time * 1000 < Date.now()) {
      for (const f of live.next()) {
        seen.push(f);
        send(f);
      }
      if (live.done) {
        live = new Run('r0002', live.info.number + 1, live.start + runLength * 1000, 11, live.epoch, live.n);
        seen = [];
        send(live.hello());
      }
    }
  }, 20);

  const seconds = (f, run = 'r0001') => (Date.parse(f.t) - Date.parse((run === 'r0001' ? old.info : live.info).started)) / 1000;
  function series(run, names, from, to, points) {
    const out = {};
    const frames = (run === 'r0001' ? old.frames : seen).filter((f) => f.kind === 'operating_point' && seconds(f, run) >= from && seconds(f, run) < to);
    const size = Math.max(1, Math.ceil(frames.length / points));
    for (const name of names) {
      if (name === 'choke_state') {
        const turns = frames.filter((f, i) => i === 0 || f[name] !== frames[i - 1][name]);
        out[name] = { unit: '', t: turns.map((f) => seconds(f, run)), state: turns.map((f) => f[name]), cause: null };
        continue;
      }
      const s = { unit: '', t: [], min: [], max: [], last: [], n: [], cause: null };
      for (let i = 0; i < frames.length; i += size) {
        const part = frames.slice(i, i + size);
        const v = part.map((f) => f[name]).filter((x) => typeof x === 'number');
        s.t.push(seconds(part[0], run));
        s.min.push(v.length ? Math.min(...v) : null);
        s.max.push(v.length ? Math.max(...v) : null);
        s.last.push(v.length ? v[v.length - 1] : null);
        s.n.push(v.length);
      }
      out[name] = s;
    }
    return { through: '1.1', series: out };
  }

  async function answer(req, res) {
    const url = new URL(req.url, 'http://x');
    const json = (status, body) => {
      res.writeHead(status, { 'Content-Type': status < 400 ? 'application/json' : 'application/problem+json' });
      res.end(JSON.stringify(body));
    };
    const parts = url.pathname.split('/').slice(1).map(decodeURIComponent);
    if (parts[0] !== 'api') {
      const file = join(dist, normalize(url.pathname === '/' ? '/index.html' : url.pathname));
      try {
        const body = readFileSync(file);
        res.writeHead(200, { 'Content-Type': types[extname(file)] ?? 'application/octet-stream' });
        res.end(body);
      } catch {
        json(404, { title: 'not found', detail: url.pathname });
      }
      return;
    }
    let body = '';
    for await (const chunk of req) body += chunk;
    const sent = body ? JSON.parse(body) : {};
    if (parts[1] === 'rigs' && parts.length === 2) return json(200, [rig]);
    if (parts[1] === 'rigs' && parts[3] === 'hello') return json(200, live.hello());
    if (parts[1] === 'rigs' && parts[3] === 'throat-curve') {
      const npr = Array.from({ length: 81 }, (_, i) => 1 + i * 0.025);
      return json(200, { npr, flow_parameter: npr.map((v) => 0.97 * flowParameter(v)), critical_npr: chokeNPR });
    }
    if (parts[1] === 'alarms' && req.method === 'POST') {
      const frames = live.acknowledge(parts[2], sent.revision);
      if (!frames) return json(409, { title: 'alarm moved on', status: 409 });
      frames.forEach(send);
      return json(202, { epoch: live.epoch, n: live.n });
    }
    if (parts[1] === 'alarms') return json(200, [...live.alarms.values()]);
    if (parts[1] === 'runs' && parts[3] === 'marks') {
      send(live.wrap('mark', { mark: sent }));
      return json(202, { epoch: live.epoch, n: live.n });
    }
    const summary = ({ number, ...info }, state, duration) => ({ ...info, title: `Run ${number}`, state, keep: state === 'ended', notes: state === 'ended' ? 'acceptance, first light' : '', tags: [], size_bytes: 4_812_000, alarms: 3, duration_s: duration });
    if (parts[1] === 'runs' && parts.length === 2) return json(200, [summary(old.info, 'ended', runLength), summary(live.info, 'active', null)]);
    if (parts[1] === 'runs' && parts.length === 3) return json(200, parts[2] === 'r0001' ? summary(old.info, 'ended', runLength) : summary(live.info, 'active', null));
    if (parts[1] === 'runs' && parts[3] === 'series') return json(200, series(parts[2], url.searchParams.get('names').split(','), Number(url.searchParams.get('from')), Number(url.searchParams.get('to')), Number(url.searchParams.get('points'))));
    if (parts[1] === 'runs' && parts[3] === 'messages') {
      const [from, to] = [Number(url.searchParams.get('from')), Number(url.searchParams.get('to'))];
      const kinds = (url.searchParams.get('kinds') ?? '').split(',').filter(Boolean);
      res.writeHead(200, { 'Content-Type': 'application/x-ndjson' });
      const [all, hellos] = parts[2] === 'r0001' ? [old.frames, old.hellos] : [seen, [live.hello()]];
      const hello = hellos[Math.min(Math.floor(from), hellos.length - 1)];
      for (const f of [hello, ...all.filter((f) => f.kind !== 'hello' && seconds(f, parts[2]) >= from && seconds(f, parts[2]) < to)]) {
        if (kinds.length === 0 || kinds.includes(f.kind)) res.write(JSON.stringify(f) + '\n');
      }
      return res.end();
    }
    return json(404, { title: 'not found', detail: url.pathname });
  }

  const server = createServer((req, res) => { answer(req, res).catch((e) => { res.statusCode = 500; res.end(String(e)); }); });
  server.on('upgrade', (req, socket) => {
    const key = createHash('sha1').update(req.headers['sec-websocket-key'] + '258EAFA5-E914-47DA-95CA-C5AB0DC85B11').digest('base64');
    socket.write(`HTTP/1.1 101 Switching Protocols\r\nUpgrade: websocket\r\nConnection: Upgrade\r\nSec-WebSocket-Accept: ${key}\r\n\r\n`);
    socket.write(textFrame(JSON.stringify(live.hello())));
    sockets.add(socket);
    for (const e of ['close', 'error', 'end']) socket.on(e, () => { sockets.delete(socket); socket.destroy(); });
    socket.on('data', () => undefined);
  });
  await new Promise((done) => { server.listen(port, '127.0.0.1', done); });
  return {
    url: `http://127.0.0.1:${server.address().port}/`,
    stop() {
      clearInterval(timer);
      for (const s of sockets) s.destroy();
      server.closeAllConnections();
      return new Promise((done) => { server.close(done); });
    },
  };
}

if (process.argv[1] === fileURLToPath(import.meta.url)) console.log((await start(Number(process.argv[2] ?? 8190))).url);
