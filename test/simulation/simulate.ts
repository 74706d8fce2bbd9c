import { parseArgs } from 'node:util';
import { reportText } from './report.js';
import { playSeed } from './seed.js';

/** `simulate --seeds N --from FIRST`: plays N seeds; exit code 1 where one of them breaks an invariant. */
const { values } = parseArgs({
  options: {
    seeds: { type: 'string', default: '100' },
    from: { type: 'string', default: '1' },
    verbose: { type: 'boolean', default: false },
  },
});
const count = wholeNumber('seeds', values.seeds);
const from = wholeNumber('from', values.from);

const faults = new Map<string, number>();
const outcomes = new Map<string, number>();
const notices = new Map<string, number>();
const failed: number[] = [];
let virtualMs = 0;
const terminal = process.stdout.isTTY;
/** In a terminal the line of progress stands where the text goes. */
const tell = (text: string): boolean => process.stdout.write(`${terminal ? '\r' : ''}${text}\n`);
for (let seed = from; seed < from + count; seed++) {
  const report = await playSeed(seed);
  virtualMs += report.tookMs;
  for (const { kind } of report.injected) add(faults, kind);
  for (const outcome of report.outcomes) add(outcomes, outcome);
  for (const [code, times] of report.notices) add(notices, code, times);
  if (report.violations.length > 0) failed.push(seed);
  if (report.violations.length > 0 || values.verbose) tell(reportText(report));
  const done = seed - from + 1;
  if (terminal || done % 100 === 0) {
    const progress = `${done} of ${count} seeds, ${failed.length} failed`;
    process.stdout.write(terminal ? `\r${progress}` : `${progress}\n`);
  }
}
const lines = (counts: ReadonlyMap<string, number>): string =>
  [...counts]
    .sort(([a], [b]) => (a < b ? -1 : 1))
    .map(([name, times]) => `  ${String(times).padStart(7)}  ${name}\n`)
    .join('');
tell(
  `${count} seeds from ${from}, ${(virtualMs / 3_600_000).toFixed(1)} hours of virtual time\n` +
    `faults injected\n${lines(faults)}noted by the coordinator\n${lines(notices)}outcomes\n${lines(outcomes)}` +
    (failed.length === 0 ? 'every invariant held' : `invariants violated by seeds ${failed.join(', ')}`),
);
process.exitCode = failed.length === 0 ? 0 : 1;

function add(counts: Map<string, number>, name: string, times = 1): void {
  counts.set(name, (counts.get(name) ?? 0) + times);
}

function wholeNumber(name: string, text: string): number {
  const value = Number(text);
  if (Number.isSafeInteger(value) && value >= 1) return value;
  process.stderr.write(`--${name} takes a whole number of 1 or more, not "${text}".\n`);
  process.exit(2);
}
