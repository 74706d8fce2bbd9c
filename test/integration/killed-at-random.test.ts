import { afterAll, beforeAll, expect, test } from 'vitest';
import { recomputeFolder } from '../../coordinator/service/recompute.js';
import { seededRandom } from '../../numerics/random.js';
import { connected, drawInstants, type EndedRun, type Instant, StruckRun } from '../support/kill-instants.js';
import { SMALL_SITES, setSmallScenario } from '../support/small-scenario.js';
import { roundsOf, Stage } from '../support/stage.js';

/** Kills of each kind: a handful here, 50 with COMMONFIT_KILLS=50; COMMONFIT_KILLS_SEED draws other instants. */
const KILLS = Number(process.env.COMMONFIT_KILLS ?? 2);
const SEED = Number(process.env.COMMONFIT_KILLS_SEED ?? 1);
const BOUND = { timeout: 150_000 + KILLS * 30_000 } as const;
const random = seededRandom(SEED);

let stage: Stage;
let undisturbed: EndedRun;

beforeAll(async () => {
  stage = await Stage.open('killed-at-random');
  await setSmallScenario(stage, 600);
  for (const site of SMALL_SITES) stage.join(site);
  // the instants are drawn over the time that a coordinator just started takes: each struck run has one of those
  const runs: EndedRun[] = [];
  for (let time = 1; time <= 2; time++) {
    await stage.killCoordinator();
    await stage.serve();
    runs.push(await (await submitted()).end(said));
  }
  const [first, second] = runs;
  expect(second.result).toBe(first.result);
  expect(second.events.at(-1)).toMatchObject({ event: 'outcome', outcome: 'solved' });
  undisturbed = first.tookMs < second.tookMs ? first : second;
}, BOUND.timeout);
afterAll(() => stage?.close());

/** The last words of every process. */
const said = (): string =>
  [stage.coordinator, ...SMALL_SITES.map((site) => stage.workerOf(site))]
    .map((program) => `${program?.running ? 'running' : 'gone'}: ${program?.lastWords}`)
    .join('\n');

/** A run whose sites are all there, so that its time is that of its rounds. */
async function submitted(): Promise<StruckRun> {
  await connected(stage, SMALL_SITES);
  return StruckRun.submit(stage, 'long.fit.yaml');
}

const strikes = {
  'the coordinator': async () => {
    await stage.killCoordinator();
    return () => stage.serve();
  },
  'a worker': async () => {
    const site = SMALL_SITES[random.integer(SMALL_SITES.length)];
    await stage.workerOf(site).kill();
    return async () => void stage.join(site);
  },
  'every process at once': async () => {
    await Promise.all([stage.killCoordinator(), ...SMALL_SITES.map((site) => stage.workerOf(site).kill())]);
    return async () => {
      await stage.serve();
      for (const site of SMALL_SITES) stage.join(site);
    };
  },
} as const;

/** Strikes a new run at that instant and starts again what was killed. True where the run was under way. */
async function strikeOnce(victim: keyof typeof strikes, instant: Instant): Promise<boolean> {
  const struck = await submitted();
  await struck.reach(instant, undisturbed);
  const startAgain = await strikes[victim]();
  const underWay = !struck.hasEnded;
  await startAgain();
  const ended = await struck.end(said);
  const where = `${victim}, struck at ${instant.share} of the ${instant.by}`;
  expect(ended.result, where).toBe(undisturbed.result);
  expect(roundsOf(ended.events), where).toEqual(roundsOf(undisturbed.events));
  expect(ended.events.filter(({ event }) => event === 'outcome').length, where).toBe(1);
  const recomputed = await recomputeFolder(ended.folder);
  expect(recomputed, where).toMatchObject({
    ok: true,
    value: { difference: null, result: 'equal', ended: true },
  });
  return underWay;
}

test.each([
  ['the coordinator', KILLS],
  ['a worker', KILLS],
  ['every process at once', Math.ceil(KILLS / 5)],
] as const)(
  'SIGKILL takes %s at %i random instants of runs; each ends with the same bytes',
  BOUND,
  async (victim, kills) => {
    const started = performance.now();
    let underWay = 0;
    for (const instant of drawInstants(random, kills)) {
      if (await strikeOnce(victim, instant)) underWay += 1;
    }
    const seconds = Math.round((performance.now() - started) / 1000);
    console.info(`${victim}: ${kills} strikes, ${underWay} of them on a run under way; ${seconds} s`);
    // now and then a run ends before its instant; strikes that meet no run would prove nothing
    expect(underWay).toBeGreaterThanOrEqual(Math.floor(kills / 5));
  },
);

test('the command replays a struck run to the same bytes', BOUND, async () => {
  const struck = await submitted();
  await struck.reach({ by: 'journal', share: 0.5 }, undisturbed);
  await (await strikes['the coordinator']())();
  const { folder } = await struck.end(said);
  const { code, stdout } = await stage.commonfit('replay', folder, '--json');
  expect(code).toBe(0);
  expect(JSON.parse(stdout)).toMatchObject({ agrees: true, result: 'equal' });
});
