// Requests to the server beside the page. Failures become sentences for people.

import type { AlarmPath } from './alarms';
import type { Alarm, AlarmFigures, Card, CheckSet, CurvesCompared, ExceedanceReply, Frame, Handover, HelloFrame, LogEntry, RigInfo, RunSummary, ScansCompared, SeriesReply, TakenPoint, TestPoints, ThroatCurve } from './frames';
import type { Session } from './session';

/** What is done to a test card, the last part of an address. */
export type CardStep = 'take' | 'accept' | 'reject' | 'skip' | 'go-to';

/** What is wrong at a place of a file. */
export interface Fault { at: string; message: string; hint: string }

/** A refused or failed request; status 0 when the server was not reached. */
export class RequestError extends Error {
  constructor(readonly status: number, message: string, readonly faults: Fault[] = []) { super(message); }
}

/** What was refused, with what is wrong in the files. */
export function withFaults(e: unknown): Error {
  if (!(e instanceof RequestError) || e.faults.length === 0) return e instanceof Error ? e : new Error(String(e));
  return new Error([e.message, ...e.faults.map((f) => `${f.at}: ${f.message}${f.hint ? ` (${f.hint})` : ''}`)].join('\n'));
}

/** The token that goes with every change, so that no other site can send one. */
export const credentials = { csrf: '' };

async function request(path: string, init: RequestInit = {}): Promise<Response> {
  let reply: Response;
  try {
    reply = await fetch(path, init);
  } catch (e) {
    if (e instanceof DOMException && e.name === 'AbortError') throw e;
    throw new RequestError(0, 'the server was not reached');
  }
  if (reply.ok) return reply;
  let detail = `${reply.status} ${reply.statusText}`;
  let faults: Fault[] = [];
  try {
    const problem = (await reply.json()) as { title?: string; detail?: string; faults?: Fault[] }; // RFC 9457
    detail = [problem.title, problem.detail].filter(Boolean).join(': ') || detail;
    faults = problem.faults ?? [];
  } catch { /* not a problem document: the status line has to do */ }
  throw new RequestError(reply.status, detail, faults);
}

async function get<T>(path: string, signal?: AbortSignal): Promise<T> {
  return (await (await request(path, signal ? { signal } : {})).json()) as T;
}

const change = (method: string, path: string, body?: unknown): Promise<Response> => request(path, {
  method, headers: { 'Content-Type': 'application/json', ...(credentials.csrf ? { 'X-Csrf-Token': credentials.csrf } : {}) }, ...(body === undefined ? {} : { body: JSON.stringify(body) }),
});
const post = (path: string, body: unknown): Promise<Response> => change('POST', path, body);

const id = encodeURIComponent;

/** A random UUID, version 4; crypto.randomUUID is missing on plain HTTP. */
export function uuid(): string {
  const b = crypto.getRandomValues(new Uint8Array(16));
  b[6] = ((b[6] as number) & 15) | 64;
  b[8] = ((b[8] as number) & 63) | 128;
  const hex = [...b].map((x) => x.toString(16).padStart(2, '0')).join('');
  return `${hex.slice(0, 8)}-${hex.slice(8, 12)}-${hex.slice(12, 16)}-${hex.slice(16, 20)}-${hex.slice(20)}`;
}

/** The uncertainty budget of the last scan. */
export interface Budget {
  t: string;
  outputs: {
    quantity: string;
    inputs: { input: string; share: number | null; parts: { channel: string | null; what: string; share: number | null }[] }[];
  }[];
}

