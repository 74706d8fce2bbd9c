import { decodeToCoordinator, decodeToWorker, encodeMessage } from '../../protocol/codec.js';
import type { Answer, Ask, Work, WorkAnswer } from '../../protocol/messages/round.js';
import { packedLength } from '../../protocol/messages/vector.js';

/** Bytes that a round may have beyond its payload: a share of it, and so many for each problem. */
export const SHARE_MOST = 0.01;
export const BYTES_MOST = 300;

export interface WireFigures {
  readonly name: string;
  readonly p: number;
  readonly problems: number;
  readonly direction: 'ask' | 'answer';
  readonly bytes: number;
  /** 8 bytes for each number of a vector. */
  readonly payloadBytes: number;
  /** Bytes over the payload. */
  readonly ratio: number;
  /** Bytes over what is allowed: 8 n (1 + 1 %) + 300 for each problem of n numbers. */
  readonly ofAllowed: number;
  /** Time of encoding and of decoding (every check included), over copying the frame's bytes once. */
  readonly encodeOverCopy: number;
  readonly decodeOverCopy: number;
  readonly encodeMs: number;
  readonly decodeMs: number;
}

interface Round {
  readonly name: string;
  readonly p: number;
  readonly problems: number;
  readonly work: readonly Work[];
  readonly answer: readonly WorkAnswer[];
}

/** The frames of rounds with p columns: proximal points, of several problems too, gradients and curvature. */
export function roundsOf(p: number, problems: number): Round[] {
  const each = Array.from({ length: problems }, (_, problem) => problem);
  const proximal = (name: string, full: boolean): Round => ({
    name: `proximal points${name}`,
    p,
    problems,
    work: [
      {
        work: 'proximal',
        problems: each.map((problem) => ({
          problem,
          part: null,
          center: vector(p, problem),
          scale: 0.125 / 3,
          diagonal: full ? vector(p, 1) : null,
          diagonalAsk: 2,
          start: full ? vector(p, 2) : null,
          startAsk: 41,
        })),
      },
    ],
    answer: [
      {
        work: 'proximal',
        problems: each.map((problem) => ({ problem, point: vector(p, problem), newtonSteps: 4 })),
      },
    ],
  });
  const evaluate = (want: 'gradient' | 'diagonal' | 'curvature', name: string): Round => ({
    name,
    p,
    problems,
    work: each.map((problem) => ({
      work: 'evaluate',
      problem,
      part: null,
      points: [{ point: vector(p, problem), want }],
      ownFit: null,
      sketch: null,
    })),
    answer: each.map((problem) => ({
      work: 'evaluate',
      problem,
      points: [
        {
          value: 1 / 3,
          gradient: vector(p, problem),
          diagonal: want === 'gradient' ? null : vector(p, 1),
          curvature: want === 'curvature' ? vector(packedLength(p), 1) : null,
        },
      ],
      ownFit: null,
      sketch: null,
    })),
  });
  return [
    proximal('', false),
    proximal(', the first of them', true),
    evaluate('gradient', 'gradients'),
    evaluate('diagonal', 'gradients and diagonals'),
    // matrices of more columns, or several, come near what a frame may hold
    ...(p <= 1000 && problems === 1 ? [evaluate('curvature', 'curvature')] : []),
  ];
}

const vector = (length: number, seed: number): Float64Array =>
  Float64Array.from({ length }, (_, j) => Math.sin(seed + 1.7 * j));

/** Both frames of a round; `now` in milliseconds, the quickest of `repeats`. */
export function measureRound(round: Round, repeats: number, now: () => number): WireFigures[] {
  const identity = { run: '20260301-093015-1f2e3d4c', ask: 42 };
  const ask: Ask = { kind: 'ask', ...identity, work: [...round.work] };
  const answer: Answer = { kind: 'answer', ...identity, work: [...round.answer] };
  return [
    measureFrame(round, 'ask', ask, decodeToWorker, repeats, now),
    measureFrame(round, 'answer', answer, decodeToCoordinator, repeats, now),
  ];
}

function measureFrame(
  { name, p, problems }: Round,
  direction: 'ask' | 'answer',
  message: Ask | Answer,
  decode: (bytes: Uint8Array) => { readonly ok: boolean },
  repeats: number,
  now: () => number,
): WireFigures {
  const frame = encodeMessage(message);
  if (!decode(frame).ok) throw new Error(`${name}: the ${direction} cannot be decoded`);
  const payloadBytes = 8 * numbersIn(message);
  const tasks = [(): unknown => frame.slice(), () => encodeMessage(message), () => decode(frame)];
  const times = tasks.map(() => Number.POSITIVE_INFINITY);
  // calls of some 2 MB at least, so that the clock tells them apart
  const calls = Math.ceil(2e6 / frame.length);
  for (let repeat = 0; repeat < repeats; repeat++)
    for (const [at, task] of tasks.entries()) {
      const from = now();
      for (let call = 0; call < calls; call++) task();
      times[at] = Math.min(times[at], (now() - from) / calls);
    }
  const [copyMs, encodeMs, decodeMs] = times;
  return {
    name,
    p,
    problems,
    direction,
    bytes: frame.length,
    payloadBytes,
    ratio: frame.length / payloadBytes,
    ofAllowed: frame.length / (payloadBytes * (1 + SHARE_MOST) + BYTES_MOST * problems),
    encodeOverCopy: encodeMs / copyMs,
    decodeOverCopy: decodeMs / copyMs,
    encodeMs,
    decodeMs,
  };
}

/** Numbers in all vectors of a message. */
function numbersIn(value: unknown): number {
  if (value instanceof Float64Array) return value.length;
  if (typeof value !== 'object' || value === null) return 0;
  return Object.values(value).reduce((sum: number, part) => sum + numbersIn(part), 0);
}
