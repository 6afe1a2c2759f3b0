// The hand-over sheet: what one shift leaves to the next, to be printed.

import { priorityLook, stateWord } from '../alarms';
import { api } from '../api';
import { cardName } from '../card';
import type { Display } from '../context';
import { type View, attr, column, h, text } from '../dom';
import type { Alarm, CheckSet, Handover } from '../frames';
import { actor, deedWord, entryTime, subject } from '../oplog';
import { clock, dateClock, facility, seconds } from '../time';
import { testDayLinks } from './testday';
import { priorityBadge } from './alarms';

const table = (columns: string[], rows: Node[], none: string): HTMLElement => h('table', { class: 'list' }, h('thead', {}, h('tr', {}, ...columns.map(column))), h('tbody', {}, ...(rows.length > 0 ? rows : [h('tr', {}, h('td', { colspan: String(columns.length), class: 'extra' }, none))])));

function alarmRows(list: readonly Alarm[] | null | undefined): Node[] {
  return [...(list ?? [])].map((a) => h('tr', {}, h('td', {}, priorityBadge(a)), h('td', {}, stateWord[a.state]), h('td', { class: 'num' }, clock(seconds(a.raised ?? a.changed))), h('td', {}, a.text || a.title), h('td', {}, [a.acknowledged_by ? `acknowledged by ${a.acknowledged_by}` : '', a.reason, a.until ? `until ${clock(seconds(a.until))}` : ''].filter(Boolean).join(', '))));
}

export function handoverPage(d: Display): View {
  const body = h('div', { class: 'sheet', 'data-q': 'handover' });
  const told = h('p', { class: 'trouble', role: 'status' });
  const again = h('button', { type: 'button', 'data-q': 'handover-again', onclick: () => void read() }, 'Read again');
  const print = h('button', { type: 'button', 'data-q': 'handover-print', onclick: () => window.print() }, 'Print');
  const el = h('div', { class: 'page handover' }, h('h1', {}, 'Hand-over sheet'), testDayLinks('handover'), h('p', { class: 'asides' }, again, print), told, body);

  async function read(): Promise<void> {
    attr(again, 'disabled', true);
    try {
      body.replaceChildren(...sheet(await api.handover(d.rig, d.operator())));
      text(told, '');
    } catch (e) {
      body.replaceChildren();
      text(told, `The sheet could not be read: ${(e as Error).message}`);
    }
    attr(again, 'disabled', false);
  }
  void read();

  function sheet(s: Handover): Node[] {
    const facts: [string, string][] = [
      ['Rig', `${s.rig.title} (${s.rig.id})`], ['Engine', `${s.rig.engine_model}, serial ${s.rig.engine_serial}, build ${s.rig.engine_build || '–'}`], ['Nozzle', s.rig.nozzle_serial || '–'],
      ['As of', dateClock(seconds(s.t))], ['Handed over by', s.by || '–'], ['Run', s.run ? `${s.run.designation || s.run.number} (${s.run.id})${s.run.ended ? ', ended' : ', goes on'}` : 'none'],
      ['Limits', s.limits_version || '–'], ['Files', `${s.config.hash.slice(0, 16)}, ${s.config.approved_by ? `approved by ${s.config.approved_by}` : 'not approved'}${s.config.refused ? `; a change was refused: ${s.config.refused.why}` : ''}`],
    ];
    const sets = [s.checks?.before, s.checks?.after].filter((c): c is CheckSet => c != null);
    const overdue = (waived: boolean): string[] => (s.waivers ?? []).filter((w) => Boolean(w.who) === waived).map((w) => `${w.channel}: serial ${w.serial}, due ${w.due}${w.who ? `, waived by ${w.who}: ${w.why}${w.until ? `, until ${w.until}` : ''}` : ''}`);
    const list = (lines: string[]): Node => (lines.length > 0 ? h('ul', {}, ...lines.map((w) => h('li', {}, w))) : h('p', { class: 'extra' }, 'None'));
    const columns = ['Priority', 'State', `>Raised, ${facility.sign()}`, 'Alarm', 'Notes'];
    const aside = [...(s.alarms.shelved ?? []), ...(s.alarms.out_of_service ?? []), ...(s.alarms.suppressed ?? [])];
    return [
      h('dl', { class: 'facts' }, ...facts.flatMap(([k, v]) => [h('dt', {}, k), h('dd', {}, v)])),
      h('h2', {}, 'Alarms that stand'), table(columns, alarmRows([...(s.alarms.standing ?? [])].sort((a, b) => Object.keys(priorityLook).indexOf(a.priority) - Object.keys(priorityLook).indexOf(b.priority))), 'None'),
      h('h2', {}, 'Shelved, out of service, suppressed'), table(columns, alarmRows(aside), 'None'),
      h('h2', {}, 'Waivers'), list(overdue(true)), h('h2', {}, 'Calibration expired, without a waiver'), list(overdue(false)),
      h('h2', {}, 'Test card'), ...(s.card ? [h('p', {}, cardName(s.card)), h('p', {}, `Open: ${(s.card.open ?? []).join(', ') || 'none'}. Skipped: ${(s.card.skipped ?? []).join(', ') || 'none'}. Taken, without a verdict: ${(s.card.awaiting ?? []).map((n) => `no. ${n}`).join(', ') || 'none'}.`)] : [h('p', { class: 'extra' }, 'No card is loaded')]),
      h('h2', {}, 'Last checks'), ...(sets.length > 0 ? sets.flatMap((c) => [h('p', {}, `${c.phase === 'before' ? 'Before' : 'After'} the run, ${dateClock(seconds(c.ended ?? c.began))}: ${c.summary || c.state.replaceAll('_', ' ')}`), ...((c.items ?? []).some((i) => !i.passed) ? [h('ul', {}, ...(c.items ?? []).filter((i) => !i.passed).map((i) => h('li', {}, `${[i.channel, i.title].filter(Boolean).join(', ')}: ${i.text}`)))] : [])]) : [h('p', { class: 'extra' }, 'None on record')]),
      h('h2', {}, 'Notes of the run'), table([`>Time, ${facility.sign()}`, 'What', 'About', 'By', 'Reason'], (s.notes ?? []).map((e) => h('tr', {}, h('td', { class: 'num' }, entryTime(e, seconds(s.t))), h('td', {}, deedWord(e)), h('td', {}, subject(e)), h('td', {}, actor(e)), h('td', {}, e.reason ?? ''))), 'None'),
      h('div', { class: 'signatures' }, h('p', {}, 'Handed over: name, time, signature'), h('p', {}, 'Taken over: name, time, signature')),
      h('p', { class: 'extra' }, 'This sheet tells what the watch knows. It is not a clearance to start or to go on: the facility’s own procedures come first.'),
    ];
  }

  return { el, update: () => undefined, destroy: () => undefined };
}
