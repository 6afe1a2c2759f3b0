// The frames of /live and of /api/runs/{id}/messages, as the server sends them.
// Every number is SI, null means not available; times are RFC 3339 UTC.

export type Num = number | null;
export type Priority = 'warning' | 'caution' | 'advisory' | 'note';
export type AlarmState =
  | 'unacknowledged' | 'acknowledged' | 'returned_unacknowledged'
  | 'latched_unacknowledged' | 'latched_acknowledged'
  | 'shelved' | 'suppressed_by_design' | 'out_of_service' | 'normal';
export type ChokeState = 'choked' | 'unchoked' | 'no_flow' | 'unknown';

export interface Alarm {
  id: string;
  rule: string;
  title: string;
  text: string;
  priority: Priority;
  state: AlarmState;
  raised: string | null; // null when it was put aside without being raised
  changed: string;
  revision: number;
  caution: string;
  response: string;
  value: Num;
  unit: string;
  acknowledged_by: string;
  reason: string;
  until: string | null;
  past: boolean;
  first_out: boolean;
  group: string;
  unknown: boolean;
  under?: string | null; // id of the alarm that it is a consequence of
  dimension?: string; // of the value
}

/** What is used up of the allowance of one EGT band. */
export interface Ledger {
  name: string;
  kind: 'run' | 'start';
  limit_k: number;
  allowance_s: number;
  per_run_s: number;
  elapsed_s: number;
  assumed_s: number;
  run_total_s: number;
  over: boolean;
  exceeded: boolean;
  holds?: boolean; // false for a start band once idle was reached
  peak_k: Num;
  excursions: number;
}

export interface Band {
  name: string;
  kind: 'run' | 'start';
  limit_k: number;
  allowance_s: number;
  per_run_s: number;
}

export interface Run {
  id: string;
  number: number;
  rig: string;
  engine: string;
  started: string;
  ended: string | null;
  by: string;
  designation?: string; // by the scheme of the rig file; this and what follows: not in runs of older builds
  test?: string;
  purpose?: string;
  engine_build?: string;
  nozzle_serial?: string;
  fuel_batch?: string;
  aborted?: boolean; // its start was given up before idle
}

export interface Channel {
  id: string;
  title: string;
  unit: string;
  dimension: string;
  reference: string;
  low: Num;
  high: Num;
  recorded_only: boolean;
  station: string;
  sensor?: Sensor | null; // null: nothing is on file
  swaps?: Sensor[] | null; // that took its place, by the rig file
}

/** What is on file of a sensor; dates are YYYY-MM-DD, "" is not stated. */
export interface Sensor { valid_from: string | null; serial: string; certificate: string; calibrated: string; due: string; waiver: { who: string; why: string; until: string } | null }

export interface RigInfo {
  id: string;
  title: string;
  engine_model: string;
  engine_serial: string;
  engine_build: string;
  nozzle_serial: string;
  limits_version: string;
  nozzle_measured_on?: string;
  test?: string;
  purpose?: string;
  fuel?: { batch: string; density_kg_m3: Num; lower_heating_value_j_kg: Num; hydrogen_to_carbon: Num };
  /** Of the facility, a name of the IANA database; empty = UTC. */
  time_zone?: string;
  /** What follows the record and is set up: "database", "webhook"; only in /api/rigs. */
  follows?: string[];
}

export interface Source { topic: string; age_s: Num; messages: number; skew_s: Num; alive: boolean }
/** A part beside the watch that fails: since when, why, and how much waits for it. */
export interface PartFailure { since: string; why: string; behind: number }
export interface Session { filter: string; connected: boolean }

/** A line of the operator log; fields that are not used are left out. */
export interface LogEntry {
  t?: string; // in lists; a frame has its own
  what: string;
  alarm?: string | null;
  rule?: string | null;
  channel?: string | null;
  name?: string | null;
  value?: Num;
  unit?: string | null;
  text?: string;
  reason?: string;
  by?: string;
  role?: string;
  valid_from?: string | null;
  serial?: string | null;
}

/** The rig and rule files in force. */
export interface ConfigState {
  hash: string;
  by: string;
  approved_by: string;
  since: string | null;
  refused: { t: string; why: string } | null;
}

/** What an engine has been through, over all its runs. */
export interface Life {
  engine_serial?: string; // of an engine
  nozzle_serial?: string; // of a nozzle
  aborted_starts?: number;
  hours_choked?: number;
  starts: number;
  hot_starts: number;
  hung_starts: number;
  no_lights: number;
  flame_outs: number;
  hours: number;
  cycles: number;
  bands: { name: string; seconds: number; peak_k: Num; excursions: number; exceedances: number }[] | null;
}

