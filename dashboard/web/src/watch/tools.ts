// What an operator does from the Watch page besides acknowledging: pins a mark to
// the run's time line, starts or ends a run by hand.

import { api } from '../api';
import { ask, withdraw } from '../ask';
import { type Display, gate } from '../context';
import { type View, h, text } from '../dom';
import { activeRun } from '../state';

/** A button that starts or ends a run after a confirmation; `told` says what came of it. */
export function runButton(d: Display, told: HTMLElement): View & { el: HTMLButtonElement } {
  let busy = false;
  async function press(): Promise<void> {
    const run = activeRun(d.model());
    const sure = run
      ? await ask(`End run ${run.number} (${run.id}) now? What comes after it is not part of it.`, 'End the run')
      : await ask('Start a run now? It is recorded as a run of its own until the engine is at rest or it is ended by hand.', 'Start a run');
    if (!sure) return;
    if (activeRun(d.model())?.id !== run?.id) {
      text(told, 'not done: the run changed meanwhile');
      return;
    }
    busy = true;
    text(told, '');
    await api.run(d.rig, run ? 'end' : 'start', d.operator()).catch((e: Error) => text(told, `not done: ${e.message}`));
    busy = false;
  }
  const el = h('button', { type: 'button', class: 'runbutton', 'data-q': 'run-button', onclick: () => void press() });
  return {
    el,
    update(now) {
      text(el, activeRun(d.model()) ? 'End run…' : 'Start run…');
      gate(el, d, 'run', now, busy);
    },
    destroy: withdraw,
  };
}

export function watchTools(d: Display): View {
  const told = h('span', { class: 'told', role: 'status' });
  const input = h('input', { type: 'text', 'aria-label': 'Text of a mark', 'aria-keyshortcuts': 'M', placeholder: 'mark (key M)', maxlength: '200', 'data-q': 'mark-text' });
  const button = h('button', { type: 'submit', 'data-q': 'mark' }, 'Mark');
  const form = h('form', { onsubmit: (e: Event) => {
    e.preventDefault();
    void set();
  } }, input, button);
  const run = runButton(d, told);
  const el = h('div', { class: 'tools' }, told, form, run.el);

  async function set(): Promise<void> {
    const on = activeRun(d.model());
    if (!on) {
      text(told, 'no run to mark');
      return;
    }
    text(told, '…');
    try {
      await api.mark(on.id, input.value.trim() || 'mark', d.operator());
      input.value = '';
      input.blur();
      text(told, '');
    } catch (e) {
      text(told, `not set: ${e instanceof Error ? e.message : String(e)}`);
    }
  }

  function onKey(e: KeyboardEvent): void {
    const target = e.target as HTMLElement;
    if (target === input && e.key === 'Escape') input.blur();
    if (/^(INPUT|SELECT|TEXTAREA)$/.test(target.tagName) || e.ctrlKey || e.metaKey || e.altKey || e.key.toLowerCase() !== 'm') return;
    e.preventDefault(); // the letter is the key, not the text
    input.focus();
  }
  document.addEventListener('keydown', onKey);

  return {
    el,
    update(now) {
      run.update(now);
      gate(button, d, 'mark', now, !activeRun(d.model()));
    },
    destroy() {
      document.removeEventListener('keydown', onKey);
      run.destroy();
    },
  };
}
