// A sound that is muted for a time. The mute covers the warnings that were there
// when it began: a new one breaks it.

/** Times to choose from, s. */
export const muteTimes = [60, 120, 300, 600] as const;

export class Mute {
  private until = -Infinity;
  private covered = new Set<string>();

  /** Begins at page time `now`, ms; `warnings` are the keys of those that sound. */
  start(now: number, seconds: number, warnings: Iterable<string>): void {
    this.until = now + seconds * 1000;
    this.covered = new Set(warnings);
  }

  end(): void {
    this.until = -Infinity;
  }

  /** Seconds left; 0 when the sound is not muted. */
  left(now: number): number {
    return Math.max(0, (this.until - now) / 1000);
  }

  /** Whether the sound is muted; a warning that the mute does not cover ends it. */
  holds(now: number, warnings: Iterable<string>): boolean {
    if (this.left(now) === 0) return false;
    for (const w of warnings) {
      if (this.covered.has(w)) continue;
      this.end();
      return false;
    }
    return true;
  }
}
