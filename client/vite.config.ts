import { svelte } from '@sveltejs/vite-plugin-svelte';
import { defineConfig } from 'vite';

/** The server that the development page talks to. */
const SERVER = 'http://127.0.0.1:8600';

export default defineConfig(({ command }) => {
  // Whatever the shell says: tests that start the demonstration carry NODE_ENV=test, and their pages are kept for others.
  if (command === 'build') process.env['NODE_ENV'] = 'production';
  return {
    root: import.meta.dirname,
    // Small pages: short names of scoped classes, which stand in every line of the templates, and templates as trees.
    plugins: [
      svelte({ compilerOptions: { fragments: 'tree', cssHash: ({ hash, css }) => `s${hash(css).slice(0, 4)}` } }),
    ],
    build: {
      outDir: 'dist',
      emptyOutDir: true,
      target: 'es2023',
      // Type is never inlined: the page's policy lets fonts and pictures come from its own server only.
      assetsInlineLimit: 0,
      cssCodeSplit: false,
      // Every browser of the target preloads modules by itself.
      modulePreload: { polyfill: false },
      rolldownOptions: {
        // What the first page needs is one file: names that files hand to each other do not compress.
        output: { codeSplitting: { groups: [{ name: 'pages', tags: ['$initial'] }] } },
        treeshake: {
          // The contract builds its schemas when it is loaded. The page uses its types and functions, not the schemas.
          manualPureFunctions: ['Type', 'Nullable', 'Cyclic'],
        },
      },
    },
    server: {
      host: '127.0.0.1',
      proxy: {
        '/api': SERVER,
        '/metrics': SERVER,
        '/live': { target: SERVER, ws: true },
      },
    },
  };
});
