// The colours. Grey ground, dark text, one blue for data; red and amber only for
// what is abnormal, always together with a shape and a word. WCAG 2.2 AA: text
// 4.5:1 on its ground [1.4.3], lines and shapes 3:1 [1.4.11]; a test computes both.

export interface Palette {
  ground: string; // page
  panel: string; // plots and tables
  line: string; // borders that carry no meaning
  grid: string; // grid of plots, carries no meaning
  edge: string; // borders of controls
  text: string;
  soft: string; // secondary text
  data: string; // the one blue
  data2: string; // second trace in a plot, a grey, drawn dashed as well
  choked: string; // shading of choked periods
  warning: string; // fill of a warning
  onWarning: string; // text on it
  warningInk: string; // red text and lines on panel and ground
  caution: string;
  onCaution: string;
  cautionInk: string;
}

export const light: Palette = {
  ground: '#e4e6e8', panel: '#f3f4f5', line: '#c3c7cb', grid: '#dfe2e4', edge: '#70767c', text: '#17191c', soft: '#4b5157',
  data: '#1f5fa8', data2: '#666c72', choked: '#dbe4ef',
  warning: '#b3161d', onWarning: '#ffffff', warningInk: '#b3161d',
  caution: '#f0b429', onCaution: '#17191c', cautionInk: '#855300',
};

export const dark: Palette = {
  ground: '#26292c', panel: '#1f2224', line: '#454a4f', grid: '#303438', edge: '#8b9299', text: '#eceef0', soft: '#b3b9be',
  data: '#76b0ee', data2: '#a3a9ae', choked: '#2c3a4a',
  warning: '#c9252d', onWarning: '#ffffff', warningInk: '#ff8b86',
  caution: '#f0b429', onCaution: '#17191c', cautionInk: '#f0b429',
};

function channel(hex: string, at: number): number {
  const c = parseInt(hex.slice(at, at + 2), 16) / 255;
  return c <= 0.04045 ? c / 12.92 : ((c + 0.055) / 1.055) ** 2.4;
}

/** Relative luminance of #rrggbb, 0 to 1 [WCAG 2.2, relative luminance]. */
export function luminance(hex: string): number {
  return 0.2126 * channel(hex, 1) + 0.7152 * channel(hex, 3) + 0.0722 * channel(hex, 5);
}

/** Contrast ratio of two colours, 1 to 21 [WCAG 2.2, contrast ratio]. */
export function contrast(a: string, b: string): number {
  const [x, y] = [luminance(a), luminance(b)];
  return (Math.max(x, y) + 0.05) / (Math.min(x, y) + 0.05);
}

/** Sets the palette as custom properties: ground → --ground. A style element would need a weaker content security policy. */
export function paint(style: Pick<CSSStyleDeclaration, 'setProperty'>, p: Palette): void {
  for (const [k, v] of Object.entries(p)) style.setProperty(`--${k}`, v);
}