/** One excursion above an EGT band. */
export interface Exceedance {
  band: string;
  kind: string;
  limit_k: number;
  allowance_s: number;
  began: string;
  ended: string | null;
  duration_s: number;
  assumed_s: number;
  peak_k: Num;
  exceeded: boolean;
  above: { band: string; seconds: number }[] | null;
}
/** Something that happened to the engine in a run. */
export interface EngineEvent { t: string; event: string; egt_k: Num; speed_rpm: Num; rundown_s: Num }
export interface ExceedanceReply { exceedances: Exceedance[] | null; events?: EngineEvent[] | null; life: Life | null; nozzle_life?: Life | null }

/** How an alarm system did over a time, against published targets. */
export interface AlarmFigures {
  from: string;
  to: string;
  seconds: number;
  graded: boolean;
  why_not: string | null;
  raised: number;
  per_10_min: Num;
  peak_10_min: Num;
  peak_at: string | null;
  standing_now: number;
  standing_peak: number;
  standing_mean: Num;
  stale?: number;
  chattering: { rule: string; times: number }[] | null;
  shelved: number;
  out_of_service: number;
  acknowledged_after_s_median: Num;
  by_priority: Partial<Record<Priority, { raised: number; share: Num }>> | null;
  targets: { figure: string; target: number; met: boolean | null; source: string }[] | null;
}

/** What a point of a test card asks of one quantity: target ± tolerance, or a bound. */
export interface CardTarget { quantity: string; title: string; unit: string; text: string; target: Num; tolerance: Num; low: Num; high: Num }
export interface CardPoint {
  name: string;
  targets: CardTarget[] | null;
  soak_s: number;
  average_s: number;
  automatic: boolean;
  good: { name: string; channels: string[] | null; at_least: number }[] | null;
  expect_choke: '' | 'armed' | 'disarmed'; // "": by speed
}
export interface CardProgress { status: 'open' | 'taken' | 'accepted' | 'skipped'; numbers: number[] | null; reason: string; by: string }
/** How the current point stands in the last scan. */
export interface CardNow {
  t: string;
  targets: { value: Num; off: Num; off_tolerances: Num; inside: boolean }[] | null; // in the order of the point's
  held_since: string | null;
  soak_left_s: Num;
  stabilised: boolean;
  why: '' | 'no_data' | 'target' | 'channel' | 'soak' | 'unsteady';
  quantity: string;
  channel: string;
  steady_reason: string;
  slope: Num;
  averaging: boolean;
  averaging_left_s: Num;
  armed: boolean;
}
/** A point that was taken; its number is never given again. */
export interface TakenPoint {
  number: number;
  point: number;
  name: string;
  card: string;
  run: string;
  from: string;
  to: string;
  scans: number;
  steady: number;
  automatic: boolean;
  status: 'taken' | 'accepted' | 'rejected';
  by: string;
  judged_by: string;
  judged: string | null;
  reason: string;
  doubts: string[] | null;
  values?: TestValue[] | null; // not in frames of kind card
}
export interface Card {
  title: string;
  number: string;
  revision: string;
  by: string;
  for: string;
  hash: string;
  loaded: string;
  loaded_by: string;
  points: CardPoint[];
  progress: CardProgress[];
  current: number; // index into points; −1 when nothing is left
  now?: CardNow | null;
  taken: TakenPoint[] | null;
}

export interface CheckItem { id: string; kind: string; channel: string; title: string; passed: boolean; text: string; value: Num; limit: Num; u95: Num; unit: string; by: string }
/** The checks of the data system before or after a run. */
export interface CheckSet {
  phase: 'before' | 'after';
  state: 'running' | 'done' | 'broken_off';
  why: string;
  run: string;
  began: string;
  ended: string | null;
  warmth: 'cold' | 'warm';
  by: string;
  note: string;
  planned_s: Num;
  passed: number;
  of: number;
  summary: string;
  config_hash: string;
  limits_version: string;
  items: CheckItem[] | null;
}
export interface Checks { before: CheckSet | null; after: CheckSet | null; running: CheckSet | null; window_s: number; ticks: { id: string; title: string }[] | null }

/** What one shift leaves to the next. */
export interface Handover {
  t: string;
  by: string;
  rig: RigInfo;
  run: Run | null;
  alarms: Partial<Record<'standing' | 'shelved' | 'out_of_service' | 'suppressed', Alarm[] | null>>;
  /** Sensors whose calibration is past its due date; who answers for it, where somebody does. */
  waivers: { channel: string; serial: string; due: string; state: string; who?: string; why?: string; until?: string }[] | null;
  checks: Checks | null;
  card: { title: string; number: string; revision: string; open: string[] | null; skipped?: string[] | null; awaiting: number[] | null } | null;
  limits_version: string;
  config: ConfigState & { reason?: string };
  notes: LogEntry[] | null;
}

