// A canvas that fills its box at the screen's pixel density.

import { h } from '../dom';

export interface Surface {
  el: HTMLElement;
  canvas: HTMLCanvasElement;
  /** Clears and gives the context in CSS pixels, null while the box has no size. */
  begin(): { c: CanvasRenderingContext2D; width: number; height: number } | null;
  destroy(): void;
}

export function surface(cls: string, label: string): Surface {
  const canvas = h('canvas', { role: 'img', 'aria-label': label });
  const el = h('div', { class: `surface ${cls}` }, canvas);
  let [width, height] = [0, 0];
  const observer = new ResizeObserver(([entry]) => {
    if (!entry) return;
    width = Math.floor(entry.contentRect.width);
    height = Math.floor(entry.contentRect.height);
  });
  observer.observe(el);
  return {
    el,
    canvas,
    begin() {
      if (width < 2 || height < 2) return null;
      const ratio = window.devicePixelRatio || 1;
      const [w, hgt] = [Math.round(width * ratio), Math.round(height * ratio)];
      if (canvas.width !== w || canvas.height !== hgt) [canvas.width, canvas.height] = [w, hgt];
      const c = canvas.getContext('2d');
      if (!c) return null;
      c.setTransform(ratio, 0, 0, ratio, 0, 0);
      c.clearRect(0, 0, width, height);
      return { c, width, height };
    },
    destroy: () => observer.disconnect(),
  };
}

/** Diagonal lines over a box: what lies under them is not present. */
export function hatch(c: CanvasRenderingContext2D, x: number, y: number, w: number, hgt: number, colour: string): void {
  c.save();
  c.beginPath();
  c.rect(x, y, w, hgt);
  c.clip();
  c.strokeStyle = colour;
  c.globalAlpha = 0.35;
  c.lineWidth = 1;
  c.beginPath();
  for (let d = -hgt; d < w; d += 9) {
    c.moveTo(x + d, y + hgt);
    c.lineTo(x + d + hgt, y);
  }
  c.stroke();
  c.restore();
}

export const font = (px: number, weight = 400): string => `${weight} ${px}px system-ui, "Segoe UI", "DejaVu Sans", sans-serif`;
