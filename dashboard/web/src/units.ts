// Every conversion from SI to what the page shows, and every number format. A
// viewer chooses SI or US customary; a channel is shown in the unit that its rig
// file gives, or in its counterpart where that belongs to the other system.

/** A unit: SI value = value · scale + offset. */
interface Unit { scale: number; offset: number; sign: string }

const psi = (0.45359237 * 9.80665) / (0.0254 * 0.0254); // Pa, exact
const inHg = 13595.1 * 9.80665 * 0.0254; // Pa, conventional mercury
const inH2O = 1000 * 9.80665 * 0.0254; // Pa, conventional water
const pound = 0.45359237; // kg, exact
const unit = (scale: number, sign: string, offset = 0): Unit => ({ scale, offset, sign });

const units: Record<string, Unit> = {
  '': unit(1, ''), '1': unit(1, ''), '%': unit(0.01, '%'), '%RH': unit(0.01, '%RH'), 'g/kg': unit(1e-3, 'g/kg'), 'ppm': unit(1e-6, 'ppm'),
  'Pa': unit(1, 'Pa'), 'hPa': unit(100, 'hPa'), 'mbar': unit(100, 'mbar'), 'kPa': unit(1e3, 'kPa'), 'MPa': unit(1e6, 'MPa'), 'bar': unit(1e5, 'bar'),
  'psi': unit(psi, 'psi'), 'inHg': unit(inHg, 'inHg'), 'mmHg': unit(13595.1 * 9.80665e-3, 'mmHg'), 'inH2O': unit(inH2O, 'inH₂O'), 'mmH2O': unit(9.80665, 'mmH₂O'), 'atm': unit(101325, 'atm'),
  'K': unit(1, 'K'), 'degC': unit(1, '°C', 273.15), 'degF': unit(5 / 9, '°F', 273.15 - 160 / 9), 'degR': unit(5 / 9, '°R'),
  'kg/s': unit(1, 'kg/s'), 'g/s': unit(1e-3, 'g/s'), 'kg/min': unit(1 / 60, 'kg/min'), 'kg/h': unit(1 / 3600, 'kg/h'),
  'lb/s': unit(pound, 'lb/s'), 'lb/min': unit(pound / 60, 'lb/min'), 'lb/h': unit(pound / 3600, 'lb/h'),
  'm3/s': unit(1, 'm³/s'), 'm3/h': unit(1 / 3600, 'm³/h'), 'l/s': unit(1e-3, 'l/s'), 'l/min': unit(1e-3 / 60, 'l/min'), 'l/h': unit(1e-3 / 3600, 'l/h'),
  '1/s': unit(1, '1/s'), 'Hz': unit(1, 'Hz'), 'rpm': unit(1 / 60, 'rpm'),
  'm': unit(1, 'm'), 'cm': unit(0.01, 'cm'), 'mm': unit(1e-3, 'mm'), 'um': unit(1e-6, 'µm'), 'in': unit(0.0254, 'in'), 'mil': unit(0.0254e-3, 'mil'), 'ft': unit(0.3048, 'ft'),
  'm2': unit(1, 'm²'), 'cm2': unit(1e-4, 'cm²'), 'mm2': unit(1e-6, 'mm²'), 'in2': unit(0.0254 * 0.0254, 'in²'),
  'N': unit(1, 'N'), 'daN': unit(10, 'daN'), 'kN': unit(1e3, 'kN'), 'lbf': unit(pound * 9.80665, 'lbf'), 'kgf': unit(9.80665, 'kgf'),
  'm/s': unit(1, 'm/s'), 'mm/s': unit(1e-3, 'mm/s'), 'in/s': unit(0.0254, 'in/s'), 'ft/s': unit(0.3048, 'ft/s'),
  'm/s2': unit(1, 'm/s²'), 'g': unit(9.80665, 'g'),
  'kg/m3': unit(1, 'kg/m³'), 'V': unit(1, 'V'), 'mV': unit(1e-3, 'mV'), 'A': unit(1, 'A'), 'mA': unit(1e-3, 'mA'),
  's': unit(1, 's'), 'ms': unit(1e-3, 'ms'), 'rad': unit(1, 'rad'), 'deg': unit(Math.PI / 180, '°'),
};

