// A made-up run for tests of the page: smooth curves, seeded noise, no physics
// beyond what the display needs to look plausible.

/** mulberry32: a small seeded generator, uniform in [0, 1). */
export function random(seed) {
  return () => {
    seed = (seed + 0x6d2b79f5) | 0;
    let t = Math.imul(seed ^ (seed >>> 15), 1 | seed);
    t = (t + Math.imul(t ^ (t >>> 7), 61 | t)) ^ t;
    return ((t ^ (t >>> 14)) >>> 0) / 2 ** 32;
  };
}

// time s, speed rpm, NPR, EGT °C, phase
const course = [
  [0, 0, 1.0, 18, 'off'], [2, 0, 1.0, 18, 'off'], [4, 2500, 1.01, 20, 'cranking'], [6, 6000, 1.05, 480, 'lighting'], [8, 9500, 1.17, 520, 'idle'],
  [12, 9500, 1.17, 500, 'idle'], [18, 21000, 2.3, 660, 'accelerating'], [26, 21000, 2.3, 655, 'steady'], [27.5, 20300, 1.66, 560, 'decelerating'],
  [31, 19800, 1.68, 560, 'decelerating'], [34, 21000, 2.32, 690, 'accelerating'], [36, 21100, 2.36, 728, 'accelerating'], [45, 21100, 2.36, 733, 'steady'],
  [47, 19000, 1.95, 620, 'decelerating'], [52, 9500, 1.17, 500, 'idle'], [57, 9500, 1.17, 500, 'idle'], [60, 5000, 1.04, 380, 'rundown'], [66, 0, 1.0, 250, 'cooling'], [70, 0, 1.0, 220, 'off'],
];
export const runLength = 70; // s
export const scanRate = 20;
export const chokeNPR = 1.8636;
const pb = 100_400; // Pa

function at(t) {
  let i = 1;
  while (i < course.length - 1 && course[i][0] < t) i++;
  const [a, b] = [course[i - 1], course[i]];
  const x = Math.min(1, Math.max(0, (t - a[0]) / (b[0] - a[0])));
  const s = x * x * (3 - 2 * x);
  return { n: a[1] + (b[1] - a[1]) * s, npr: a[2] + (b[2] - a[2]) * s, egt: a[3] + (b[3] - a[3]) * s, phase: b[4] };
}

/** Ideal flow parameter of a perfect gas of γ 1.333 against NPR. */
export function flowParameter(npr) {
  const g = 1.333;
  const critical = ((g + 1) / 2) ** (g / (g - 1));
  const r = 1 / Math.min(Math.max(npr, 1), critical);
  return Math.sqrt((2 * g) / (g - 1)) * r ** (1 / g) * Math.sqrt(Math.max(0, 1 - r ** ((g - 1) / g)));
}

