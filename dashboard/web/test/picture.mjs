// Makes a screenshot small: a page has few colours, so a palette does for it.
import { deflateSync, inflateSync } from 'node:zlib';

const signature = Buffer.from([137, 80, 78, 71, 13, 10, 26, 10]);
const crcTable = Array.from({ length: 256 }, (_, n) => {
  let c = n;
  for (let k = 0; k < 8; k++) c = c & 1 ? 0xedb88320 ^ (c >>> 1) : c >>> 1;
  return c >>> 0;
});

function chunk(type, body) {
  const out = Buffer.alloc(12 + body.length);
  out.writeUInt32BE(body.length, 0);
  out.write(type, 4, 'latin1');
  body.copy(out, 8);
  let c = 0xffffffff;
  for (const b of out.subarray(4, 8 + body.length)) c = crcTable[(c ^ b) & 255] ^ (c >>> 8);
  out.writeUInt32BE((c ^ 0xffffffff) >>> 0, 8 + body.length);
  return out;
}

/** Pixels of an 8-bit RGB or RGBA image without interlace, as Chromium writes it [PNG 9.2]. */
function decode(png) {
  const parts = [];
  let [width, height, bytes] = [0, 0, 0];
  for (let at = 8; at < png.length; at += 12 + png.readUInt32BE(at)) {
    const type = png.toString('latin1', at + 4, at + 8);
    const body = png.subarray(at + 8, at + 8 + png.readUInt32BE(at));
    if (type === 'IDAT') parts.push(body);
    if (type !== 'IHDR') continue;
    [width, height, bytes] = [body.readUInt32BE(0), body.readUInt32BE(4), body[9] === 6 ? 4 : 3];
    if (body[8] !== 8 || (body[9] !== 6 && body[9] !== 2) || body[12] !== 0) throw new Error('the picture is not 8-bit RGB without interlace');
  }
  const raw = inflateSync(Buffer.concat(parts));
  const stride = width * bytes;
  const out = Buffer.alloc(stride * height);
  for (let y = 0; y < height; y++) {
    const filter = raw[y * (stride + 1)];
    for (let x = 0; x < stride; x++) {
      const a = x >= bytes ? out[y * stride + x - bytes] : 0;
      const b = y > 0 ? out[(y - 1) * stride + x] : 0;
      const c = x >= bytes && y > 0 ? out[(y - 1) * stride + x - bytes] : 0;
      const p = a + b - c;
      const [pa, pb, pc] = [Math.abs(p - a), Math.abs(p - b), Math.abs(p - c)];
      const guess = [0, a, b, (a + b) >> 1, pa <= pb && pa <= pc ? a : pb <= pc ? b : c][filter];
      out[y * stride + x] = raw[y * (stride + 1) + 1 + x] + guess;
    }
  }
  return { width, height, bytes, pixels: out };
}

/**
 * The same picture with at most 256 colours: the most frequent ones that differ, so
 * that a small sign keeps its own; every other one by its nearest.
 */
export function small(png) {
  const { width, height, bytes, pixels } = decode(png);
  const count = new Map();
  const colour = (i) => (pixels[i] << 16) | (pixels[i + 1] << 8) | pixels[i + 2];
  for (let i = 0; i < pixels.length; i += bytes) count.set(colour(i), (count.get(colour(i)) ?? 0) + 1);
  const distance = (a, b) => ((a >> 16) - (b >> 16)) ** 2 + (((a >> 8) & 255) - ((b >> 8) & 255)) ** 2 + ((a & 255) - (b & 255)) ** 2;
  const frequent = [...count].sort((a, b) => b[1] - a[1]).map(([c]) => c);
  let table = [];
  for (let apart = 0; ; apart += 3) {
    table = [];
    for (const c of frequent) if (table.length <= 256 && table.every((d) => distance(c, d) > apart * apart)) table.push(c);
    if (table.length <= 256) break;
  }
  const index = new Map(table.map((c, i) => [c, i]));
  const nearest = (c) => table.reduce((best, d, i) => (distance(c, d) < distance(c, table[best]) ? i : best), 0);
  for (const c of count.keys()) if (!index.has(c)) index.set(c, nearest(c));
  const rows = Buffer.alloc((width + 1) * height); // each begins with filter 0
  for (let y = 0; y < height; y++) for (let x = 0; x < width; x++) rows[y * (width + 1) + 1 + x] = index.get(colour((y * width + x) * bytes));
  const head = Buffer.alloc(13);
  head.writeUInt32BE(width, 0);
  head.writeUInt32BE(height, 4);
  head.set([8, 3, 0, 0, 0], 8);
  return Buffer.concat([signature, chunk('IHDR', head), chunk('PLTE', Buffer.from(table.flatMap((c) => [c >> 16, (c >> 8) & 255, c & 255]))), chunk('IDAT', deflateSync(rows, { level: 9, memLevel: 9 })), chunk('IEND', Buffer.alloc(0))]);
}
