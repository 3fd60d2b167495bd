import { defineConfig } from 'vitest/config';

const root = new URL('..', import.meta.url).pathname;

const report = process.env['SPANBEAT_TEST_REPORT'];

export default defineConfig({
  root,
  test: {
    include: ['test/**/*.test.ts'],
    testTimeout: 60_000,
    hookTimeout: 60_000,
    pool: 'forks',
    // The summary that .ci/run reads.
    reporters: report === undefined ? ['default'] : ['default', ['json', { outputFile: report }]],
    maxWorkers: 2,
    coverage: {
      provider: 'v8',
      include: ['server/core/**/*.ts'],
      reportsDirectory: 'coverage',
      reporter: ['text-summary', 'json-summary', 'text'],
    },
  },
});