export const api = {
  rigs: () => get<RigInfo[]>('api/rigs'),
  hello: (rig: string, signal?: AbortSignal) => get<HelloFrame>(`api/rigs/${id(rig)}/hello`, signal),
  throatCurve: (rig: string, totalTemperature: number, fuelAir: number, humidity: number) =>
    get<ThroatCurve>(`api/rigs/${id(rig)}/throat-curve?total_temperature=${totalTemperature}&fuel_air_ratio=${fuelAir}&humidity_ratio=${humidity}`),
  budget: (rig: string) => get<Budget>(`api/rigs/${id(rig)}/budget`),
  alarms: () => get<Alarm[]>('api/alarms'),
  // `by` may be empty: the server then says "console".
  alarm: (a: Alarm, path: AlarmPath, by: string, reason: string, shelf: number) =>
    post(`api/alarms/${id(a.id)}/${path}`, { revision: a.revision, reason, by, request_id: uuid(), ...(shelf > 0 ? { seconds: shelf } : {}) }),
  mark: (run: string, text: string, by: string) => post(`api/runs/${id(run)}/marks`, { text, by, request_id: uuid() }),
  run: (rig: string, action: 'start' | 'end', by: string) => post(`api/rigs/${id(rig)}/runs`, { action, by, request_id: uuid() }),
  entry: (run: string, e: { name: string; value: number | null; unit: string; text: string }, by: string) => post(`api/runs/${id(run)}/entries`, { ...e, by, request_id: uuid() }),
  swap: (rig: string, e: { channel: string; serial: string; valid_from: string; reason: string; calibration?: string }, by: string) => post(`api/rigs/${id(rig)}/swap`, { ...e, by, request_id: uuid() }),
  readmit: (rig: string, channel: string, reason: string, by: string) => post(`api/rigs/${id(rig)}/readmit`, { channel, reason, by, request_id: uuid() }),
  config: (rig: string, approvedBy: string, reason: string, by: string) => post(`api/rigs/${id(rig)}/config`, { by, approved_by: approvedBy, reason, request_id: uuid() }),
  check: (rig: string, c: { phase: string; warmth: string; ticks: Record<string, string>; planned_s: number | null; note: string }, by: string) => post(`api/rigs/${id(rig)}/checks`, { ...c, by, request_id: uuid() }),
  checks: (run: string) => get<CheckSet[]>(`api/runs/${id(run)}/checks`),
  loadCard: (rig: string, text: string, reason: string, by: string) => post(`api/rigs/${id(rig)}/card`, { text, reason, by, request_id: uuid() }),
  cardStep: (rig: string, step: CardStep, e: { point?: number; number?: number; reason?: string }, by: string) => post(`api/rigs/${id(rig)}/card/${step}`, { ...e, by, request_id: uuid() }),
  card: (run: string) => get<{ card: Card | null; taken: TakenPoint[] | null }>(`api/runs/${id(run)}/card`),
  handover: (rig: string, by: string) => get<Handover>(`api/rigs/${id(rig)}/handover?by=${id(by)}`),
  session: () => get<Partial<Session>>('api/session'),
  login: async (name: string, password: string) => (await (await post('api/session', { name, password })).json()) as Partial<Session>,
  logout: () => change('DELETE', 'api/session'),
  figures: (run: string | null) => get<AlarmFigures>(run === null ? 'api/alarms/figures' : `api/runs/${id(run)}/alarm-figures`),
  exceedances: (run: string) => get<ExceedanceReply>(`api/runs/${id(run)}/exceedances`),
  log: (run: string) => get<{ entries: LogEntry[] | null }>(`api/runs/${id(run)}/log`),
  runs: (find = '') => get<RunSummary[]>(`api/runs${find ? `?find=${id(find)}` : ''}`),
  note: (run: string, c: { keep?: boolean; notes?: string; tags?: string[] }) => change('PATCH', `api/runs/${id(run)}`, c),
  remove: (run: string, number: number, reason: string) => change('DELETE', `api/runs/${id(run)}?number=${number}&reason=${id(reason)}`),
  export: (run: string, what: string, format: string, signal: AbortSignal) => request(`api/runs/${id(run)}/export?what=${what}&format=${format}`, { signal }),
  reportAddress: (run: string) => `api/runs/${id(run)}/report`,
  report: (run: string, signal: AbortSignal) => request(`api/runs/${id(run)}/report`, { signal }),
  points: (run: string, at: string, signal: AbortSignal) => get<TestPoints>(`api/runs/${id(run)}/points?at=${at}`, signal),
  compare: (a: string, b: string, by: string, mark: string, signal: AbortSignal) =>
    get<ScansCompared | CurvesCompared>(`api/runs/compare?a=${id(a)}&b=${id(b)}${by && `&by=${by}`}${mark && `&mark=${id(mark)}`}`, signal),
  runSummary: (run: string) => get<RunSummary>(`api/runs/${id(run)}`),
  series: (run: string, names: readonly string[], from: number, to: number, points: number, signal?: AbortSignal) =>
    get<SeriesReply>(`api/runs/${id(run)}/series?names=${names.join(',')}&from=${from}&to=${to}&points=${points}`, signal),

  /**
   * The frames of [from, to), seconds of the run, one call of `onFrame` each as
   * they arrive, the first a hello as of `from`. With `kinds`, of "alarm,mark", only
   * those, as they are stored: the server then does not step the records again.
   */
  async messages(run: string, from: number, to: number, kinds: string, signal: AbortSignal, onFrame: (f: Frame) => void): Promise<void> {
    const reply = await request(`api/runs/${id(run)}/messages?from=${from}&to=${to}${kinds && `&kinds=${kinds}`}`, { signal });
    const reader = (reply.body as ReadableStream<Uint8Array>).getReader();
    const decoder = new TextDecoder();
    let rest = '';
    for (;;) {
      const { done, value } = await reader.read();
      rest += done ? '\n' : decoder.decode(value, { stream: true });
      let start = 0;
      for (let end = rest.indexOf('\n'); end >= 0; end = rest.indexOf('\n', start)) {
        const line = rest.slice(start, end).trim();
        start = end + 1;
        if (!line) continue;
        const frame = JSON.parse(line) as Frame | { kind: 'error'; detail: string };
        if (frame.kind === 'error') throw new RequestError(0, frame.detail); // the server could not go on
        onFrame(frame);
      }
      rest = rest.slice(start);
      if (done) return;
    }
  },
};
