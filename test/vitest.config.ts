import { defineConfig } from 'vitest/config';

const root = new URL('..', import.meta.url).pathname;

export default defineConfig({
  root,
  test: {
    include: ['test/**/*.test.ts'],
    testTimeout: 60_000,
    hookTimeout: 60_000,
    pool: 'forks',
    maxWorkers: 2,
    coverage: {
      provider: 'v8',
      include: ['server/core/**/*.ts'],
      reportsDirectory: 'coverage',
      reporter: ['text-summary', 'json-summary', 'text'],
    },
  },
});
