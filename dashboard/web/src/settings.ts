// What a viewer has chosen, kept in the browser.

import type { System } from './units';
import { standardPlots } from './watch/plots';

/** The part of localStorage that is used; a test puts its own here. */
export type Keeper = Pick<Storage, 'getItem' | 'setItem'>;

export class Settings {
  system: System;
  operator: string;
  plots: readonly string[]; // keys of the plots of the traces, from top to bottom

  /** Without a keeper, or with one that refuses, the choice lasts as long as the page. */
  constructor(private readonly keeper: Keeper | null) {
    this.system = this.read('units') === 'us' ? 'us' : 'si';
    this.operator = this.read('operator');
    const plots = this.read('plots').split(',').filter(Boolean);
    this.plots = plots.length > 0 ? plots : standardPlots;
  }

  /** Takes over what another tab of the same browser has chosen. */
  reload(): void {
    Object.assign(this, new Settings(this.keeper));
  }

  setSystem(s: System): void {
    this.system = s;
    this.write('units', s);
  }

  setPlots(plots: readonly string[]): void {
    this.plots = plots;
    this.write('plots', plots.join(','));
  }

  /** The name that goes with every action, as typed; at most 40 characters. */
  setOperator(name: string): void {
    this.operator = name.trim().slice(0, 40);
    this.write('operator', this.operator);
  }

  private read(name: string): string {
    try {
      return this.keeper?.getItem(`throatwatch.${name}`) ?? '';
    } catch {
      return '';
    }
  }

  private write(name: string, value: string): void {
    try {
      this.keeper?.setItem(`throatwatch.${name}`, value);
    } catch { /* storage is full or forbidden: the choice is lost with the page */ }
  }
}

/** The browser's storage; null where it is forbidden. */
export function browserKeeper(): Keeper | null {
  try {
    return window.localStorage;
  } catch {
    return null;
  }
}
