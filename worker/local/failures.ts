import { fail } from '../../protocol/failure.js';

export const notPositiveDefinite = (what: string) =>
  fail('not-positive-definite', `${what} is not positive definite to working precision.`, {
    remedy:
      'Raise the metric (its scale or the floor of its diagonal), add a ridge penalty, or leave out columns without spread.',
  });

export const notFinite = (what: string) =>
  fail('number-not-finite', `${what} is not finite at the point asked.`, {
    remedy:
      'Look for rows with extreme values in the used columns, the offset or the weights, and rescale or correct them.',
  });
