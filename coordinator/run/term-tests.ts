import { chiSquaredUpper, fisherUpper } from '../../numerics/distributions.js';
import { benjaminiHochberg, holm } from '../inference/tests.js';
import type { Description } from './description.js';
import type { Basis } from './infer.js';
import type { Grounds } from './problems.js';
import { refitAll, twiceRise } from './refits.js';
import type { TermTest } from './result-parts.js';
import { isStop, type Rounds } from './rounds.js';
import type { Batch, RunAsk } from './run.js';
import type { Stop } from './survey.js';

/**
 * A likelihood-ratio test of every term that no product holds (Nelder 1977: a term is not dropped below its product):
 * the fit again without it. With an estimated dispersion, its F form.
 */
export function* termTests(
  grounds: Grounds,
  rounds: Rounds,
  description: Description,
  { degreesOfFreedom, dispersion }: Basis,
): Generator<RunAsk, TermTest[] | Stop, Batch> {
  const { specification, frame, roster } = grounds;
  const first = frame.intercept ? 1 : 0;
  const inProducts = new Set(
    specification.terms.flatMap((term) =>
      term.kind === 'product' ? term.factors.map(({ name }) => name) : [],
    ),
  );
  const tested = specification.terms.flatMap((term, at) => {
    const columns = frame.kept.flatMap((column, j) => (column.term === at ? [first + j] : []));
    return columns.length > 0 && !inProducts.has(term.name) ? [{ term: term.name, columns }] : [];
  });
  const ends = yield* refitAll(
    grounds,
    rounds,
    description,
    tested.map(({ columns }) => ({
      held: columns.map((column) => ({ column, value: 0 })),
      members: [...roster.keys()],
    })),
  );
  if (isStop(ends)) return ends;
  const tests = tested.map(({ term, columns }, k) => {
    const rise = Math.max(0, twiceRise(grounds, description, ends[k]));
    const count = columns.length;
    const statistic = degreesOfFreedom === null ? rise : rise / count / dispersion.value;
    const pValue =
      degreesOfFreedom === null
        ? chiSquaredUpper(statistic, count)
        : fisherUpper(statistic, count, degreesOfFreedom);
    return {
      term,
      coefficients: columns.map((column) => description.columns.names[column]),
      statistic,
      degreesOfFreedom: count,
      pValue,
    };
  });
  const pValues = tests.map(({ pValue }) => pValue);
  const byHolm = holm(pValues);
  const byRate = benjaminiHochberg(pValues);
  return tests.map((test, k) => ({ ...test, pHolm: byHolm[k], pBenjaminiHochberg: byRate[k] }));
}
