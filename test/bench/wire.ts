import { cpuMs, writeResults } from './results-file.js';
import { measureRound, roundsOf, type WireFigures } from './wire-frames.js';

/** `npm run bench:wire`: bytes of a round's frames over their payload, and what encoding and decoding them takes. */
const REPEATS = 7;
const SIZES = [
  [100, 1],
  [1000, 1],
  [1000, 30],
  [10_000, 1],
  [10_000, 10],
  [1_000_000, 1],
] as const;

const results = SIZES.flatMap(([p, problems]) =>
  roundsOf(p, problems).flatMap((round) => measureRound(round, REPEATS, cpuMs)),
);
for (const one of results) process.stdout.write(`${lineOf(one)}\n`);
writeResults('wire', results);

function lineOf(one: WireFigures): string {
  const { name, p, problems, direction, bytes, payloadBytes, ofAllowed, encodeOverCopy, decodeOverCopy } =
    one;
  const what = `${name} (${direction}), p = ${p}, ${problems === 1 ? 'one problem' : `${problems} problems`}`;
  const allowed = ofAllowed <= 1 ? '' : ', MORE THAN ALLOWED';
  return `${what.padEnd(72)}${bytes - payloadBytes} bytes over ${payloadBytes}${allowed}; encoding ${encodeOverCopy.toFixed(1)}, decoding ${decodeOverCopy.toFixed(1)} copies`;
}
