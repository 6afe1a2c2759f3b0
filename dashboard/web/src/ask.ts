// Asks a person to confirm, or for what an action needs. The page goes on behind the
// question: a browser's own dialogs would stop every number and the alarm sound
// until they are answered.

import { attr, h, text } from './dom';

/** A question, or a form, that nobody touches for this long is withdrawn, ms. */
const patience = { question: 20_000, form: 180_000 };

let shown: HTMLDialogElement | null = null;

/** Shows a dialog, withdraws the one before; `closed` is told how it ended. */
function open(dialog: HTMLDialogElement, focus: HTMLElement, wait: number, closed: (value: string) => void): void {
  shown?.close();
  const before = document.activeElement as HTMLElement | null;
  let timer = 0;
  const touched = (): void => {
    window.clearTimeout(timer);
    timer = window.setTimeout(() => dialog.close(), wait);
  };
  dialog.addEventListener('input', touched);
  dialog.addEventListener('keydown', (e) => { if (e.key === 'Escape') dialog.close(); });
  dialog.addEventListener('close', () => {
    window.clearTimeout(timer);
    dialog.remove();
    if (shown === dialog) shown = null;
    if (before?.isConnected) before.focus();
    closed(dialog.returnValue);
  });
  shown = dialog;
  touched();
  document.body.append(dialog);
  dialog.show();
  focus.focus();
}

/** Withdraws what is asked: the page that asked is left. */
export function withdraw(): void {
  shown?.close();
}

/** Whether the question was answered with `action`; "Cancel", Escape and no answer are false. */
export function ask(question: string, action: string): Promise<boolean> {
  return new Promise((answer) => {
    const no = h('button', { type: 'button', onclick: () => dialog.close() }, 'Cancel');
    const yes = h('button', { type: 'button', 'data-q': 'confirm', onclick: () => dialog.close('yes') }, action);
    const dialog = h('dialog', { class: 'ask', 'aria-labelledby': 'question' }, h('p', { id: 'question' }, question), h('div', { class: 'answers' }, no, yes));
    open(dialog, no, patience.question, (value) => answer(value === 'yes'));
  });
}

export interface Field {
  name: string;
  label: string;
  kind?: 'text' | 'number' | 'password' | 'select' | 'area';
  options?: readonly (readonly [value: string, label: string])[];
  value?: string;
  optional?: boolean;
  hint?: string;
  pattern?: string;
}

/** The control of a field with its label. */
export function control(f: Field): { el: HTMLElement; input: HTMLInputElement | HTMLSelectElement | HTMLTextAreaElement } {
  const shared = { name: f.name, required: !f.optional, 'data-q': `field-${f.name}` };
  const input = f.kind === 'select'
    ? h('select', shared, ...(f.options ?? []).map(([v, label]) => h('option', { value: v, selected: v === f.value }, label)))
    : f.kind === 'area' ? h('textarea', { ...shared, rows: '4', maxlength: '8000', spellcheck: 'false', placeholder: f.hint ?? null })
    : h('input', { ...shared, type: f.kind === 'number' ? 'text' : f.kind ?? 'text', inputmode: f.kind === 'number' ? 'decimal' : null, value: f.value ?? null, maxlength: '200', autocomplete: 'off', placeholder: f.hint ?? null, pattern: f.kind === 'number' ? '[+\\-−]?\\d*[.,]?\\d+([eE][+\\-]?\\d+)?' : f.pattern ?? null });
  return { el: h('label', { class: 'field' }, h('span', { class: 'label' }, f.label), input), input };
}

/** The number of a field; NaN when it is none. */
export const numberOf = (s: string): number => (s.trim() === '' ? NaN : Number(s.trim().replace('−', '-').replace(',', '.')));

/**
 * Asks for what an action needs and sends it. The form stays with its words until
 * the server has taken them; what is refused is told in it.
 */
export function askForm(title: string, fields: readonly Field[], action: string, send: (values: Record<string, string>) => Promise<void>): void {
  const controls = fields.map(control);
  const trouble = h('p', { class: 'trouble', role: 'alert' });
  const no = h('button', { type: 'button', onclick: () => dialog.close() }, 'Cancel');
  const yes = h('button', { type: 'submit', 'data-q': 'confirm' }, action);
  const form = h('form', {
    onsubmit: (e: Event) => {
      e.preventDefault();
      attr(yes, 'disabled', true);
      text(trouble, '');
      send(Object.fromEntries(controls.map((c) => [c.input.name, c.input.value.trim()]))).then(() => dialog.close('sent'), (why: Error) => {
        text(trouble, `Not done: ${why.message}`);
        attr(yes, 'disabled', false);
        yes.focus(); // a button that is disabled loses it, and with it the keys
      });
    },
  }, h('p', { id: 'question' }, title), ...controls.map((c) => c.el), trouble, h('div', { class: 'answers' }, no, yes));
  const dialog = h('dialog', { class: 'ask', 'aria-labelledby': 'question' }, form);
  open(dialog, controls[0]?.input ?? no, patience.form, () => undefined);
}
