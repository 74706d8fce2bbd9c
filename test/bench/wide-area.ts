import { NO_CURVATURE, WIDE_FIT, WideArea } from '../support/wide-area.js';
import { writeResults } from './results-file.js';

const ROUND_TRIPS_MS = [0, 100, 300];
const REPEATS = 3;

/** What the sites let leave: the default, and no curvature at all. */
const POLICIES: Readonly<Record<string, readonly string[]>> = { default: [], 'no curvature': NO_CURVATURE };

interface Timed {
  readonly policy: string;
  readonly rung: string;
  readonly roundTripMs: number;
  readonly rounds: number;
  /** From the submission's acceptance to its outcome, set-up and survey included. */
  readonly seconds: number;
  /** Median over the rounds. */
  readonly roundSeconds: number;
  readonly sameBytes: boolean;
}

const median = (values: readonly number[]): number =>
  values.toSorted((a, b) => a - b)[Math.floor(values.length / 2)];

async function timed(wide: WideArea, policy: string, roundTripMs: number, bytes: string | null) {
  wide.setLines({ oneWayMs: roundTripMs / 2 });
  const following = wide.stage.submit(WIDE_FIT);
  const { code, event, result } = await wide.outcomeOf(following);
  if (code !== 0) throw new Error(`a fit at ${roundTripMs} ms ended as ${event.outcome}`);
  const { at } = await following.event('accepted');
  const rounds = following.events().filter((one) => one.event === 'round');
  const row: Timed = {
    policy,
    rung: rounds[0].rung,
    roundTripMs,
    rounds: rounds.length,
    seconds: (Date.parse(event.at) - Date.parse(at)) / 1000,
    roundSeconds: median(rounds.map(({ tookMs }) => tookMs)) / 1000,
    sameBytes: bytes === null || bytes === result,
  };
  return { row, result };
}

async function measure(wide: WideArea, policy: string): Promise<Timed[]> {
  // the first run reads the tables
  const first = await timed(wide, policy, 0, null);
  const results: Timed[] = [];
  for (const roundTripMs of ROUND_TRIPS_MS) {
    const rows: Timed[] = [];
    for (let repeat = 0; repeat < REPEATS; repeat++)
      rows.push((await timed(wide, policy, roundTripMs, first.result)).row);
    const seconds = median(rows.map((row) => row.seconds));
    const roundSeconds = median(rows.map((row) => row.roundSeconds));
    const sameBytes = rows.every((row) => row.sameBytes);
    results.push({ ...rows[0], seconds, roundSeconds, sameBytes });
    const { rung, rounds } = rows[0];
    console.log(
      `${policy} (${rung}), round trip ${roundTripMs} ms: ${rounds} rounds, ${seconds.toFixed(2)} s a fit, ` +
        `${roundSeconds.toFixed(3)} s a round, ${sameBytes ? 'same bytes' : 'OTHER BYTES'}`,
    );
  }
  return results;
}

/** `npm run bench:wide-area`: four workers in processes of their own behind lines of 0, 100 and 300 ms a round trip. */
async function main(): Promise<void> {
  const results: Timed[] = [];
  for (const [policy, lines] of Object.entries(POLICIES)) {
    const wide = await WideArea.open('bench-wide-area', lines);
    try {
      results.push(...(await measure(wide, policy)));
    } finally {
      await wide.close();
    }
  }
  writeResults('wide-area', results, { repeats: REPEATS });
  if (results.some(({ sameBytes }) => !sameBytes)) process.exitCode = 1;
}

await main();
