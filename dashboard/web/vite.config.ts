import { defineConfig } from 'vite';

// The page is embedded in the binary and served from any path: every reference
// is relative and nothing is fetched from elsewhere.
export default defineConfig({
  base: './',
  build: { target: 'es2022', assetsInlineLimit: 8192, modulePreload: false, reportCompressedSize: false },
  server: { proxy: { '/api': 'http://127.0.0.1:8189', '/live': { target: 'ws://127.0.0.1:8189', ws: true } } },
});
