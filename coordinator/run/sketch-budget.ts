import { numbersOfAnswer } from '../../protocol/numbers.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { ConsensusProblem } from '../consensus/problem.js';
import { type Member, memberName } from './run.js';
import { fitCount } from './scale.js';
import type { PooledSurvey } from './survey.js';

/** Directions asked in a round where policies leave it open. */
const DIRECTIONS = 8;
/** With more columns than this for every direction the rung needs as many rounds as the proximal one. */
const COLUMNS_A_DIRECTION_MOST = 10;
/** Rounds over which the columns of the curvature limit are spread, and for which numbers are set aside. */
const ROUNDS_EXPECTED = 10;
const ROUNDS_RESERVED = 60;
/** Above it the coordinator's p × p models take longer than the rounds they save. */
const COLUMNS_MOST = 1000;

/**
 * Directions that a fit may ask of every site, or why it should ask for none: a policy does not speak of them, or leaves
 * too few for so many columns.
 */
export type SketchBudget =
  | { readonly kind: 'open'; readonly budget: ConsensusProblem['sketch'] }
  | { readonly kind: 'closed' | 'meagre'; readonly reason: string };

export const NO_SKETCH: ConsensusProblem['sketch'] = { columns: 0, columnsMost: 0 };

/** Directions a round from what every site lets leave: kinds, curvature (p columns count as a matrix), numbers. */
export function sketchBudget(
  specification: FitSpecification,
  survey: PooledSurvey,
  roster: readonly Member[],
  p: number,
): SketchBudget {
  const silent = survey.answers.findIndex(
    ({ allowance: { leave } }) => !leave.includes('sketches') || !leave.includes('gradients'),
  );
  if (silent >= 0)
    return {
      kind: 'closed',
      reason: `${memberName(roster[silent])} does not let sketches and gradients leave`,
    };
  const wanted = Math.min(p, Math.max(DIRECTIONS, Math.ceil(p / COLUMNS_A_DIRECTION_MOST)));
  const allowed = survey.answers.map((answer) => {
    const { curvatureMost, numbersMost } = answer.allowance;
    const numbers = (numbersMost ?? Number.POSITIVE_INFINITY) - numbersOfAnswer(answer);
    return Math.min(byCurvature(curvatureMost, p), byNumbers(numbers / fitCount(specification), p));
  });
  const columns = Math.min(wanted, ...allowed);
  if (columns * COLUMNS_A_DIRECTION_MOST < p) {
    const strictest = memberName(roster[allowed.indexOf(Math.min(...allowed))]);
    const what = columns < 1 ? 'no direction' : columns === 1 ? 'one direction' : `${columns} directions`;
    return meagre(`${p} columns need more than the ${what} of curvature a round that ${strictest} allows`);
  }
  if (p > COLUMNS_MOST) return meagre(`${p} columns are too many for a model of their curvature`);
  const matrices = survey.answers.map(({ allowance }) => allowance.curvatureMost ?? Number.POSITIVE_INFINITY);
  return { kind: 'open', budget: { columns, columnsMost: Math.min(...matrices) * p } };
}

const meagre = (reason: string): SketchBudget => ({ kind: 'meagre', reason });

function byCurvature(matrices: number | null, p: number): number {
  if (matrices === null) return Number.POSITIVE_INFINITY;
  return matrices === 0 ? 0 : Math.max(1, Math.floor((matrices * p) / ROUNDS_EXPECTED));
}

/** A round sends 7 values, 3 gradients, the diagonal and the products: (m + 4) p + 7 numbers. */
const byNumbers = (numbers: number, p: number): number =>
  Math.max(0, Math.floor((numbers / ROUNDS_RESERVED - 4 * p - 7) / p));
