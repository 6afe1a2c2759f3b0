// The large numbers under the throat plane.

import type { Display } from '../context';
import { type View, attr, h, text } from '../dom';
import { believable, runSeconds } from '../state';
import { clock, duration } from '../time';
import { fixed, kN, kPa, signed } from '../units';
import { sourceWord, stateLook, uncertainty } from '../words';

function cell(label: string, name: string): { el: HTMLElement; label: HTMLElement; value: HTMLElement; unit: HTMLElement; extra: HTMLElement } {
  const parts = {
    label: h('dt', {}, label),
    value: h('span', { class: 'value', 'data-q': name }, '–'),
    unit: h('span', { class: 'unit' }),
    extra: h('span', { class: 'extra' }),
  };
  return { ...parts, el: h('div', { class: 'cell' }, parts.label, h('dd', {}, parts.value, ' ', parts.unit, ' ', parts.extra)) };
}

export function numbers(d: Display): View {
  const margin = h('span', { class: 'value', 'data-q': 'margin' }, '–');
  const marginU = h('span', { class: 'extra', 'data-q': 'margin-u95' });
  const marginPa = h('span', { class: 'extra' });
  const shape = h('span', { class: 'shape', 'aria-hidden': 'true' });
  const word = h('span', { class: 'word', 'data-q': 'state' }, 'unknown');
  const marginal = h('span', { class: 'marginal' });
  const cause = h('div', { class: 'cause', 'data-q': 'cause' });
  const npr = cell('NPR', 'npr');
  const choke = cell('Choke NPR', 'choke-npr');
  const flow = cell('Nozzle flow W8', 'w8');
  const thrust = cell('Gross thrust', 'thrust');
  const phase = cell('Phase', 'phase');
  phase.el.classList.add('words');
  const armed = cell('Choke watch', 'armed');
  armed.el.classList.add('words');
  const run = cell('Run', 'run');
  const time = cell('Run clock', 'clock');
  const big = h('div', { class: 'big' },
    h('div', { class: 'margin' }, h('div', { class: 'label' }, 'Choke margin'), h('div', {}, margin, ' ', h('span', { class: 'unit' }, '%'), ' ', marginU), marginPa),
    h('div', { class: 'state' }, h('div', { class: 'label' }, 'Choke state'), h('div', { class: 'stateword' }, shape, ' ', word, ' ', marginal), cause));
  const el = h('section', { class: 'numbers', 'aria-label': 'Nozzle numbers' }, big,
    h('dl', { class: 'cells' }, npr.el, choke.el, flow.el, thrust.el, phase.el, armed.el, run.el, time.el));

  function update(now: number): void {
    const m = d.model();
    const fresh = d.fresh(now);
    const p = believable(fresh) ? m.point : null;
    attr(el, 'data-dim', p === null || fresh.kind === 'catching_up');
    const look = stateLook(p);
    text(margin, signed(p?.choke_margin_percent, 1));
    text(marginU, uncertainty(p?.choke_margin_percent_u95, 1, p?.choke_margin_percent_low95, p?.choke_margin_percent_high95) || (typeof p?.choke_margin_percent === 'number' ? 'U95 not known' : ''));
    text(marginPa, typeof p?.choke_margin_pa === 'number' ? `p* − back pressure ${signed(kPa(p.choke_margin_pa), 1)} kPa` : '');
    attr(margin.parentElement as HTMLElement, 'data-none', (p?.choke_margin_percent ?? null) === null);
    text(shape, look.marginal ? '◐' : look.shape);
    text(word, look.word);
    text(marginal, look.marginal ? 'marginal' : '');
    attr(word.parentElement as HTMLElement, 'data-none', look.word === 'unknown');
    text(cause, look.cause);

    const put = (c: ReturnType<typeof cell>, value: string, unit = '', extra = ''): void => {
      text(c.value, value);
      text(c.unit, value === '–' ? '' : unit);
      text(c.extra, value === '–' ? (p && look.cause) || '' : extra);
      attr(c.el, 'data-none', value === '–');
    };
    put(npr, fixed(p?.npr, 3), '', uncertainty(p?.npr_u95, 3));
    put(choke, fixed(p?.choke_npr, 3), '', p ? sourceWord(p.choke_npr_from) : '');
    put(flow, fixed(p?.mass_flow_kg_s, 3), 'kg/s', uncertainty(p?.mass_flow_kg_s_u95, 3));
    put(thrust, typeof p?.gross_thrust_n === 'number' ? fixed(kN(p.gross_thrust_n), 2) : '–', 'kN', `${typeof p?.gross_thrust_n_u95 === 'number' ? `${uncertainty(kN(p.gross_thrust_n_u95), 2)}, ` : ''}computed`);
    put(phase, p ? p.phase : '–', '', p && !p.lit ? 'not lit' : '');
    put(armed, p ? (p.choke_armed ? '● armed' : '○ not armed') : '–', '', p && m.armedAbove !== null ? `above ${fixed(m.armedAbove, 0)} rpm` : '');
    attr(run.el, 'title', m.run?.id);
    put(run, m.run ? `${m.run.number}` : 'none', '', m.run ? m.run.id : 'between runs');
    put(time, m.run && p ? duration(runSeconds(m)) : '–', '', m.run && p ? `${clock(m.newest)} UTC` : '');
  }
  return { el, update, destroy: () => undefined };
}
