// Zoom and pan of a time axis by keyboard, the same on every plot.

export type Stretch = readonly [from: number, to: number];

/** Said of a plot that takes the keys. */
export const zoomHelp = 'plus and minus zoom, arrow keys move the stretch, Home and End go to its ends, 0 shows all';
/** A stretch shorter than this shows nothing, s. */
const shortest = 1;

/**
 * The stretch that is shown after a key: null for the whole axis, undefined for a key that
 * means nothing here. `shown` is what is shown now, `whole` what there is to show.
 */
export function zoomed(key: string, shown: Stretch, whole: Stretch): Stretch | null | undefined {
  const [from, to] = shown;
  const span = to - from;
  const at = (start: number, wide: number): Stretch => {
    const first = Math.max(whole[0], Math.min(start, whole[1] - wide));
    return [first, first + wide];
  };
  switch (key) {
    case '+': case '=': return at((from + to) / 2 - Math.max(shortest, span / 2) / 2, Math.max(shortest, span / 2));
    case '-': case '−': return 2 * span >= whole[1] - whole[0] ? null : at(from - span / 2, 2 * span);
    case 'ArrowLeft': return at(from - span / 4, span);
    case 'ArrowRight': return at(from + span / 4, span);
    case 'Home': return at(whole[0], span);
    case 'End': return at(whole[1] - span, span);
    case '0': case 'Escape': return null;
    default: return undefined;
  }
}
