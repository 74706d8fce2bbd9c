import { unpackSymmetric } from '../../numerics/packed.js';
import { sumOf } from '../../numerics/vector.js';
import type { MarginsAnswer } from '../../protocol/messages/margins.js';
import type { QualityAnswer } from '../../protocol/messages/quality.js';
import type { ScoresAnswer } from '../../protocol/messages/scores.js';
import type { SiteFitAnswer } from '../../protocol/messages/site-fit.js';
import type { MethodEnd, SiteAnswers } from '../consensus/method.js';
import type { Columns } from '../inference/original-scale.js';
import type { Frame } from './scale.js';

/** φ_i at the fit, of one member: value, gradient and curvature (row-major p × p). */
export interface MemberQuadratic {
  readonly value: number;
  readonly gradient: Float64Array;
  readonly curvature: Float64Array;
}

/** What the members answered about the fit that the run stands by, in roster order; null: not asked, or not let leave. */
export interface Description {
  /** Index of the fit. */
  readonly fit: number;
  readonly end: MethodEnd;
  /** The λ of each penalty. */
  readonly lambdas: readonly number[];
  readonly columns: Columns;
  /** Every member's quadratic at the fit itself. */
  readonly members: readonly MemberQuadratic[] | null;
  /** Pooled curvature at the fit (row-major p × p), or at the point certified, one step before it. */
  readonly curvature: Float64Array | null;
  readonly scores: readonly ScoresAnswer[] | null;
  /** Null entries: that member's policy does not let its own fit leave. */
  readonly siteFits: readonly (SiteFitAnswer | null)[] | null;
  readonly margins: readonly MarginsAnswer[] | null;
  readonly quality: readonly QualityAnswer[] | null;
  /** The sites' answers to the first ask about all rows: on the pooled rung, their triangular factors. */
  readonly first: SiteAnswers | null;
  /** Mean loss of the intercept-only fit. */
  readonly nullLoss: number | null;
}

/** Names and scales of the solver columns. */
export const columnsOf = ({ intercept, kept, scaling }: Frame): Columns => ({
  names: [...(intercept ? ['(intercept)'] : []), ...kept.map(({ name }) => name)],
  intercept,
  center: scaling.center,
  scale: scaling.scale,
});

/** Σ of the members' curvatures, or what the method measured at the point certified. */
export const pooledCurvature = (
  members: readonly MemberQuadratic[] | null,
  end: MethodEnd,
): Float64Array | null => {
  if (members === null) return end.curvature === null ? null : unpackSymmetric(end.curvature);
  return sumOf(members.map(({ curvature }) => curvature));
};

/** Σ of the members' meats, row-major p × p; null where they were not all asked. */
export function pooledMeat(
  scores: readonly ScoresAnswer[] | null,
  which: 'meat' | 'clustered',
): Float64Array | null {
  const packed = (scores ?? []).map((own) => own[which]).filter((one) => one !== null);
  if (scores === null || packed.length === 0 || packed.length < scores.length) return null;
  return unpackSymmetric(sumOf(packed));
}
