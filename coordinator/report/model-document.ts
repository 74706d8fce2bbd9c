import { INVERSE_LINKS, type ModelDocument } from '../../protocol/model/model-document.js';
import { designColumns } from '../../protocol/specification/design-columns.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { FitDocument, ResultDocument } from '../run/result.js';
import type { InferenceDocument } from '../run/result-parts.js';

/** What the run says of the uncertainty of a fit's coefficients; null of a fit that it does not stand by. */
export const inferenceOf = (
  { chosen, inference }: Pick<ResultDocument, 'chosen' | 'inference'>,
  fit: number,
): InferenceDocument | null => (fit === chosen ? inference : null);

/** The fit to hand over: the one chosen, or the only one; null where several stand side by side or none has coefficients. */
export const fitToHandOver = ({ chosen, fits }: Pick<ResultDocument, 'chosen' | 'fits'>): number | null =>
  chosen !== null && isUsable(fits[chosen]) ? chosen : null;

/** Whether a fit ended with coefficients, all of them finite. */
export const isUsable = (fit: FitDocument | undefined): boolean =>
  fit !== undefined &&
  [fit.intercept ?? 0, ...Object.values(fit.coefficients)].every(Number.isFinite) &&
  (fit.intercept !== null || Object.keys(fit.coefficients).length > 0);

/**
 * `model.json` of one fit of a run.
 *
 * @param fit index into `result.fits` of a fit that `isUsable`
 */
export function modelDocument(
  specification: FitSpecification,
  result: ResultDocument,
  fit: number,
): ModelDocument {
  const { lambda, outcome, certificate, intercept, coefficients, dropped } = result.fits[fit];
  const covariance = covarianceOf(inferenceOf(result, fit));
  const without = new Set(result.without.map(({ site }) => site));
  return {
    commonfitModel: 1,
    title: specification.title,
    specification: result.specification,
    software: result.software,
    sites: result.sites.map(({ site }) => site).filter((site) => !without.has(site)),
    rowsTotal: result.rowsTotal,
    fit: {
      number: fit + 1,
      of: result.fits.length,
      lambda,
      outcome,
      certificate:
        certificate === null ? null : { kind: certificate.kind, relativeGap: certificate.relativeGap },
    },
    loss: specification.loss.kind,
    inverseLink: INVERSE_LINKS[specification.loss.kind],
    response: specification.response,
    offset: specification.offset,
    intercept,
    terms: specification.terms,
    coefficients: designColumns(specification).flatMap(({ name }) =>
      Object.hasOwn(coefficients, name) ? [{ name, value: coefficients[name] }] : [],
    ),
    dropped,
    ...(covariance === null ? {} : { covariance }),
  };
}

function covarianceOf(inference: InferenceDocument | null): NonNullable<ModelDocument['covariance']> | null {
  const used = inference?.covariances.find(({ kind }) => kind === inference.used);
  return used === undefined ? null : { kind: used.kind, order: used.order, matrix: used.covariance };
}
