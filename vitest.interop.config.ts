import { defineConfig } from 'vitest/config';

export default defineConfig({
  test: {
    include: ['test/interop/*.test.ts'],
    setupFiles: ['test/support/setup.ts'],
    maxWorkers: 1,
    testTimeout: 60_000,
    hookTimeout: 60_000,
  },
});
