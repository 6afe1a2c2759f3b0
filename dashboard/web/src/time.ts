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

/** hh:mm:ss UTC; "–" for no time. */
export function clock(s: number): string {
  if (!Number.isFinite(s)) return '–';
  const d = new Date(s * 1000);
  return `${two(d.getUTCHours())}:${two(d.getUTCMinutes())}:${two(d.getUTCSeconds())}`;
}

/** yyyy-mm-dd hh:mm:ss UTC. */
export function dateClock(s: number): string {
  return Number.isFinite(s) ? `${new Date(s * 1000).toISOString().slice(0, 10)} ${clock(s)}` : '–';
}

/** hh:mm:ss with the offset in a time zone of the IANA database, as 10:00:00 +01:00; "" where it is UTC or not known. */
export function zoneClock(s: number, zone: string | undefined): string {
  if (!zone || zone === 'UTC' || zone === 'Etc/UTC' || !Number.isFinite(s)) return '';
  try {
    const parts = new Intl.DateTimeFormat('en-GB', { timeZone: zone, hour: '2-digit', minute: '2-digit', second: '2-digit', hourCycle: 'h23', timeZoneName: 'longOffset' }).formatToParts(s * 1000);
    const part = (type: string): string => parts.find((p) => p.type === type)?.value ?? '';
    return `${part('hour')}:${part('minute')}:${part('second')} ${part('timeZoneName').replace('GMT', '') || '+00:00'}`;
  } catch {
    return '';
  }
}

/** A duration as h:mm:ss, without sign below zero. */
export function duration(s: number): string {
  if (!Number.isFinite(s)) return '–';
  const whole = Math.max(0, Math.floor(s));
  return `${Math.floor(whole / 3600)}:${two(Math.floor(whole / 60) % 60)}:${two(whole % 60)}`;
}
