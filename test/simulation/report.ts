import type { SeedReport } from './seed.js';

export const replayCommand = (seed: number): string => `npm run simulate -- --seeds 1 --from ${seed}`;

/** A failed seed in full: what was run, what was done to it, what broke, and how to see it again. */
export function reportText({ seed, plan, injected, outcomes, violations, tookMs }: SeedReport): string {
  const { distance, policy, sharded, runningMost, workerMemoryNumbers, runs } = plan;
  return [
    `seed ${seed}: ${distance} network, ${policy} policy${sharded ? ', one site in two shards' : ''}, ${runningMost} at once, workers remember ${workerMemoryNumbers} numbers, ${Math.round(tookMs)} ms`,
    ...runs.map(
      ({ model, sites, submitAtMs }, index) =>
        `  r${index + 1} ${model} over ${sites.join(', ')}, submitted at ${Math.round(submitAtMs)} ms: ${outcomes[index] ?? 'not judged'}`,
    ),
    ...injected.map(
      ({ atMs, kind, about }) => `  ${String(Math.round(atMs)).padStart(8)} ms  ${kind}: ${about}`,
    ),
    ...violations.map((violation) => `  VIOLATED ${violation}`),
    `  again: ${replayCommand(seed)}`,
  ].join('\n');
}