export interface QuantityInfo { name: string; unit: string; title: string }

interface Numbered { epoch: number; n: number; t: string }

export interface StatusFrame extends Numbered {
  kind: 'status';
  host_time: string;
  data_age_s: Num;
  catching_up: boolean;
  recording: boolean;
  not_recording_since: string | null;
  input_path: boolean;
  clock: boolean;
  sources: Source[] | null;
  counters: Record<string, number> | null;
  run_active: boolean;
  rules_unknown: number;
  sessions: Session[] | null;
  clock_skew_s?: Num;
  database?: PartFailure | null; // null while it follows, or where there is none
  webhook?: PartFailure | null;
  disk?: PartFailure | null; // null unless it will soon be full
  speaking?: Speaking; // only of one of two watches on a rig
}

/** How a watch stands to the other one of its pair. One speaks: over MQTT, to the webhook, by sound. */
export interface Speaking {
  watch: string; // this one
  name: string | null; // the one that speaks; null: none is heard
  since: string | null;
  other: string | null; // the other; null: it is not heard
  why: string; // this one cannot speak; empty: it could
}

export interface HelloFrame extends Numbered {
  kind: 'hello';
  api: number;
  host_time: string;
  scan_rate: number;
  config_hash: string;
  build: string;
  run: Run | null;
  rig: RigInfo;
  channels: Channel[] | null;
  quantities: QuantityInfo[] | null;
  bands: Band[] | null;
  choke_armed_above_rpm: Num;
  alarms: Alarm[] | null;
  ledgers: Ledger[] | null;
  status: StatusFrame | null;
  log?: LogEntry[] | null;
  life?: Life | null;
  nozzle_life?: Life | null;
  cooldown?: { at_least_s: number; before_restart_s: number };
  config?: ConfigState | null;
  card?: Card | null;
  checks?: Checks | null;
}

/** Quantities of an operating point that the page shows; keys as in the API. */
export const quantityKeys = [
  'npr', 'npr_u95', 'npr_rake', 'critical_npr', 'choke_npr',
  'choke_margin_percent', 'choke_margin_percent_u95', 'choke_margin_percent_low95', 'choke_margin_percent_high95', 'choke_margin_pa',
  'p_choked', 'throat_mach', 'barometer_pa', 'throat_area_m2', 'exit_velocity_m_s', 'referred_flow_kg_s',
  'mass_flow_kg_s', 'mass_flow_kg_s_u95', 'gross_thrust_n', 'gross_thrust_n_u95', 'measured_thrust_n',
  'flow_parameter', 'total_pressure_pa', 'total_temperature_k', 'back_pressure_pa', 'fuel_air_ratio', 'humidity_ratio', 'water_air_ratio',
  'discharge_coefficient', 'air_flow_kg_s', 'fuel_flow_kg_s', 'flow_balance_kg_s',
  'independent_flow_kg_s', 'independent_flow_kg_s_u95', 'independent_flow_parameter',
  'egt_indicated_k', 'egt_spread_k', 'egt_hottest_k', 'egt_coldest_k', 'speed_rpm',
  'fuel_off_s', 'rest_s', 'cooldown_left_s',
  'choke_loss_in_s', 'choke_loss_in_s_low95', 'choke_loss_in_s_high95', 'egt_limit_in_s', 'egt_limit_in_s_low95', 'egt_limit_in_s_high95',
] as const;
export type Quantity = (typeof quantityKeys)[number];

export interface PointFrame extends Numbered, Partial<Record<Quantity, Num>> {
  kind: 'operating_point';
  scan: number;
  choke_state: ChokeState;
  choke_marginal: boolean;
  choke_armed: boolean;
  choke_armed_by?: string | null; // "speed_rule", "test_card"
  lit: boolean;
  phase: string;
  back_pressure_from: string;
  total_pressure_from?: string; // not in runs of older builds
  total_temperature_from: string;
  choke_npr_from: string;
  steady?: boolean; // this and the reasons: not in runs of older builds
  steady_reason?: string | null;
  choke_loss_reason?: string | null;
  egt_limit_reason?: string | null;
  egt_probes_used: number;
  rake_probes_used: number;
  cause: string | null;
  egt_cause: string | null;
  warnings: string[] | null;
}

