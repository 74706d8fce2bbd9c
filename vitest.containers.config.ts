import { defineConfig } from 'vitest/config';

/** The container tests, by themselves: they build images and share one engine. */
export default defineConfig({
  test: {
    include: ['test/containers/**/*.test.ts'],
    maxWorkers: 1,
    testTimeout: 300_000,
    hookTimeout: 900_000,
    env: { TESTCONTAINERS_RYUK_DISABLED: 'true' },
  },
});
