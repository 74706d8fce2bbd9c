import type { Random } from '../../numerics/random.js';
import type { Answer } from '../../protocol/messages/round.js';

/** What a broken or dishonest worker makes of an answer. None of these may count. */
export const LIES = [
  'not finite',
  'too long',
  'older ask',
  'later ask',
  'other run',
  'second thoughts',
  'silence',
] as const;
export type Lie = (typeof LIES)[number];

/** The messages that go out instead of the answer, in order. */
export function told(lie: Lie, answer: Answer, random: Random): Answer[] {
  switch (lie) {
    case 'not finite':
      return [withVector(answer, random, (vector) => vector.fill(Number.NaN, 0, 1))];
    case 'too long':
      return [withVector(answer, random, (vector) => Float64Array.from([...vector, 1]))];
    case 'older ask':
      return answer.ask > 1 ? [{ ...answer, ask: answer.ask - 1 }, answer] : [answer];
    case 'later ask':
      // far later: a wrong answer to the very next ask, there as soon as it is asked, is one that nobody can tell
      return [{ ...answer, ask: answer.ask + 1000 }, answer];
    case 'other run':
      return [{ ...answer, run: 'no-such-run' }, answer];
    case 'second thoughts':
      return [answer, withVector(answer, random, (vector) => vector.map((value) => value + 1))];
    case 'silence':
      return [];
  }
}

/** A copy of the answer with one of its vectors, any of them, replaced. */
function withVector(answer: Answer, random: Random, change: (vector: Float64Array) => Float64Array): Answer {
  const copy = structuredClone(answer);
  const places = placesOf(copy.work).filter(({ vector }) => vector.length > 0);
  if (places.length > 0) {
    const { holder, key, vector } = places[random.integer(places.length)];
    holder[key] = change(vector);
  }
  return copy;
}

type Holder = Record<string, unknown>;

function placesOf(value: unknown): { holder: Holder; key: string; vector: Float64Array }[] {
  if (typeof value !== 'object' || value === null) return [];
  const holder = value as Holder;
  return Object.keys(holder).flatMap((key) => {
    const inner = holder[key];
    return inner instanceof Float64Array ? [{ holder, key, vector: inner }] : placesOf(inner);
  });
}
