// The report of a run, and its tables as files, with how far they are.

import { api } from '../api';
import { type View, attr, h, text } from '../dom';
import { fileName, receive } from '../save';
import { bytes } from '../units';

const tables = [['operating-points', 'operating points'], ['scans', 'scans of the channels'], ['samples', 'samples as received'], ['events', 'events'], ['report', 'the report, one HTML page']] as const;
const formats = [['parquet', 'Parquet'], ['csv', 'CSV'], ['lines', 'line protocol']] as const;

export function filesView(run: string): View {
  const choice = (label: string, name: string, all: readonly (readonly [string, string])[]): HTMLSelectElement => h('select', { 'aria-label': label, 'data-q': name, onchange: () => show() }, ...all.map(([v, word]) => h('option', { value: v }, word)));
  const what = choice('Table', 'export-what', tables);
  const format = choice('Format', 'export-format', formats);
  const save = h('button', { type: 'button', 'data-q': 'export', onclick: () => void fetchFile() }, 'Save as a file');
  const cancel = h('button', { type: 'button', 'data-q': 'export-cancel', onclick: () => going?.abort() }, 'Cancel');
  const told = h('span', { role: 'status', 'data-q': 'export-told' });
  const el = h('div', { class: 'filter files' }, h('a', { class: 'button', href: api.reportAddress(run), target: '_blank', rel: 'noopener', 'data-q': 'report' }, 'Report to print and sign'), h('span', { class: 'grow' }), what, format, save, cancel, told);
  let going: AbortController | null = null;

  function show(): void {
    attr(format, 'disabled', what.value === 'report');
    attr(save, 'disabled', going !== null);
    attr(cancel, 'hidden', going === null);
  }

  function tell(words: string, bad = false): void {
    text(told, words);
    attr(told, 'class', bad ? 'trouble' : 'extra');
  }

  async function fetchFile(): Promise<void> {
    const own = (going = new AbortController());
    const [table, kind] = [what.value, format.value];
    let so = 0;
    show();
    tell('being written…');
    try {
      const reply = await (table === 'report' ? api.report(run, own.signal) : api.export(run, table, kind, own.signal));
      const name = fileName(reply.headers.get('Content-Disposition'), table === 'report' ? `${run}-report.html` : `${run}-${table}.${kind}`);
      const blob = await receive(reply, (n) => { tell(`${bytes((so = n))} received`); });
      const address = URL.createObjectURL(blob);
      h('a', { href: address, download: name }).click();
      window.setTimeout(() => URL.revokeObjectURL(address), 60_000); // the browser reads it after the click
      tell(`${name}, ${bytes(blob.size)}, is saved by the browser`);
    } catch (e) {
      if (own.signal.aborted) tell('Called off; nothing is saved');
      else if (so > 0) tell(`Broken off after ${bytes(so)}; nothing is saved. Try again.`, true);
      else tell(`Not saved: ${(e as Error).message}`, true);
    } finally {
      going = null;
      show();
    }
  }
  show();

  return { el, update: () => undefined, destroy: () => going?.abort() };
}
