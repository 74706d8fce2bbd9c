import { setSmallScenario } from '../support/small-scenario.js';
import type { Stage } from '../support/stage.js';
import {
  type Attackers,
  halfOpen,
  malformed,
  promised,
  type Tally,
  unaskedFlood,
  wrongTokens,
} from './attacks.js';
import { residentMiB, type Watched, watchService } from './watch.js';

export interface Sizes {
  /** Rows of the first site. */
  readonly rows: number;
  /** Fits before anything else: what the service takes without an attack. */
  readonly fitsBefore: number;
  readonly malformedFrames: number;
  readonly malformedLinks: number;
  readonly halfOpenConnections: number;
  readonly halfOpenLinks: number;
  readonly promisedLinks: number;
  readonly unaskedLinks: number;
  readonly unaskedPerLink: number;
  readonly wrongTokens: number;
  /** Or one after the other. */
  readonly allAtOnce: boolean;
  /** Times that all attacks are gone through. */
  readonly rounds: number;
}

export interface AttackFigures extends Watched {
  readonly attack: string;
  readonly seconds: number;
  readonly refusals: Readonly<Record<string, number>>;
  /** Fits that were solved meanwhile, each with the bytes of the undisturbed one. */
  readonly fits: number;
  readonly fitSecondsMedian: number;
}

export interface LoadFigures {
  /** Highest resident memory while the undisturbed fits ran. MiB. */
  readonly baselineMiB: number;
  readonly fitSecondsMedian: number;
  readonly attacks: readonly AttackFigures[];
  /** Highest of each round of attacks less the baseline: what is lost for good grows from round to round. MiB. */
  readonly grownMiB: readonly number[];
  readonly residentAfterMiB: number;
}

const SITES = ['harrowmere', 'castlefen'];
const ATTACKERS = ['saltmarsh', 'reedham', 'gullholm', 'fenwick'];

/** Fits on a coordinator of its own process, one after the other, undisturbed at first and then under each attack. */
export async function runLoad(
  stage: Stage,
  sizes: Sizes,
  tell: (line: string) => void,
): Promise<LoadFigures> {
  await setSmallScenario(stage, sizes.rows, SITES);
  for (const site of SITES) stage.join(site);
  const pid = stage.coordinator?.pid ?? 0;
  const attackers = await admitAttackers(stage);
  const [undisturbed, ...more] = await fitsFor(stage, sizes.fitsBefore - 1, null);
  if (undisturbed === undefined) throw new Error('no fit');
  const watch = watchService(stage.address, pid);
  const fits = [...more, ...(await fitsFor(stage, 1, null))];
  expectSame(fits, undisturbed.result);
  const { residentMostMiB: baselineMiB } = await watch.stop();
  tell(`Undisturbed: ${sizes.fitsBefore} fits, resident memory at most ${baselineMiB.toFixed(1)} MiB.`);
  const attacks: AttackFigures[] = [];
  const each = attacksOf(attackers, sizes);
  const round = sizes.allAtOnce ? [together(each)] : each;
  for (const [attack, go] of Array.from({ length: sizes.rounds }, () => round).flat()) {
    const figures = await underAttack(stage, pid, attack, go, undisturbed.result);
    attacks.push(figures);
    tell(lineOf(figures, baselineMiB));
  }
  return {
    baselineMiB,
    fitSecondsMedian: medianOf([undisturbed, ...fits].map(({ seconds }) => seconds)),
    attacks,
    grownMiB: Array.from({ length: sizes.rounds }, (_, at) => {
      const ofRound = attacks.slice(at * round.length, (at + 1) * round.length);
      return Math.max(...ofRound.map(({ residentMostMiB }) => residentMostMiB)) - baselineMiB;
    }),
    residentAfterMiB: await residentMiB(pid),
  };
}

type Attack = () => Promise<Tally>;