const siOf: Record<string, string> = {
  'pressure': 'Pa', 'temperature': 'K', 'temperature difference': 'K', 'mass flow': 'kg/s', 'volume flow': 'm3/s',
  'frequency or speed of rotation': '1/s', 'length': 'm', 'area': 'm2', 'force': 'N', 'velocity': 'm/s', 'acceleration': 'm/s2',
  'density': 'kg/m3', 'voltage': 'V', 'current': 'A', 'time': 's', 'angle': 'rad',
};

/** The SI value in the named unit with its sign; in SI when the unit is not known here. */
export function inUnit(si: number, name: string, dimension = ''): { value: number; sign: string } {
  const u = units[name];
  if (u) {
    const offset = dimension === 'temperature difference' ? 0 : u.offset;
    return { value: (si - offset) / u.scale, sign: u.sign };
  }
  const base = units[siOf[dimension] ?? ''];
  return { value: si, sign: base ? base.sign : '' };
}

export const celsius = (k: number): number => k - 273.15;

/** How one kind of quantity is shown. */
export interface Scale {
  sign: string;
  decimals: number;
  /** The value shown for one in SI. */
  of(si: number): number;
  /** The same for a difference or a half width, which has no offset. */
  span(si: number): number;
}

export type System = 'si' | 'us';

/** The units of a viewer. */
export interface UnitSet {
  system: System;
  pressure: Scale;
  temperature: Scale;
  difference: Scale; // of temperatures
  flow: Scale;
  fuel: Scale;
  force: Scale;
  area: Scale;
  velocity: Scale;
  /** The unit in which to show a channel whose rig file gives `name`. */
  channel(name: string): string;
}

function scale(name: string, decimals: number, sign?: string): Scale {
  const u = units[name] as Unit;
  return { sign: sign ?? u.sign, decimals, of: (si) => (si - u.offset) / u.scale, span: (si) => si / u.scale };
}

function difference(name: string): Scale {
  const s = scale(name, 0);
  return { ...s, of: s.span };
}

// A unit of one system and its counterpart in the other. Units that both use, or
// for which no counterpart is usual, stay as the rig file gives them.
const us: Record<string, string> = {
  'Pa': 'psi', 'hPa': 'psi', 'mbar': 'psi', 'kPa': 'psi', 'MPa': 'psi', 'bar': 'psi', 'mmHg': 'inHg', 'mmH2O': 'inH2O', 'K': 'degF', 'degC': 'degF',
  'kg/s': 'lb/s', 'g/s': 'lb/s', 'kg/min': 'lb/min', 'kg/h': 'lb/h', 'N': 'lbf', 'daN': 'lbf', 'kN': 'lbf', 'kgf': 'lbf',
  'm': 'ft', 'cm': 'in', 'mm': 'in', 'um': 'mil', 'm2': 'in2', 'cm2': 'in2', 'mm2': 'in2', 'm/s': 'ft/s', 'mm/s': 'in/s',
};
const si: Record<string, string> = {
  'psi': 'kPa', 'inHg': 'kPa', 'inH2O': 'kPa', 'degF': 'degC', 'degR': 'K', 'lb/s': 'kg/s', 'lb/min': 'kg/min', 'lb/h': 'kg/h', 'lbf': 'kN',
  'ft': 'm', 'in': 'mm', 'mil': 'um', 'in2': 'cm2', 'ft/s': 'm/s', 'in/s': 'mm/s',
};

/** The two sets to choose from. */
export const unitSets: Record<System, UnitSet> = {
  si: {
    system: 'si', pressure: scale('kPa', 1), temperature: scale('degC', 0), difference: difference('K'), flow: scale('kg/s', 3), fuel: scale('kg/h', 1),
    force: scale('kN', 2), area: scale('cm2', 2), velocity: scale('m/s', 1), channel: (name) => si[name] ?? name,
  },
  us: {
    system: 'us', pressure: scale('psi', 2), temperature: scale('degF', 0), difference: difference('degF'), flow: scale('lb/s', 2), fuel: scale('lb/h', 1),
    force: scale('lbf', 0), area: scale('in2', 3), velocity: scale('ft/s', 1), channel: (name) => us[name] ?? name,
  },
};

