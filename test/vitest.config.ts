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
      // The bound holds for the full set of tests, which only CI is sure to run.
      enabled: process.env['CI'] === 'true',
      thresholds: { branches: 95 },
      provider: 'v8',
      include: ['server/core/**/*.ts'],
      reportsDirectory: 'coverage',
      reporter: ['text-summary'],
    },
  },
});