export const rig = { id: 'cell_4', title: 'Cell 4, small turbojet', engine_model: 'TJ-70', engine_serial: '0031', engine_build: 'B2', nozzle_serial: 'N-112', limits_version: 'L3' };
const channel = (id, title, unit, dimension, reference, low, high, station) => ({ id, title, unit, dimension, reference, low, high, recorded_only: !station, station });
export const channels = [
  ...[1, 2, 3, 4].map((i) => channel(`p7_${i}`, `Nozzle entry total pressure ${i}`, 'kPa', 'pressure', 'gauge', 80e3, 350e3, 'p7')),
  ...[1, 2, 3, 4].map((i) => channel(`t7_${i}`, `Rake temperature ${i}`, 'degC', 'temperature', '', 233, 1273, 't7')),
  ...[1, 2, 3, 4, 5, 6, 7, 8].map((i) => channel(`egt_${i}`, `Exhaust gas temperature ${i}`, 'degC', 'temperature', '', 233, 1373, 'egt')),
  channel('p_baro', 'Barometer', 'hPa', 'pressure', 'absolute', 90e3, 110e3, 'barometer'),
  channel('p_exit', 'Exit plane static pressure', 'kPa', 'pressure', 'differential', 90e3, 110e3, 'back_pressure'),
  channel('n1', 'Rotor speed', 'rpm', 'frequency or speed of rotation', '', 0, 450, 'speed'),
  channel('wf', 'Fuel flow', 'kg/h', 'mass flow', '', 0, 0.3, 'fuel_flow'),
  channel('dp_bell', 'Bellmouth depression', 'kPa', 'pressure', 'differential', 0, 10e3, 'bellmouth'),
  channel('thrust', 'Load cell', 'kN', 'force', '', -1e3, 12e3, 'thrust'),
  channel('vib_1', 'Vibration, front', 'mm/s', 'velocity', '', 0, 0.05, ''),
  channel('vib_2', 'Vibration, rear', 'mm/s', 'velocity', '', 0, 0.05, ''),
  channel('p_oil', 'Oil pressure', 'bar', 'pressure', 'gauge', 0, 1e6, ''),
  channel('t_oil', 'Oil temperature', 'degC', 'temperature', '', 233, 473, ''),
];
export const bands = [
  { name: 'run_720', kind: 'run', limit_k: 993.15, allowance_s: 5, per_run_s: 0 },
  { name: 'run_760', kind: 'run', limit_k: 1033.15, allowance_s: 0, per_run_s: 0 },
  { name: 'start_800', kind: 'start', limit_k: 1073.15, allowance_s: 3, per_run_s: 0 },
];
const texts = {
  unchoke_armed: {
    title: 'Unchoke while armed', priority: 'caution', text: 'Nozzle unchoked while the choke watch is armed.',
    caution: 'Flow and thrust now depend on the cell’s back pressure. Watch margin, NPR and cell depression; points taken now are not choked points.', response: 'Follow facility procedure for an unchoked nozzle. This display is not protection.',
  },
  egt_run_720: {
    title: 'EGT above 720 °C, allowance used', priority: 'warning', text: 'Indicated EGT above 720 °C for more than 5 s (limit 5 s).',
    caution: 'Hot section at risk: watch indicated EGT, the spread and the hottest probe.', response: 'Follow facility procedure for over-temperature. This display is not protection.',
  },
  probe_lost: {
    title: 'EGT probe 6 lost', priority: 'advisory', text: 'EGT probe egt_6 gives no usable value.', caution: 'Indicated EGT is made of 7 of 8 probes.', response: 'Note it in the test log; see the facility’s instrumentation procedure.',
  },
};

/** A run that begins at `start` (ms UTC). next() gives the frames of the next scan. */
export class Run {
  constructor(id, number, start, seed, epoch = 1, n = 0) {
    Object.assign(this, { start, epoch, n, scan: 0, noise: random(seed) });
    this.info = { id, number, rig: rig.id, engine: `${rig.engine_model} ${rig.engine_serial}`, started: new Date(start).toISOString(), ended: null, by: 'engine' };
    this.alarms = new Map();
    this.ledgers = bands.map((b) => ({ ...b, elapsed_s: 0, holds: true, assumed_s: 0, run_total_s: 0, over: false, exceeded: false, peak_k: null, excursions: 0 }));
    this.armed = false;
    this.choked = false;
    this.unchokedSince = null;
    this.idleSeen = false;
  }

  get time() { return this.scan / scanRate; }
  get done() { return this.time >= runLength; }
  stamp() { return new Date(this.start + this.time * 1000).toISOString().replace('Z', '000Z'); }
  wrap(kind, body) { return { kind, epoch: this.epoch, n: ++this.n, t: this.stamp(), ...body }; }
  gauss() { return Math.sqrt(-2 * Math.log(this.noise() + 1e-12)) * Math.cos(2 * Math.PI * this.noise()); }

