import { chiSquaredUpper } from '../../numerics/distributions.js';

export interface SiteEstimate {
  readonly estimate: number;
  readonly standardError: number;
}

export interface HeterogeneityFigures {
  /** Inverse-variance (fixed-effect) average and its standard error. */
  readonly average: SiteEstimate;
  /** Cochran's Q (1954) about it, with k − 1 degrees of freedom. */
  readonly q: number;
  readonly degreesOfFreedom: number;
  readonly pValue: number;
  /** max(0, (Q − df) / Q), a share (Higgins and Thompson 2002). */
  readonly i2: number;
  /** Variance between sites by the method of moments (DerSimonian and Laird 1986). */
  readonly tau2: number;
}

/** How far estimates of one coefficient from several sites differ beyond their errors; at least two of them. */
export function heterogeneityOf(sites: readonly SiteEstimate[]): HeterogeneityFigures {
  const weights = sites.map(({ standardError }) => 1 / standardError ** 2);
  const total = weights.reduce((sum, weight) => sum + weight, 0);
  const squares = weights.reduce((sum, weight) => sum + weight * weight, 0);
  const estimate = sites.reduce((sum, site, i) => sum + weights[i] * site.estimate, 0) / total;
  const q = sites.reduce((sum, site, i) => sum + weights[i] * (site.estimate - estimate) ** 2, 0);
  const degreesOfFreedom = sites.length - 1;
  return {
    average: { estimate, standardError: Math.sqrt(1 / total) },
    q,
    degreesOfFreedom,
    pValue: chiSquaredUpper(q, degreesOfFreedom),
    i2: q > 0 ? Math.max(0, (q - degreesOfFreedom) / q) : 0,
    tau2: Math.max(0, (q - degreesOfFreedom) / (total - squares / total)),
  };
}
