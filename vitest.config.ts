import { defineConfig } from 'vitest/config';

export default defineConfig({
  test: {
    include: ['test/**/*.test.ts'],
    // they need an engine, or packages of Python: npm run test:containers, npm run test:interop
    exclude: ['test/containers/**', 'test/interop/**', 'node_modules/**'],
    setupFiles: ['test/support/setup.ts'],
    // processes and sockets of one test file do not wait for those of another on two cores
    maxWorkers: 2,
    testTimeout: 30_000,
    hookTimeout: 30_000,
  },
});
