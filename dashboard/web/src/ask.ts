// Asks a person to confirm. The page goes on behind the question: a browser's own
// confirm would stop every number and the alarm sound until it is answered.

import { h } from './dom';

/** A question unanswered for this long is withdrawn, ms. */
const patience = 20_000;

/** Whether the question was answered with `action`; "Cancel", Escape and no answer are false. */
export function ask(question: string, action: string): Promise<boolean> {
  document.querySelector<HTMLDialogElement>('dialog.ask')?.close();
  const before = document.activeElement as HTMLElement | null;
  return new Promise((answer) => {
    const id = 'question';
    const no = h('button', { type: 'button', onclick: () => dialog.close() }, 'Cancel');
    const yes = h('button', { type: 'button', 'data-q': 'confirm', onclick: () => dialog.close('yes') }, action);
    const dialog = h('dialog', {
      class: 'ask', 'aria-labelledby': id,
      onkeydown: (e: Event) => { if ((e as KeyboardEvent).key === 'Escape') dialog.close(); },
    }, h('p', { id }, question), h('div', { class: 'answers' }, no, yes));
    const timer = window.setTimeout(() => dialog.close(), patience);
    dialog.addEventListener('close', () => {
      window.clearTimeout(timer);
      dialog.remove();
      if (before?.isConnected) before.focus();
      answer(dialog.returnValue === 'yes');
    });
    document.body.append(dialog);
    dialog.show();
    no.focus();
  });
}