export interface ChannelValue {
  value: Num;
  raw: Num;
  quality: string;
  age_s: Num;
  finding?: string; // what is wrong with the sensor; "" for nothing
  proven?: boolean; // else it is suspected
  calibration?: 'not_on_file' | 'in_date' | 'waived' | 'expired'; // of its sensor
}
export interface ChannelsFrame extends Numbered { kind: 'channels'; channels: Record<string, ChannelValue> }
export interface AlarmFrame extends Numbered { kind: 'alarm'; alarm: Alarm }
export interface LedgerFrame extends Numbered { kind: 'ledger'; bands: Ledger[] }
export interface Mark { text: string; by: string }
export interface MarkFrame extends Numbered { kind: 'mark'; mark: Mark }
export interface RunFrame extends Numbered { kind: 'run'; event: 'started' | 'ended'; run: Run }
export interface LogFrame extends Numbered { kind: 'log'; entry: LogEntry }
export interface ConfigFrame extends Numbered { kind: 'config'; config: ConfigState }
export interface CardFrame extends Numbered { kind: 'card'; card: Card | null }
export interface CardPointFrame extends Numbered { kind: 'card_point'; point: TakenPoint }
export interface ChecksFrame extends Numbered { kind: 'checks'; checks: CheckSet }
export interface ResetFrame { kind: 'reset'; reason: string }

export type Frame =
  | HelloFrame | PointFrame | ChannelsFrame | AlarmFrame | LedgerFrame
  | StatusFrame | MarkFrame | RunFrame | LogFrame | ConfigFrame | CardFrame | CardPointFrame | ChecksFrame | ResetFrame;

/** A line of /api/runs. */
export interface RunSummary extends Partial<Pick<Run, 'designation' | 'test' | 'purpose' | 'aborted'>> {
  id: string;
  number: number;
  rig: string;
  engine: string;
  title?: string;
  by: string;
  started: string;
  ended: string | null;
  state: 'active' | 'ended' | string;
  keep: boolean;
  notes: string;
  tags: string[] | null;
  size_bytes: number;
  alarms: number;
  duration_s: Num; // null while it goes on
  parent?: string | null; // of a reduction: the run whose records were stepped again
  reduced_by?: string | null;
}

/** A quantity of a test point; standard uncertainties, and both combined at 95 %. */
export interface TestValue { name: string; unit: string; value: Num; type_a: Num; type_b: Num; u95: Num; coverage_factor: Num; effective_samples: Num; standard_deviation: Num }
export interface TestPoint {
  number: number;
  name: string;
  from: string;
  to: string;
  from_s: number;
  to_s: number;
  scans: number;
  steady_share: number;
  values: TestValue[];
  doubts: string[] | null;
}
export interface TestPoints { run: string; how: string; points: TestPoint[]; left_out: string[] }

export interface ThroatCurve { npr: number[]; flow_parameter: number[]; critical_npr: number }

export interface Series {
  unit: string;
  t: number[]; // seconds of the run
  min?: Num[];
  max?: Num[];
  last?: Num[];
  n?: number[];
  state?: string[]; // of a state: its transitions
  cause: string | null;
}
export interface SeriesReply { through: string; series: Record<string, Series> }

/** How a quantity of run b differs from that of run a, b − a, over the scans that have both. */
export interface Difference { name: string; unit: string; scans: number; mean: Num; rms: Num; largest: Num; at_s: Num; a: Num; b: Num; only_a: number; only_b: number }
export interface AlarmChange { change: 'appears' | 'vanishes' | 'moves'; rule: string; title: string; a_s: Num; b_s: Num; moved_s: Num }
/** Two runs scan by scan. */
export interface ScansCompared {
  a: string;
  b: string;
  by: string;
  zero: string; // what time counts from, in words
  zero_a_s: number;
  zero_b_s: number;
  paired: number;
  only_a: number;
  only_b: number;
  same: boolean;
  differences: Difference[];
  equal: string[];
  alarms: AlarmChange[];
  alarms_same: number;
}
export interface Bin { x: Num; baseline: Num; scatter: Num; scans: number; value: Num; departure: Num; departure_u95: Num; beyond: boolean; scans_last: number }
export interface Curve { x: string; y: string; x_unit: string; y_unit: string; bins: Bin[] }
/** The last run against the curves of the others, over an operating parameter. */
export interface CurvesCompared {
  baseline: string[];
  last: string;
  by: string;
  steady_only: boolean;
  curves: Curve[];
  runs: { run: string; started: string; effective_area_m2: Num; effective_area_m2_u95: Num; area_drift_percent: Num; area_drift_percent_u95: Num; egt_margin_k: Num }[];
}
