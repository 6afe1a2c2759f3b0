// How the parts do through which the data goes.

import type { StatusFrame } from './frames';
import { seconds, signedClock } from './time';
import { age, fixed } from './units';

/** One part of the path of the data: its name, what is said of it, whether that is good. */
export interface PathPart { name: string; said: string; bad: boolean }

/** How the parts do through which the data goes; what a server does not tell is left out. `follows` are the parts that are set up. */
export function pathParts(s: StatusFrame, dataAge_: number | null, follows: readonly string[]): PathPart[] {
  const sessions = s.sessions ?? [];
  const gone = sessions.filter((x) => !x.connected).length;
  const silent = (s.sources ?? []).filter((x) => !x.alive).length;
  const out: PathPart[] = [
    { name: 'Broker', said: gone > 0 ? `${gone} of ${sessions.length} sessions not connected` : s.input_path ? `${sessions.length} sessions, probe message returns` : 'deaf: the probe message does not return', bad: gone > 0 || !s.input_path },
    { name: 'Sources', said: silent > 0 ? `${silent} silent` : `${(s.sources ?? []).length} heard, newest data ${age(dataAge_ === null ? null : Math.max(0, dataAge_))} old`, bad: silent > 0 },
    { name: 'Archive', said: s.recording ? 'recording' : `not recording${s.not_recording_since ? ` since ${signedClock(seconds(s.not_recording_since))}` : ''}`, bad: !s.recording },
  ];
  for (const [key, name] of [['database', 'Site database'], ['webhook', 'Webhook']] as const) {
    const part = s[key];
    if (part) out.push({ name, said: `fails since ${signedClock(seconds(part.since))}: ${part.why}; ${fixed(part.behind, 0)} waiting`, bad: true });
    else if (part === null) out.push({ name, said: follows.includes(key) ? 'no failure' : 'none is set up', bad: false });
  }
  if (s.disk) out.push({ name: 'Disk', said: `soon full, since ${signedClock(seconds(s.disk.since))}: ${s.disk.why}`, bad: true });
  else if (s.disk === null) out.push({ name: 'Disk', said: 'not soon full', bad: false });
  out.push({ name: 'Clock', said: s.clock ? 'steady' : `a source differs${typeof s.clock_skew_s === 'number' ? ` by ${fixed(s.clock_skew_s, 1)} s` : ''}, or a step was seen`, bad: !s.clock });
  return out;
}