const attacksOf = (attackers: Attackers, sizes: Sizes): readonly [string, Attack][] => [
  [
    `${sizes.malformedFrames} malformed frames over ${sizes.malformedLinks} links`,
    () => malformed(attackers, sizes.malformedFrames, sizes.malformedLinks),
  ],
  [
    `${sizes.halfOpenConnections} connections without a whole upgrade, ${sizes.halfOpenLinks} links without a hello`,
    () => halfOpen(attackers, sizes.halfOpenConnections, sizes.halfOpenLinks),
  ],
  [`${sizes.promisedLinks} frames that promise 200 MB`, () => promised(attackers, sizes.promisedLinks)],
  [
    `${sizes.unaskedLinks} links with ${sizes.unaskedPerLink} answers nobody asked for each`,
    () => unaskedFlood(attackers, sizes.unaskedLinks, sizes.unaskedPerLink),
  ],
  [`${sizes.wrongTokens} wrong tokens`, () => wrongTokens(attackers, sizes.wrongTokens)],
];

const together = (attacks: readonly [string, Attack][]): [string, Attack] => [
  attacks.map(([attack]) => attack).join('; '),
  async () => {
    const all: Tally = new Map();
    for (const tally of await Promise.all(attacks.map(([, go]) => go()))) {
      for (const [refusal, times] of tally) all.set(refusal, (all.get(refusal) ?? 0) + times);
    }
    return all;
  },
];

async function admitAttackers(stage: Stage): Promise<Attackers> {
  const sites = [];
  for (const site of ATTACKERS) {
    await stage.admit(site);
    sites.push({ site, token: (await stage.read(`${site}.token`)).trim() });
  }
  return { address: stage.address, sites };
}

async function underAttack(
  stage: Stage,
  pid: number,
  attack: string,
  go: Attack,
  undisturbed: string,
): Promise<AttackFigures> {
  const watch = watchService(stage.address, pid);
  const started = performance.now();
  let over = false;
  const attacking = go().finally(() => {
    over = true;
  });
  const [tally, fits] = await Promise.all([attacking, fitsFor(stage, 1, () => over)]);
  const seconds = (performance.now() - started) / 1000;
  expectSame(fits, undisturbed);
  const fitSecondsMedian = medianOf(fits.map(({ seconds: took }) => took));
  return {
    attack,
    seconds,
    refusals: Object.fromEntries([...tally].sort()),
    fits: fits.length,
    fitSecondsMedian,
    ...(await watch.stop()),
  };
}

interface Fit {
  readonly result: string;
  readonly seconds: number;
}

/** At least `least` fits, one after the other, until `over` says so. */
async function fitsFor(stage: Stage, least: number, over: (() => boolean) | null): Promise<Fit[]> {
  const fits: Fit[] = [];
  while (fits.length < least || over?.() === false) {
    const started = performance.now();
    const { event, result } = await stage.submit('long.fit.yaml').outcome();
    if (event.outcome !== 'solved') throw new Error(`a fit ended as ${event.outcome}: ${event.reason}`);
    fits.push({ result, seconds: (performance.now() - started) / 1000 });
  }
  return fits;
}

function expectSame(fits: readonly Fit[], undisturbed: string): void {
  if (fits.some(({ result }) => result !== undisturbed)) throw new Error('a fit came out with other bytes');
}

function medianOf(values: readonly number[]): number {
  return [...values].sort((a, b) => a - b)[Math.floor(values.length / 2)] ?? 0;
}

export function lineOf(figures: AttackFigures, baselineMiB: number): string {
  const { attack, seconds, refusals, fits, healthMs, residentMostMiB, fitSecondsMedian } = figures;
  const codes = Object.entries(refusals).map(([code, times]) => `${times} × ${code}`);
  const ms = (value: number): string => `${value.toFixed(1)} ms`;
  return [
    `${attack}: ${seconds.toFixed(1)} s; ${codes.join(', ')}.`,
    `  ${fits} fits meanwhile, all with the same bytes, ${fitSecondsMedian.toFixed(1)} s each at the median;`,
    `  health answers in ${ms(healthMs.median)} (99 of 100 ${ms(healthMs.p99)}, most ${ms(healthMs.most)});`,
    `  resident memory at most ${(residentMostMiB - baselineMiB).toFixed(1)} MiB above the baseline.`,
  ].join('\n');
}
