import type { Random } from '../../numerics/random.js';
import type { Latency } from './late-simulation.js';

/** A punctual answer takes one round time and up to a tenth more. Milliseconds. */
const ROUND_MS = 1000;
const JITTER = 0.1;
/** How much slower the slow site is. */
const SLOW_FACTOR = 10;
/** Standard deviation of the logarithm of a heavy-tailed time, whose median is one round time. */
const HEAVY_SIGMA = 1.2;
/** The absent site does not answer between these times. */
const ABSENT_MS = { from: 2 * ROUND_MS, to: 32 * ROUND_MS } as const;

export const SCENARIOS = ['slow, known', 'slow, unknown', 'heavy tails', 'absent', 'none'] as const;
export type Scenario = (typeof SCENARIOS)[number];

/** The times of one seed: `odd` is the site that is slow or absent. */
export function latencyOf(scenario: Scenario, odd: number, random: Random): Latency {
  const punctual = (): number => ROUND_MS * (1 + JITTER * random.uniform());
  switch (scenario) {
    case 'slow, known':
    case 'slow, unknown':
      return (site) => (site === odd ? SLOW_FACTOR : 1) * punctual();
    case 'heavy tails':
      return () => ROUND_MS * Math.exp(HEAVY_SIGMA * random.normal());
    case 'absent':
      return (site, nowMs) => {
        const took = punctual();
        const answeredMs = nowMs + took;
        const away = site === odd && nowMs < ABSENT_MS.to && answeredMs > ABSENT_MS.from;
        return away ? ABSENT_MS.to - nowMs + took : took;
      };
    case 'none':
      return punctual;
  }
}

/** How long the sites took for the survey: it shows a slow site where that is known beforehand. */
export const surveyAgesMs = (scenario: Scenario, odd: number, sites: number): number[] =>
  Array.from(
    { length: sites },
    (_, i) => (scenario === 'slow, known' && i === odd ? SLOW_FACTOR : 1) * ROUND_MS,
  );

/** The time of a synchronous run of so many rounds under the same latencies: every round waits for the last answer. */
export function synchronousTimeMs(rounds: number, sites: number, latency: Latency): number {
  let nowMs = 0;
  for (let round = 0; round < rounds; round++) {
    let longest = 0;
    for (let site = 0; site < sites; site++) longest = Math.max(longest, latency(site, nowMs));
    nowMs += longest;
  }
  return nowMs;
}
