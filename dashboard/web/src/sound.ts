// The alarm sound. A browser gives sound only after a gesture: until the button
// has been pressed the page says plainly that sound is off.

import type { Priority } from './frames';
import { Mute } from './mute';

/** Tones of one burst: frequency Hz, start s, length s. */
const bursts: Record<'warning' | 'caution' | 'link' | 'test', [number, number, number][]> = {
  warning: [[960, 0, 0.18], [720, 0.2, 0.18], [960, 0.4, 0.18]],
  caution: [[620, 0, 0.16], [620, 0.26, 0.16]],
  link: [[520, 0, 0.2], [390, 0.24, 0.3]],
  test: [[620, 0, 0.12]],
};
/** Time from burst to burst while it lasts, ms. */
const every = { warning: 1200, caution: 6000, link: 10_000 };

export class Sound {
  private context: AudioContext | null = null;
  private last = { warning: -Infinity, caution: -Infinity, link: -Infinity };
  private readonly mute = new Mute();

  get armed(): boolean { return this.context?.state === 'running'; }

  /** Turns sound on (with a short test tone) or off; call from a gesture. */
  async toggle(): Promise<void> {
    this.mute.end();
    if (this.armed) {
      await this.context?.suspend();
      return;
    }
    this.context ??= new AudioContext();
    await this.context.resume();
    this.play('test');
  }

  /** A short tone; nothing while sound is off. */
  test(): void {
    if (this.armed) this.play('test');
  }

  /** Silences what sounds for a time, s; 0 ends that. `warnings` name those that are there. */
  muteFor(now: number, seconds: number, warnings: Iterable<string>): void {
    if (seconds > 0) this.mute.start(now, seconds, warnings); else this.mute.end();
  }

  /** Seconds of mute that are left. */
  muteLeft(now: number): number {
    return this.mute.left(now);
  }

  /** To be called often: plays what is due for the most urgent condition; `warnings` name those that sound. */
  tick(alarm: Priority | null, linkLost: boolean, warnings: readonly string[], now: number): void {
    if (!this.armed || this.mute.holds(now, warnings)) return;
    const due = alarm === 'warning' ? 'warning' : alarm === 'caution' ? 'caution' : linkLost ? 'link' : null;
    if (!due || now - this.last[due] < every[due]) return;
    this.last[due] = now;
    this.play(due);
  }

  private play(name: keyof typeof bursts): void {
    const context = this.context as AudioContext;
    for (const [frequency, start, length] of bursts[name]) {
      const from = context.currentTime + start + 0.01;
      const gain = context.createGain();
      const tone = context.createOscillator();
      tone.type = 'triangle';
      tone.frequency.value = frequency;
      gain.gain.setValueAtTime(0, from);
      gain.gain.linearRampToValueAtTime(0.5, from + 0.01); // no click
      gain.gain.setValueAtTime(0.5, from + length - 0.02);
      gain.gain.linearRampToValueAtTime(0, from + length);
      tone.connect(gain).connect(context.destination);
      tone.start(from);
      tone.stop(from + length);
    }
  }
}
