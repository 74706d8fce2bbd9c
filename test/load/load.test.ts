import { afterAll, beforeAll, expect, test } from 'vitest';
import { Stage } from '../support/stage.js';
import { type LoadFigures, runLoad } from './scenario.js';

/** `npm run load` in small: a fraction of each attack, all at once. It needs several addresses on loopback, and /proc. */
const SMALL = {
  ...{ rows: 200, fitsBefore: 5, malformedFrames: 20_000, malformedLinks: 36 },
  ...{ halfOpenConnections: 120, halfOpenLinks: 40, promisedLinks: 20 },
  ...{ unaskedLinks: 4, unaskedPerLink: 2000, wrongTokens: 2000, allAtOnce: true, rounds: 1 },
};
/** A quarter of a minute on a machine of its own. */
const ALL_OF_IT_MS = 180_000;
const onLinux = process.platform === 'linux';

let stage: Stage;
let figures: LoadFigures;
beforeAll(async () => {
  if (!onLinux) return;
  stage = await Stage.open('load-small');
  figures = await runLoad(stage, SMALL, () => {});
}, ALL_OF_IT_MS);
afterAll(() => stage?.close());

test.runIf(onLinux)('under attack fits come out with the same bytes and every refusal has its code', () => {
  // a fit with other bytes, a health route that does not answer, and a wrong close code have thrown already
  const [{ fits, refusals }] = figures.attacks;
  expect(fits).toBeGreaterThan(0);
  const {
    'http 401 token-refused': noSite = 0,
    'http 401 unauthorised': noAnalyst = 0,
    'http 429 too-many-requests': tooMany = 0,
    ...others
  } = refusals;
  expect(noSite + noAnalyst + tooMany).toBe(SMALL.wrongTokens);
  expect(Math.min(noSite, noAnalyst, tooMany)).toBeGreaterThan(0);
  expect(others).toEqual({
    'close 1009': 20,
    'close 4000': 30,
    'close 4001': 4 + 4,
    'close 4002': 2,
    'close 4005': 40,
    'http 408 too-slow': 120,
  });
});

test.runIf(onLinux)('the resident memory of the service grows by less than 50 MiB', () => {
  expect(figures.grownMiB[0]).toBeLessThan(50);
});
