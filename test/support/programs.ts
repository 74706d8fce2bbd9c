import { existsSync } from 'node:fs';
import { basename, dirname, join } from 'node:path';
import { fileURLToPath } from 'node:url';

const root = join(dirname(fileURLToPath(import.meta.url)), '../..');
/** A benchmark is compiled itself, a test is not. */
const compiled = basename(root) === 'dist';
const dist = compiled ? root : join(root, 'dist');
/** Where the sources are. */
export const projectRoot = compiled ? dirname(root) : root;

/** The two compiled programs; `npm test` builds them first. */
export const programs = {
  commonfit: join(dist, 'coordinator/main.js'),
  worker: join(dist, 'worker/main.js'),
  generateDemo: join(dist, 'examples/pipe-breaks/generate.js'),
  lightWorkers: join(dist, 'test/bench/scale-workers.js'),
};

for (const path of Object.values(programs))
  if (!existsSync(path))
    throw new Error(`${path} is missing: run \`npm run build\` first (\`npm test\` does).`);
