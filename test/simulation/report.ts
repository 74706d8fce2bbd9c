import type { RunPlan } from './cluster.js';
import type { SeedReport } from './seed.js';

export const replayCommand = (seed: number): string => `npm run simulate -- --seeds 1 --from ${seed}`;

const runText = ({ model, sites, least, quorum, missing }: RunPlan): string =>
  `${model} over ${least === null ? sites.join(', ') : `at least ${least} sites`}, ${quorum === null ? '' : `quorum ${quorum.sites}, oldest ${quorum.oldest}, `}missing: ${missing}`;

/** A failed seed in full: what was run, what was done to it, what broke, and how to see it again. */
export function reportText({ seed, plan, injected, outcomes, violations, tookMs }: SeedReport): string {
  const { distance, policy, sharded, runningMost, workerMemoryNumbers, slowSite, joinsLate, runs } = plan;
  return [
    `seed ${seed}: ${distance} network, ${policy} policy${sharded ? ', one site in two shards' : ''}, ${runningMost} at once, workers remember ${workerMemoryNumbers} numbers${slowSite === null ? '' : `, ${slowSite} slow`}${joinsLate === null ? '' : `, ${joinsLate.site} from ${Math.round(joinsLate.afterMs)} ms on`}, ${Math.round(tookMs)} ms`,
    ...runs.map(
      (run, index) =>
        `  r${index + 1} ${runText(run)}, submitted at ${Math.round(run.submitAtMs)} ms: ${outcomes[index] ?? 'not judged'}`,
    ),
    ...injected.map(
      ({ atMs, kind, about }) => `  ${String(Math.round(atMs)).padStart(8)} ms  ${kind}: ${about}`,
    ),
    ...violations.map((violation) => `  VIOLATED ${violation}`),
    `  again: ${replayCommand(seed)}`,
  ].join('\n');
}
