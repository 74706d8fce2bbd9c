import { afterAll, describe, expect, test } from 'vitest';
import { LossyNamespace } from '../support/lossy-namespace.js';
import { SMALL_SITES, setSmallScenario } from '../support/small-scenario.js';
import { PATIENT, roundsOf, Stage } from '../support/stage.js';

/** Real packets, lost by the kernel: what the delaying proxy of the other tests only models. */
const LOSS_SHARE = 0.01;
/** A fit is some hundred packets, of which by chance none may be lost: so many fits at most until one is. */
const FITS_MOST = 6;
const namespace = LossyNamespace.open(LOSS_SHARE);
const stages: Stage[] = [];
afterAll(async () => {
  await Promise.all(stages.map((stage) => stage.close()));
  if (typeof namespace !== 'string') namespace.close();
});

async function fitWith(launcher: readonly string[]) {
  const stage = await Stage.open('real-loss', launcher);
  stages.push(stage);
  await setSmallScenario(stage, 600);
  for (const site of SMALL_SITES) stage.join(site);
  const following = stage.submit('long.fit.yaml');
  const { code, result } = await following.outcome();
  return { code, result, rounds: roundsOf(following.events()) };
}

const why = typeof namespace === 'string' ? ` (skipped: ${namespace})` : '';

describe.skipIf(typeof namespace === 'string')(`one packet of a hundred is lost${why}`, PATIENT, () => {
  test('and sent again; the result has the bytes of the undisturbed run', async () => {
    if (typeof namespace === 'string') throw new Error(namespace);
    const undisturbed = await fitWith([]);
    expect(undisturbed.code).toBe(0);
    for (let fit = 0; fit < FITS_MOST && namespace.retransmitted() === 0; fit++)
      expect(await fitWith(namespace.launcher)).toEqual(undisturbed);
    expect(namespace.retransmitted()).toBeGreaterThan(0);
  });
});
