// Frames for the tests, complete enough for the fold.
import type { Alarm, HelloFrame, PointFrame, StatusFrame } from '../src/frames';
import { rfc3339 } from '../src/time';

export const t0 = Date.parse('2026-12-01T09:00:00Z') / 1000;

export function point(t: number, body: Partial<PointFrame> = {}): PointFrame {
  return {
    kind: 'operating_point', epoch: 1, n: 1, t: rfc3339(t), scan: 1, choke_state: 'choked', choke_marginal: false, choke_armed: true, lit: true, phase: 'steady',
    back_pressure_from: 'exit_plane', total_temperature_from: 'rake', choke_npr_from: 'one_dimensional', egt_probes_used: 8, rake_probes_used: 4, cause: null, egt_cause: null, warnings: [],
    npr: 2.1, choke_npr: 1.86, ...body,
  };
}

export function alarm(body: Partial<Alarm> = {}): Alarm {
  return {
    id: 'r1/egt/1', rule: 'egt', title: 'EGT', text: 'Indicated EGT above 720 °C', priority: 'warning', state: 'unacknowledged', raised: rfc3339(t0), changed: rfc3339(t0), revision: 1,
    caution: 'Hot section at risk.', response: 'Follow facility procedure.', value: null, unit: '', acknowledged_by: '', reason: '', until: null, past: false, first_out: false, group: '', unknown: false, ...body,
  };
}

export function status(t: number, body: Partial<StatusFrame> = {}): StatusFrame {
  return {
    kind: 'status', epoch: 1, n: 1, t: rfc3339(t), host_time: rfc3339(t), data_age_s: 0.05, catching_up: false, recording: true, not_recording_since: null, input_path: true, clock: true,
    sources: [], counters: {}, run_active: true, rules_unknown: 0, sessions: [], ...body,
  };
}

export function hello(t: number, body: Partial<HelloFrame> = {}): HelloFrame {
  return {
    kind: 'hello', api: 1, epoch: 1, n: 0, t: rfc3339(t), host_time: rfc3339(t), scan_rate: 20, config_hash: 'ab', build: 'b',
    run: { id: 'r1', number: 1, rig: 'cell', engine: 'E 1', started: rfc3339(t0), ended: null, by: 'engine' },
    rig: { id: 'cell', title: 'Cell', engine_model: 'E', engine_serial: '1', engine_build: '', nozzle_serial: '', limits_version: 'L1' },
    channels: [], quantities: [], bands: [], choke_armed_above_rpm: 19500, alarms: [], ledgers: [], status: null, ...body,
  };
}
