import type { Certificate } from '../consensus/method.js';
import type { RunOutcome } from '../run/run.js';
import { roughly } from './phrases.js';

/** What each outcome means, as the head of a paragraph. */
export const OUTCOME_HEAD: Readonly<Record<RunOutcome, string>> = {
  solved: 'Solved.',
  'round-limit': 'Not solved: the rounds allowed were used up.',
  'time-limit': 'Not solved: the time allowed was used up.',
  stalled: 'Not solved: the rounds stopped making headway.',
  'site-missing': 'Not solved: a site was missing for longer than the patience allowed.',
  refused: 'Not solved: a site refused, as its custodian may.',
  infeasible: 'Not solved: no coefficients satisfy the constraints.',
  unbounded: 'Not solved: the data set no limit to the coefficients.',
  cancelled: 'Not solved: the run was cancelled.',
  broken: 'Not solved: something broke.',
};

/** What the certificate says of the fit the run stands by. */
export function certificateText(
  kind: Certificate['kind'] | string | null,
  relativeGap: number | null,
): string {
  if (kind === null || relativeGap === null)
    return 'No certificate: nothing shows how far this is from the optimum.';
  const gap = roughly(relativeGap);
  switch (kind) {
    case 'measured':
      return `Certificate, from the gradients and curvature of every site: the objective is at most ${gap} above the optimum (relative).`;
    case 'sketched':
      return `Certificate, from the gradients of every site and sketches of their curvature: the objective is at most about ${gap} above the optimum (relative).`;
    case 'duality-gap':
      return `Certificate, from the duality gap: the objective is at most ${gap} above the optimum (relative).`;
    default:
      return `Certificate, an estimate only, from the gradients and diagonal curvature of every site: the objective is about ${gap} above the optimum (relative).`;
  }
}
