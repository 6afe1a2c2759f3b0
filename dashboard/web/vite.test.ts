import { readdirSync } from 'node:fs';
import { defineConfig } from 'vite';

// Bundles each test for node's own runner: the logic under test has no DOM.
export default defineConfig({
  publicDir: false,
  build: {
    ssr: true,
    target: 'node20',
    outDir: 'node_modules/.test',
    emptyOutDir: true,
    rolldownOptions: {
      input: readdirSync('test').filter((f) => f.endsWith('.test.ts')).map((f) => `test/${f}`),
      output: { entryFileNames: '[name].js' },
    },
  },
});
