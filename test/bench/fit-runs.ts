import { spawn, spawnSync } from 'node:child_process';
import { join } from 'node:path';
import { createInterface } from 'node:readline';
import type { LogEvent } from '../../coordinator/run/log-event.js';
import type { WorkerEvent } from '../../worker/service/events.js';
import { projectRoot } from '../support/programs.js';
import { siteFileOf } from '../support/small-scenario.js';
import { Stage } from '../support/stage.js';
import { columnNames, drawRows, type FitProblem, objectiveOf, writeRows } from './fit-problems.js';

const SITES = ['harrowmere', 'lindell-bay'] as const;
const SPECIFICATION = 'bench.fit.yaml';
/** Relative to the size of the objective; what both fits must reach. */
export const GAP_MOST = 1e-6;
/** Thresholds of convergence tried for the pooled fit, coarsest first. */
const THRESHOLDS = [1e-7, 1e-9, 1e-11, 1e-13, 1e-15];

/** One whole fit, in seconds; the least of the repeats. */
export interface FitTimes {
  readonly name: string;
  readonly matrices: FitProblem['matrices'];
  readonly rounds: number;
  /** Of ours, as certified, and of the pooled fit beside it, relative. */
  readonly gap: number;
  readonly pooledGap: number | null;
  /** Tables loaded. */
  readonly seconds: number;
  readonly pooledSeconds: number | null;
  readonly pooledMethod: string | null;
  readonly ratio: number | null;
  /** From the CSV files on. */
  readonly secondsWithLoading: number;
  readonly pooledSecondsWithLoading: number | null;
  readonly ratioWithLoading: number | null;
}

/** Times a problem through a coordinator and two workers in processes of their own, in alternation with the pooled fit. */
export async function measureFit(problem: FitProblem, repeats: number, pooled: boolean): Promise<FitTimes> {
  const stage = await Stage.open('bench-fit');
  try {
    const rows = drawRows(problem);
    const half = Math.floor(problem.rowCount / 2);
    const files = SITES.map((site) => join(stage.folder, `${site}.csv`));
    await writeRows(files[0], rows, problem.columns, 0, half);
    await writeRows(files[1], rows, problem.columns, half, problem.rowCount);
    await prepare(stage, problem);
    const beside = pooled ? await PooledFit.open(problem, files) : null;
    const ours: OwnFit[] = [];
    const theirs: PooledAnswer[] = [];
    for (let repeat = 0; repeat < repeats; repeat++) {
      ours.push(await ownFit(stage));
      const best = ours[0].objective * (1 - ours[0].gap);
      // the folds are others' draws: of a path the times alone are compared, at the package's own threshold
      const gapOf = (found: readonly number[]): number =>
        problem.folds > 0 ? 0 : objectiveOf(problem, rows, found) / best - 1;
      if (beside !== null) theirs.push(await beside.fit(gapOf));
    }
    beside?.close();
    return timesOf(problem, ours, theirs, beside?.readingSeconds ?? null);
  } finally {
    await stage.close();
  }
}

function timesOf(
  { name, matrices }: FitProblem,
  ours: readonly OwnFit[],
  theirs: readonly PooledAnswer[],
  readingSeconds: number | null,
): FitTimes {
  const least = (values: readonly number[]): number => Math.min(...values);
  const seconds = least(ours.map((one) => one.seconds));
  const secondsWithLoading = least(ours.map((one) => one.secondsWithLoading));
  const quickest = theirs.toSorted((a, b) => a.seconds - b.seconds).at(0) ?? null;
  const pooledSeconds = quickest?.seconds ?? null;
  const pooledSecondsWithLoading =
    pooledSeconds === null || readingSeconds === null ? null : pooledSeconds + readingSeconds;
  return {
    name,
    matrices,
    rounds: ours[0].rounds,
    gap: ours[0].gap,
    pooledGap: quickest?.gap ?? null,
    seconds,
    pooledSeconds,
    pooledMethod: quickest?.method ?? null,
    ratio: pooledSeconds === null ? null : seconds / pooledSeconds,
    secondsWithLoading,
    pooledSecondsWithLoading,
    ratioWithLoading:
      pooledSecondsWithLoading === null ? null : secondsWithLoading / pooledSecondsWithLoading,
  };
}

async function prepare(stage: Stage, problem: FitProblem): Promise<void> {
  await stage.serve();
  for (const site of SITES) {
    await stage.write(
      `${site}.site.yaml`,
      siteFileOf(stage, site, `{csv: ./${site}.csv}`, [
        `curvature-most: ${problem.matrices}`,
        'numbers-most: 100000000',
      ]),
    );
    await stage.admit(site);
    stage.join(site);
  }
  await stage.write(SPECIFICATION, specificationOf(problem));
}

const specificationOf = ({ loss, columns, lambda, l1, folds }: FitProblem): string =>
  [
    'commonfit: 1',
    'title: A whole fit, timed',
    `sites: [${SITES.join(', ')}]`,
    'response: {column: y}',
    `loss: ${loss}`,
    ...(loss === 'poisson' ? ['exposure: {column: exposure}'] : []),
    'terms:',
    ...columnNames(columns).map((name) => `  - {column: ${name}}`),
    ...penaltyOf({ lambda, l1, folds }),
    `rounds: {tolerance: ${GAP_MOST}, most: 300}`,
    '',
  ].join('\n');

