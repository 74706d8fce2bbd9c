import { fork } from 'node:child_process';
import { once } from 'node:events';
import { fileURLToPath } from 'node:url';
import { writeResults } from './results-file.js';
import { measureScale, type ScaleCase, type ScaleFigures } from './scale-coordinator.js';
import { workerTimes } from './scale-site.js';

/**
 * `npm run bench:scale`: what a round costs the coordinator, by the number of sites and of columns, against echoing the
 * same frames; and what an answer costs a site. `-- WORD` measures only the cases with that word in their name. Each
 * case has a coordinator process of its own, so that its memory is its own.
 */
const SITES = [10, 100, 1000];
const COLUMNS = [1e2, 1e3, 1e4, 1e5, 1e6];
/** More than so many bytes a round, both ways together, take longer than they tell. */
const ROUND_BYTES_MOST = 2e8;
/** Echoes at most 3 times: the target at 1000 sites and 1000 columns. */
const RATIO_MOST = 3;
/** For the widest: bound of the coordinator's memory. MiB. */
const RESIDENT_MOST_MIB = 4096;

interface NamedCase extends ScaleCase {
  readonly name: string;
}

const usual = { roundsMost: 16, tolerance: 1e-12 };
const wide: NamedCase = {
  name: 'proximal, 8 sites, p = 1e6, to a certified 1e-4',
  rung: 'proximal',
  siteCount: 8,
  p: 1e6,
  roundsMost: 100,
  tolerance: 1e-4,
  repeats: 1,
  echoRounds: 3,
};
const cases: NamedCase[] = [
  ...COLUMNS.flatMap((p) =>
    SITES.filter((siteCount) => 16 * p * siteCount <= ROUND_BYTES_MOST).map(
      (siteCount): NamedCase => ({
        name: `proximal, ${siteCount} sites, p = ${p}`,
        rung: 'proximal',
        siteCount,
        p,
        ...usual,
        repeats: 3,
        echoRounds: 15,
      }),
    ),
  ),
  ...[1e2, 1e3].map(
    (p): NamedCase => ({
      name: `sketched, 10 sites, p = ${p}`,
      rung: 'sketched',
      siteCount: 10,
      p,
      ...usual,
      repeats: 2,
      echoRounds: 15,
    }),
  ),
  wide,
];

type Named = ScaleFigures & { readonly name: string };

if (process.send !== undefined) {
  const [one] = (await once(process, 'message')) as [NamedCase];
  process.send({ name: one.name, ...(await measureScale(one)) } satisfies Named);
  process.disconnect();
} else await measureAll();

async function measureAll(): Promise<void> {
  const word = process.argv[2] ?? '';
  const results: object[] = [];
  for (const one of cases.filter(({ name }) => name.includes(word))) {
    const figures = await inItsOwnProcess(one);
    process.stdout.write(`${lineOf(figures)}\n`);
    results.push(figures);
  }
  if (word === '') {
    for (const time of workerTimes(3)) {
      process.stdout.write(`${time.name}: ${time.cpuMs.toFixed(2)} ms\n`);
      results.push(time);
    }
    writeResults('scale', results);
  }
}

async function inItsOwnProcess(one: NamedCase): Promise<Named> {
  const child = fork(fileURLToPath(import.meta.url));
  child.send(one);
  const answer = once(child, 'message').then(([figures]) => figures as Named);
  const gone = once(child, 'exit').then(([code]) => {
    throw new Error(`${one.name}: the coordinator ended with code ${code}`);
  });
  const figures = await Promise.race([answer, gone]);
  gone.catch(() => undefined);
  return figures;
}

function lineOf({ name, siteCount, p, cpuMs, ratio, echoCpuMs, residentMostMiB, outcome }: Named): string {
  const times = Object.entries(cpuMs)
    .map(([kind, ms]) => `${kind} ${(ms ?? 0).toFixed(1)} ms`)
    .join(', ');
  const target = siteCount === 1000 && p === 1000;
  const missed = target && ratio !== null && ratio > RATIO_MOST ? `, MISSES ${RATIO_MOST}` : '';
  const echo =
    ratio === null ? '' : `; ${ratio.toFixed(1)} times an echo of ${echoCpuMs?.toFixed(1)} ms${missed}`;
  const large = residentMostMiB > RESIDENT_MOST_MIB ? `, MORE THAN ${RESIDENT_MOST_MIB}` : '';
  return `${name}: ${outcome}, ${times}${echo}; ${residentMostMiB.toFixed(0)} MiB${large}`;
}
