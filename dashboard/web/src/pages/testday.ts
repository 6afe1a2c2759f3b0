// The three pages of a test day, and the way between them.

import { h } from '../dom';

export const testDay = [['checks', 'Checks'], ['card', 'Test card'], ['handover', 'Hand-over sheet']] as const;

/** Links to the pages of the test day; that of `here` is marked. */
export function testDayLinks(here: (typeof testDay)[number][0]): HTMLElement {
  return h('nav', { class: 'within', 'aria-label': 'Test day' }, ...testDay.map(([name, label]) => h('a', { href: `#/${name}`, 'aria-current': name === here ? 'page' : null }, label)));
}