function penaltyOf({ lambda, l1, folds }: Pick<FitProblem, 'lambda' | 'l1' | 'folds'>): string[] {
  if (folds > 0)
    return [
      'penalty:',
      `  - {kind: elastic-net, lambda: {count: 30, ratio: 0.01}, l1: ${l1}}`,
      `choose: {folds: ${folds}, seed: 3, rule: minimum}`,
    ];
  return lambda > 0 ? ['penalty:', `  - {kind: elastic-net, lambda: ${lambda}, l1: ${l1}}`] : [];
}

interface OwnFit {
  readonly seconds: number;
  readonly secondsWithLoading: number;
  readonly rounds: number;
  readonly gap: number;
  readonly objective: number;
}

async function ownFit(stage: Stage): Promise<OwnFit> {
  const following = stage.submit(SPECIFICATION);
  const { code, event, result } = await following.outcome(600_000);
  if (code !== 0) throw new Error(`the fit ended as ${event.outcome}: ${event.reason}`);
  const { at, run } = await following.event('accepted');
  const whole = (Date.parse(event.at) - Date.parse(at)) / 1000;
  const loading = Math.max(...SITES.map((site) => loadingSeconds(stage, site, run)));
  const { fits } = JSON.parse(result) as {
    fits: { objective: number; certificate: { relativeGap: number } }[];
  };
  return {
    seconds: whole - loading,
    secondsWithLoading: whole,
    rounds: roundsIn(following.events()),
    gap: Math.max(...fits.map(({ certificate }) => certificate.relativeGap)),
    objective: fits[0].objective,
  };
}

const roundsIn = (events: readonly LogEvent[]): number =>
  events.filter((event) => event.event === 'round').length;

/** How long a worker took to read its table and to make its columns. */
function loadingSeconds(stage: Stage, site: string, run: string): number {
  const found = stage
    .workerOf(site)
    .jsonLines<WorkerEvent>('stderr')
    .find((event) => event.event === 'table' && event.run === run);
  if (found?.event !== 'table') throw new Error(`the worker of ${site} read no table`);
  return found.tookMs / 1000;
}

interface PooledAnswer {
  readonly method: string;
  readonly seconds: number;
  readonly gap: number;
}

/** True where R and the package that fits the pooled rows are there. */
export const hasPooledFit = (): boolean =>
  spawnSync('Rscript', ['-e', 'library(glmnet)'], { stdio: 'ignore' }).status === 0;

/** The pooled fit in a process of its own, which has the tables in memory. */
class PooledFit {
  #threshold = 0;

  private constructor(
    private readonly ask: (line: string) => void,
    private readonly lines: AsyncIterator<string>,
    readonly close: () => void,
    readonly readingSeconds: number,
  ) {}

  static async open({ loss, lambda, l1, folds }: FitProblem, files: readonly string[]): Promise<PooledFit> {
    const script = join(projectRoot, 'test/bench/pooled-fit.R');
    const child = spawn('Rscript', [script, loss, String(lambda), String(l1), String(folds), ...files], {
      stdio: ['pipe', 'pipe', 'inherit'],
    });
    const lines = createInterface({ input: child.stdout })[Symbol.asyncIterator]();
    const { reading } = await nextOf<{ reading: number }>(lines);
    return new PooledFit(
      (line) => child.stdin.write(`${line}\n`),
      lines,
      () => child.kill(),
      reading,
    );
  }

  /** At the coarsest threshold whose coefficients are good to `GAP_MOST`. */
  async fit(gapOf: (coefficients: readonly number[]) => number): Promise<PooledAnswer> {
    for (; this.#threshold < THRESHOLDS.length; this.#threshold++) {
      const good = (await this.#answers(THRESHOLDS[this.#threshold]))
        .map(({ method, seconds, coefficients }) => ({ method, seconds, gap: gapOf(coefficients) }))
        .filter(({ gap }) => gap <= GAP_MOST)
        .toSorted((a, b) => a.seconds - b.seconds);
      if (good.length > 0) return good[0];
    }
    throw new Error(`the pooled fit does not reach a gap of ${GAP_MOST}`);
  }

  async #answers(threshold: number): Promise<PooledLine[]> {
    this.ask(String(threshold));
    const answers: PooledLine[] = [];
    for (;;) {
      const line = await nextOf<PooledLine | { done: true }>(this.lines);
      if ('done' in line) return answers;
      answers.push(line);
    }
  }
}

interface PooledLine {
  readonly method: string;
  readonly seconds: number;
  readonly coefficients: readonly number[];
}

async function nextOf<T>(lines: AsyncIterator<string>): Promise<T> {
  const { done, value } = await lines.next();
  if (done === true) throw new Error('the pooled fit ended early');
  return JSON.parse(value) as T;
}
