import type { LossForm, LossKind } from '../../protocol/specification/types.js';
import { huber } from './huber.js';
import { logistic } from './logistic.js';
import type { Loss } from './loss.js';
import { poisson } from './poisson.js';
import { squared } from './squared.js';

const LOSSES_WITHOUT_THRESHOLD = { squared, logistic, poisson } as const;

/** The loss that a specification asks for. */
export const lossOf = (form: LossForm): Loss =>
  form.kind === 'huber' ? huber(form.threshold) : LOSSES_WITHOUT_THRESHOLD[form.kind];

/** The mean response at a linear predictor. */
export const lossMean = (kind: LossKind): ((eta: number) => number) =>
  kind === 'huber' ? (eta) => eta : LOSSES_WITHOUT_THRESHOLD[kind].mean;