  alarm(rule, present, force = {}) {
    const old = this.alarms.get(rule);
    if (!!old === present && !force.acknowledge) return [];
    let a;
    if (force.acknowledge) a = { ...old, state: old.state === 'returned_unacknowledged' ? 'normal' : 'acknowledged', acknowledged_by: 'console' };
    else if (present) a = { id: `${this.info.id}/${rule}/${this.stamp()}`, rule, ...texts[rule], state: 'unacknowledged', raised: this.stamp(), revision: 0, value: null, unit: '', acknowledged_by: '', reason: '', until: null, past: false, first_out: false, group: '', unknown: false };
    else if (old.state === 'returned_unacknowledged') return [];
    else a = { ...old, state: old.state === 'acknowledged' ? 'normal' : 'returned_unacknowledged' };
    a = { ...a, changed: this.stamp(), revision: a.revision + 1 };
    if (a.state === 'normal') this.alarms.delete(rule); else this.alarms.set(rule, a);
    return [this.wrap('alarm', { alarm: a })];
  }

  acknowledge(id, revision) {
    for (const [rule, a] of this.alarms) if (a.id === id) return a.revision === revision ? this.alarm(rule, true, { acknowledge: true }) : null;
    return null;
  }

  next() {
    this.scan++;
    const t = this.time;
    const c = at(t);
    const npr = Math.max(1, c.npr + 0.003 * this.gauss());
    const egt = c.egt + 0.8 * this.gauss() + 273.15;
    const lit = c.egt > 200 && c.n > 4000;
    const t7 = c.egt + 273.15 - 40;
    const margin = (npr / chokeNPR - 1) * 100;
    if (this.choked ? margin < -0.3 : margin > 0.3) this.choked = !this.choked;
    const flowing = npr > 1.012;
    this.armed = this.armed ? c.n > 19000 : c.n > 19500;
    const p7 = npr * pb;
    const cd = 0.97;
    const phi = cd * flowParameter(npr);
    const w8 = flowing ? (phi * 0.025 * p7) / Math.sqrt(287.3 * t7) : null;
    const air = w8 === null ? null : w8 * (1 + 0.003 * this.gauss());
    const independent = c.n > 6000 ? air : null;
    const missing = t > 50 && t < 52; // a rake outage: unknown state with its cause
    const point = this.wrap('operating_point', {
      scan: this.scan,
      npr: missing ? null : npr, npr_u95: missing ? null : 0.009, npr_rake: missing ? null : npr * 1.004, critical_npr: 1.8636, choke_npr: missing ? null : chokeNPR,
      choke_margin_percent: missing ? null : margin, choke_margin_percent_u95: missing ? null : 0.9, choke_margin_percent_low95: missing ? null : margin - 0.9, choke_margin_percent_high95: missing ? null : margin + 0.9,
      choke_margin_pa: missing ? null : (margin / 100) * pb, p_choked: null,
      mass_flow_kg_s: missing ? null : w8, mass_flow_kg_s_u95: missing || w8 === null ? null : 0.006 * w8 + 0.01, gross_thrust_n: missing || w8 === null ? null : w8 * 560 * Math.sqrt(npr - 1), gross_thrust_n_u95: missing || w8 === null ? null : 45,
      flow_parameter: missing || !flowing ? null : phi, total_pressure_pa: missing ? null : p7, total_temperature_k: missing ? null : t7, back_pressure_pa: pb, fuel_air_ratio: lit ? 0.015 : 0, humidity_ratio: 0.007,
      discharge_coefficient: cd, independent_flow_kg_s: missing ? null : independent, independent_flow_kg_s_u95: missing || independent === null ? null : 0.01 * independent + 0.01, independent_flow_parameter: missing || independent === null || w8 === null ? null : (phi * independent) / w8,
      egt_indicated_k: egt, egt_spread_k: 18 + c.egt / 40, speed_rpm: Math.max(0, c.n + 12 * this.gauss()),
      choke_state: missing ? 'unknown' : !flowing ? 'no_flow' : this.choked ? 'choked' : 'unchoked', choke_marginal: flowing && !missing && Math.abs(margin) < 0.9, choke_armed: this.armed, lit, phase: c.phase,
      back_pressure_from: 'barometer', total_temperature_from: 'rake', choke_npr_from: 'one_dimensional', egt_probes_used: t > 20 ? 7 : 8, rake_probes_used: 4, cause: missing ? 'p7_2 stale' : null, egt_cause: null, warnings: null,
    });
    const values = {};
    for (const ch of channels) {
      let v = 0;
      if (ch.id.startsWith('egt')) v = egt + (Number(ch.id.slice(4)) - 4.5) * (3 + c.egt / 200);
      else if (ch.id.startsWith('t7')) v = t7 + 2 * this.gauss();
      else if (ch.id.startsWith('p7')) v = p7 + 200 * this.gauss();
      else if (ch.id === 'n1') v = c.n / 60;
      else if (ch.id.startsWith('p_')) v = ch.id === 'p_oil' ? 101e3 + 250e3 * (c.n / 21000) : pb + 20 * this.gauss();
      else if (ch.id === 'wf') v = (air ?? 0) * (lit ? 0.015 : 0);
      else if (ch.id === 'thrust') v = (w8 ?? 0) * 520;
      else if (ch.id.startsWith('vib')) v = 0.002 + 0.006 * (c.n / 21000) * this.noise();
      else if (ch.id === 't_oil') v = 320 + c.n / 400;
      else if (ch.id === 'dp_bell') v = 40 * (air ?? 0) ** 2;
      const lost = ch.id === 'egt_6' && t > 20;
      values[ch.id] = { value: lost ? null : v, raw: lost ? 32767 : v / 17, quality: lost ? 'out_of_range' : 'good', age_s: 0.01 + 0.02 * this.noise() };
    }
    const out = [point, this.wrap('channels', { channels: values })];
    if (c.phase === 'idle') this.idleSeen = true;
    for (const l of this.ledgers) if (l.kind === 'start') l.holds = !this.idleSeen;
    let moved = this.scan % 10 === 0;
    for (const l of this.ledgers) {
      const over = (l.kind === 'run' || !this.idleSeen) && egt > l.limit_k - (l.over ? 5 : 0);
      if (over !== l.over) moved = true;
      if (over && !l.over) {
        l.excursions++;
        l.elapsed_s = 0;
      }
      l.over = over;
      if (over) {
        l.elapsed_s += 1 / scanRate;
        l.run_total_s += 1 / scanRate;
        l.peak_k = Math.max(l.peak_k ?? 0, egt);
        if (l.elapsed_s > l.allowance_s) l.exceeded = true;
      }
    }
    if (moved) out.push(this.wrap('ledger', { bands: this.ledgers.map((l) => ({ ...l })) }));
    this.unchokedSince = this.armed && flowing && !this.choked ? this.unchokedSince ?? t : null;
    out.push(...this.alarm('unchoke_armed', this.unchokedSince !== null && t - this.unchokedSince > 0.2));
    out.push(...this.alarm('egt_run_720', this.ledgers[0].over && this.ledgers[0].exceeded));
    if (t > 20) out.push(...this.alarm('probe_lost', true));
    if (this.scan === 24 * scanRate) out.push(this.wrap('mark', { mark: { text: 'point 1 taken', by: 'console' } }));
    if (this.scan % scanRate === 0) out.push(this.status());
    return out;
  }

  status() {
    return this.wrap('status', {
      host_time: this.stamp(), data_age_s: 0.04, catching_up: false, recording: true, not_recording_since: null, input_path: true, clock: true,
      sources: [{ topic: `rigs/${rig.id}/senml`, age_s: 0.02, messages: this.scan * 2, skew_s: 0.003, alive: true }],
      counters: { messages: this.scan * 2, samples: this.scan * channels.length, scans: this.scan, malformed: 2, out_of_range: 14, duplicate: 1 },
      run_active: true, rules_unknown: 0, sessions: [{ filter: `rigs/${rig.id}/#`, connected: true }],
    });
  }

  hello() {
    return {
      kind: 'hello', api: 1, epoch: this.epoch, n: this.n, t: this.stamp(), host_time: this.stamp(), scan_rate: scanRate, config_hash: '3f9a2b7c11d04e58', build: 'test', run: this.info, rig, channels, quantities: [], bands,
      choke_armed_above_rpm: 19500, alarms: [...this.alarms.values()], ledgers: this.ledgers.map((l) => ({ ...l })), status: { ...this.status(), n: this.n },
    };
  }
}
