// Times of frames. Inside the page a time is a float of seconds since 1970 UTC;
// the double keeps a quarter of a microsecond, far below a scan.

/** Seconds since 1970 of an RFC 3339 time with up to nanoseconds; NaN if it is none. */
export function seconds(t: string | null): number {
  if (t === null) return NaN;
  const dot = t.indexOf('.');
  if (dot < 0) return Date.parse(t) / 1000;
  let end = dot + 1;
  while (end < t.length && t.charCodeAt(end) >= 48 && t.charCodeAt(end) <= 57) end++;
  return Date.parse(t.slice(0, dot) + t.slice(end)) / 1000 + Number('0' + t.slice(dot, end));
}

/** RFC 3339 UTC with milliseconds. */
export function rfc3339(s: number): string {
  return new Date(s * 1000).toISOString();
}

const two = (n: number): string => String(n).padStart(2, '0');

/** The zone of the facility, in which people are told times; UTC until it is set. */
class Facility {
  private format: Intl.DateTimeFormat | null = null; // null is UTC
  private slot = NaN; // the quarter of an hour that `east` holds for: no offset changes within one
  private east = 0;
  private home = 0; // the offset when the zone was set

  /** Sets the zone, a name of the IANA database; the offset at `now`, s, is that of the heads of tables. */
  set(zone: string | undefined, now: number): void {
    this.format = null;
    if (zone && !/^(Etc\/)?UTC$/.test(zone)) {
      try {
        this.format = new Intl.DateTimeFormat('en-GB', { timeZone: zone, timeZoneName: 'longOffset' });
      } catch { /* a zone that this browser does not know: UTC, which is written beside each time */ }
    }
    this.slot = NaN;
    this.home = this.offset(now);
  }

  /** Seconds east of UTC at s. */
  offset(s: number): number {
    const slot = Math.floor(s / 900);
    if (this.format === null || !Number.isFinite(s)) return 0;
    if (slot === this.slot) return this.east;
    const name = this.format.formatToParts(s * 1000).find((p) => p.type === 'timeZoneName')?.value ?? '';
    const [, sign, hours = '0', minutes = '0'] = /([+-])(\d\d):(\d\d)/.exec(name) ?? [];
    [this.slot, this.east] = [slot, (sign === '-' ? -1 : 1) * (Number(hours) * 3600 + Number(minutes) * 60)];
    return this.east;
  }

  /** The offset as it is written: UTC, +01:00. */
  sign(east = this.home): string {
    if (this.format === null) return 'UTC';
    const minutes = Math.abs(Math.round(east / 60));
    return `${east < 0 ? '−' : '+'}${two(Math.floor(minutes / 60))}:${two(minutes % 60)}`;
  }

  /** Whether the offset at s is another than that of the heads. */
  away(s: number): boolean { return this.offset(s) !== this.home; }
}
export const facility = new Facility();

function plainClock(s: number): string {
  const d = new Date((s + facility.offset(s)) * 1000);
  return `${two(d.getUTCHours())}:${two(d.getUTCMinutes())}:${two(d.getUTCSeconds())}`;
}

/** hh:mm:ss of the facility, under a head that tells the offset; where it is another one at that time, with it. "–" for no time. */
export function clock(s: number): string {
  if (!Number.isFinite(s)) return '–';
  return facility.away(s) ? signedClock(s) : plainClock(s);
}

/** hh:mm:ss of the facility with the offset. */
export function signedClock(s: number): string {
  return Number.isFinite(s) ? `${plainClock(s)} ${facility.sign(facility.offset(s))}` : '–';
}

/** yyyy-mm-dd hh:mm:ss of the facility with the offset. */
export function dateClock(s: number): string {
  return Number.isFinite(s) ? `${new Date((s + facility.offset(s)) * 1000).toISOString().slice(0, 10)} ${signedClock(s)}` : '–';
}

/** yyyy-mm-dd hh:mm:ss of the facility, as it is typed. */
export function typedClock(s: number): string {
  return dateClock(s).slice(0, 19);
}

/** The time of yyyy-mm-dd hh:mm:ss of the facility; NaN if it is none. Of an hour that comes twice it is the first. */
export function typed(words: string): number {
  const wall = Date.parse(`${words.trim().replace(' ', 'T')}Z`) / 1000;
  const hour = 3600;
  const found = [-hour, hour].map((near) => wall - facility.offset(wall - facility.offset(wall) + near)).sort((a, b) => a - b);
  return found.find((s) => s + facility.offset(s) === wall) ?? NaN; // an hour that was left out has no time
}

/** The day of the facility, counted. */
export const day = (s: number): number => Math.floor((s + facility.offset(s)) / 86_400);

/** A duration as h:mm:ss, without sign below zero. */
export function duration(s: number): string {
  if (!Number.isFinite(s)) return '–';
  const whole = Math.max(0, Math.floor(s));
  return `${Math.floor(whole / 3600)}:${two(Math.floor(whole / 60) % 60)}:${two(whole % 60)}`;
}