/** The scale of a quantity whose unit the API gives; `name` tells temperatures from their differences, and fuel. */
export function scaleOf(set: UnitSet, unitName: string, name: string): Scale {
  switch (unitName) {
    case 'Pa': return set.pressure;
    case 'K': return /spread|difference|rise|u95/.test(name) ? set.difference : set.temperature;
    case 'kg/s': return name.startsWith('fuel') ? set.fuel : set.flow;
    case 'N': return set.force;
    case 'm²': return set.area;
    case 'm/s': return set.velocity;
    default: return { sign: unitName, decimals: 3, of: (v) => v, span: (v) => v };
  }
}

type Maybe = number | null | undefined;

/** A value in its unit, without the sign; "–" for none. */
export const shown = (s: Scale, v: Maybe): string => (typeof v === 'number' ? fixed(s.of(v), s.decimals) : '–');

/** A half width in its unit; null stays null. */
export const width = (s: Scale, v: Maybe): number | null => (typeof v === 'number' ? s.span(v) : null);

// Units of quantities that people in the SI world read in another one.
const handy: Record<string, string> = { 'Pa': 'kPa', 'K': 'degC', 'N': 'kN', 'm2': 'cm2' };

/** A value of an alarm, given in the unit of what its rule compares. */
export function alarmValue(set: UnitSet, v: number, unitName: string, words: string, dimension = ''): string {
  // "K" may be a temperature or a difference of two. Where the dimension is not told:
  // no gas here is below 200 K, the end of the gas model, and a larger difference names it.
  const apart = unitName === 'K' && (dimension ? /difference/.test(dimension) : v < 200 || /spread|difference/i.test(words));
  const name = set.system === 'us' ? set.channel(unitName) : apart ? 'K' : handy[unitName] ?? unitName;
  const [given, wanted] = [units[unitName], units[name]];
  if (!given || !wanted) return `${significant(v, 4)} ${unitName}`;
  const value = apart ? (v * given.scale) / wanted.scale : (v * given.scale + given.offset - wanted.offset) / wanted.scale;
  return `${Number.isInteger(value) ? fixed(value, 0) : significant(value, 4)} ${wanted.sign}`.trim();
}

const minus = '−';
/** A number with fixed decimals and a true minus sign; "–" for null or NaN. Never "−0.0". */
export function fixed(v: number | null | undefined, decimals: number): string {
  if (v === null || v === undefined || !Number.isFinite(v)) return '–';
  const text = v.toFixed(decimals);
  return Number(text) === 0 ? (0).toFixed(decimals) : text.replace('-', minus);
}

/** Like fixed, with a plus sign above zero. */
export function signed(v: number | null | undefined, decimals: number): string {
  const text = fixed(v, decimals);
  return text !== '–' && Number(v) > 0 && Number(Number(v).toFixed(decimals)) > 0 ? '+' + text : text;
}

/** About `digits` significant digits without exponent, for a channel's value. */
export function significant(v: number | null | undefined, digits = 5): string {
  if (v === null || v === undefined || !Number.isFinite(v)) return '–';
  const magnitude = v === 0 ? 0 : Math.floor(Math.log10(Math.abs(v)));
  return fixed(v, Math.min(6, Math.max(0, digits - 1 - Math.max(magnitude, 0))));
}

/** A small figure, a difference or an error, with three significant digits. */
export function few(v: number): string {
  return fixed(v, v === 0 ? 0 : Math.min(6, Math.max(0, 2 - Math.floor(Math.log10(Math.abs(v))))));
}

/** A round figure without trailing zeros, for the ends of a range. */
export function plain(v: number): string {
  return fixed(v, 2).replace(/\.?0+$/, '');
}

/** Bytes as kB, MB or GB (powers of 1000). */
export function bytes(n: number): string {
  if (n >= 1e9) return `${fixed(n / 1e9, 2)} GB`;
  if (n >= 1e6) return `${fixed(n / 1e6, 1)} MB`;
  return `${fixed(n / 1e3, 0)} kB`;
}

/** An age: 0.03 s, 12.5 s, 4 min, 3 h. */
export function age(s: number | null | undefined): string {
  if (s === null || s === undefined || !Number.isFinite(s)) return '–';
  if (s < 1) return `${fixed(s, 2)} s`;
  if (s < 100) return `${fixed(s, 1)} s`;
  if (s < 7200) return `${fixed(s / 60, 0)} min`;
  return `${fixed(s / 3600, 0)} h`;
}
