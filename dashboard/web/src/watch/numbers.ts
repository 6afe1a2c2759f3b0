// The large numbers under the throat plane.

import type { Display } from '../context';
import { type View, attr, h, text } from '../dom';
import { activeRun, believable, runSeconds } from '../state';
import { duration } from '../time';
import { fixed, shown, signed, width } from '../units';
import { coolDownText, forecastText, sourceWord, stateLook, steadyText, uncertainty } from '../words';

function cell(label: string, name: string): { el: HTMLElement; label: HTMLElement; value: HTMLElement; unit: HTMLElement; extra: HTMLElement } {
  const parts = {
    label: h('dt', {}, label),
    value: h('span', { class: 'value', 'data-q': name }, '–'),
    unit: h('span', { class: 'unit' }),
    extra: h('span', { class: 'extra' }),
  };
  return { ...parts, el: h('div', { class: 'cell' }, parts.label, h('dd', {}, parts.value, ' ', parts.unit, ' ', parts.extra)) };
}

function note(title: string, name: string): { el: HTMLElement; label: HTMLElement; value: HTMLElement } {
  const [label, value] = [h('dt', {}, title), h('dd', { 'data-q': name }, '–')];
  return { el: h('div', {}, label, value), label, value };
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
  const referred = cell('Referred flow', 'referred');
  const time = cell('Run clock', 'clock');
  attr(time.extra, 'data-q', 'run');
  const steady = note('Steadiness', 'steady');
  const loss = note('Choke loss, forecast', 'choke-loss');
  const limit = note('EGT limit, forecast', 'egt-limit');
  const big = h('div', { class: 'big' },
    h('div', { class: 'margin' }, h('div', { class: 'label' }, 'Choke margin'), h('div', {}, margin, ' ', h('span', { class: 'unit' }, '%'), ' ', marginU), marginPa),
    h('div', { class: 'state' }, h('div', { class: 'label' }, 'Choke state'), h('div', { class: 'stateword' }, shape, ' ', word, ' ', marginal), cause));
  const el = h('section', { class: 'numbers', 'aria-label': 'Nozzle numbers' }, big,
    h('dl', { class: 'notes' }, steady.el, loss.el, limit.el),
    h('dl', { class: 'cells' }, npr.el, choke.el, flow.el, thrust.el, phase.el, armed.el, referred.el, time.el));

  function update(now: number): void {
    const m = d.model();
    const fresh = d.fresh(now);
    const p = believable(fresh) ? m.point : null;
    const u = d.units();
    attr(el, 'data-dim', p === null || fresh.kind === 'catching_up');
    const look = stateLook(p);
    text(margin, signed(p?.choke_margin_percent, 1));
    text(marginU, uncertainty(p?.choke_margin_percent_u95, 1, p?.choke_margin_percent_low95, p?.choke_margin_percent_high95) || (typeof p?.choke_margin_percent === 'number' ? 'U95 not known' : ''));
    text(marginPa, typeof p?.choke_margin_pa === 'number' ? `p* − back pressure ${signed(u.pressure.of(p.choke_margin_pa), u.pressure.decimals)} ${u.pressure.sign}` : '');
    attr(margin.parentElement as HTMLElement, 'data-none', (p?.choke_margin_percent ?? null) === null);
    text(shape, look.marginal ? '◐' : look.shape);
    text(word, look.word);
    text(marginal, look.marginal ? 'marginal' : '');
    attr(word.parentElement as HTMLElement, 'data-none', look.word === 'unknown');
    text(cause, look.cause);
    attr(cause, 'title', look.cause || null);

    const put = (c: ReturnType<typeof cell>, value: string, unit = '', extra = ''): void => {
      text(c.value, value);
      text(c.unit, value === '–' ? '' : unit);
      text(c.extra, value === '–' ? (p && look.cause) || '' : extra);
      attr(c.el, 'data-none', value === '–');
    };
    put(npr, fixed(p?.npr, 3), '', uncertainty(p?.npr_u95, 3));
    put(choke, fixed(p?.choke_npr, 3), '', p ? sourceWord(p.choke_npr_from) : '');
    put(flow, shown(u.flow, p?.mass_flow_kg_s), u.flow.sign, uncertainty(width(u.flow, p?.mass_flow_kg_s_u95), u.flow.decimals));
    put(thrust, shown(u.force, p?.gross_thrust_n), u.force.sign, [uncertainty(width(u.force, p?.gross_thrust_n_u95), u.force.decimals), 'computed'].filter(Boolean).join(', '));
    put(phase, p ? p.phase : '–', '', p && !p.lit ? 'not lit' : '');
    put(armed, p ? (p.choke_armed ? '● armed' : '○ not armed') : '–', '', p?.choke_armed_by === 'test_card' ? 'by the test card' : p && m.armedAbove !== null ? `above ${fixed(m.armedAbove, 0)} rpm` : '');
    put(referred, shown(u.flow, p?.referred_flow_kg_s), u.flow.sign);
    const on = activeRun(m);
    attr(time.el, 'title', on?.id);
    put(time, on && p ? duration(runSeconds(m)) : '–');
    text(time.extra, on ? `run ${on.number}` : m.run ? `run ${m.run.number} has ended` : 'no run');

    const tell = (n: ReturnType<typeof note>, words: string): void => {
      text(n.value, words);
      attr(n.value, 'title', words);
    };
    tell(steady, steadyText(p));
    const off = p && !p.lit && typeof p.fuel_off_s === 'number' ? p.fuel_off_s : null; // the engine cools: there is nothing to forecast
    text(loss.label, off === null ? 'Choke loss, forecast' : 'Fuel off for');
    text(limit.label, off === null ? 'EGT limit, forecast' : 'Cool-down');
    tell(loss, off !== null ? duration(off) : forecastText(p?.choke_loss_in_s, p?.choke_loss_in_s_low95, p?.choke_loss_in_s_high95, p?.choke_loss_reason));
    tell(limit, off !== null ? coolDownText(p?.cooldown_left_s, p?.rest_s) : forecastText(p?.egt_limit_in_s, p?.egt_limit_in_s_low95, p?.egt_limit_in_s_high95, p?.egt_limit_reason));
  }
  return { el, update, destroy: () => undefined };
}
