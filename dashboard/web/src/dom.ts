// Builds and updates elements. Updates touch the page only when a
// value has changed: twenty frames a second must not make it restyle.

type Child = Node | string | null | undefined | false;
type Props = Record<string, unknown>;

/** Makes an element; `on…` props are listeners, others attributes; true is an empty attribute. */
export function h<K extends keyof HTMLElementTagNameMap>(tag: K, props: Props = {}, ...children: Child[]): HTMLElementTagNameMap[K] {
  const el = document.createElement(tag);
  for (const [name, v] of Object.entries(props)) {
    if (name.startsWith('on') && typeof v === 'function') el.addEventListener(name.slice(2).toLowerCase(), v as EventListener);
    else attr(el, name, v as string | boolean | null | undefined);
  }
  for (const c of children) if (c) el.append(c);
  return el;
}

/** The head of a table column; ">" in front stands it to the right, over figures. */
export function column(name: string): HTMLElement {
  return name.startsWith('>') ? h('th', { scope: 'col', class: 'num' }, name.slice(1)) : h('th', { scope: 'col' }, name);
}

export function text(el: Element, s: string): void {
  if (el.textContent !== s) el.textContent = s;
}

/** Sets an attribute; null, undefined and false remove it. */
export function attr(el: Element, name: string, v: string | number | boolean | null | undefined): void {
  if (v === null || v === undefined || v === false) {
    if (el.hasAttribute(name)) el.removeAttribute(name);
    return;
  }
  const s = v === true ? '' : String(v);
  if (el.getAttribute(name) !== s) el.setAttribute(name, s);
}

export function style(el: HTMLElement, name: string, v: string): void {
  if (el.style.getPropertyValue(name) !== v) el.style.setProperty(name, v);
}

/**
 * Replaces the children of a list only when its content, told by `key`, changed. The
 * focus stays on the control of the same `data-focus`.
 */
export function refill(el: HTMLElement, key: string, make: () => Node[]): void {
  if (el.dataset['key'] === key) return;
  el.dataset['key'] = key;
  const held = el.contains(document.activeElement) ? (document.activeElement as HTMLElement).dataset['focus'] : undefined;
  el.replaceChildren(...make());
  if (held !== undefined) [...el.querySelectorAll<HTMLElement>('[data-focus]')].find((e) => e.dataset['focus'] === held)?.focus();
}

/** What a page or a part of it is to the draw loop. `update` runs at most 20 times a second. */
export interface View {
  el: HTMLElement;
  update(now: number): void;
  destroy(): void;
}
