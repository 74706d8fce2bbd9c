import { type Failure, type FailureCode, fail } from './failure.js';

/** Pieces of the checks of asks and answers: each gives the failure, or null. */

export const wrong = (code: FailureCode, field: string, message: string): Failure =>
  fail(code, message, { where: { field } }).failure;

export function lengthIs(vector: Float64Array, length: number, field: string): Failure | null {
  if (vector.length === length) return null;
  return wrong('dimension-wrong', field, `The vector has ${vector.length} numbers; ${length} are expected.`);
}

/** The first failure of a list of checks, none of which is run after it. */
export function firstOf<T>(
  items: readonly T[],
  check: (item: T, index: number) => Failure | null,
): Failure | null {
  for (let i = 0; i < items.length; i++) {
    const failure = check(items[i], i);
    if (failure !== null) return failure;
  }
  return null;
}

/** The problem of an answer is the one asked. */
export function problemIs(given: number, asked: number, field: string): Failure | null {
  if (given === asked) return null;
  return wrong('answer-unasked', field, `Problem ${given}; ${asked} was asked.`);
}

/** A vector of this length where it was asked for, else null. */
export function wantedOrNull(
  vector: Float64Array | null,
  wanted: boolean,
  length: number,
  field: string,
): Failure | null {
  if ((vector !== null) !== wanted) {
    return wrong('answer-unasked', field, wanted ? 'Asked for, but null.' : 'Not asked for, but there.');
  }
  return vector === null ? null : lengthIs(vector, length, field);
}
