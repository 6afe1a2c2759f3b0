// Fails when what a first visit loads is more than 150 kB compressed, or when the
// page refers to anything outside itself.
import { readFileSync, readdirSync } from 'node:fs';
import { join } from 'node:path';
import { gzipSync } from 'node:zlib';

const limit = 150_000;
let total = 0;
for (const entry of readdirSync('dist', { recursive: true, withFileTypes: true })) {
  if (!entry.isFile()) continue;
  const file = join(entry.parentPath, entry.name);
  const body = readFileSync(file);
  total += gzipSync(body).length;
  if (/\.(html|css)$/.test(file) && /(?:src|href)="https?:|url\(\s*["']?https?:|@import/.test(body.toString())) {
    console.error(`${file}: refers to an outside address`);
    process.exitCode = 1;
  }
}
console.log(`first load ${(total / 1000).toFixed(1)} kB compressed, limit ${limit / 1000} kB`);
if (total > limit) process.exitCode = 1;
