import { noPenalty, type Penalty as SolverPenalty } from '../../numerics/penalty.js';
import type { Scaling } from '../../protocol/messages/run.js';
import { perTermMultipliers } from '../../protocol/specification/design-columns.js';
import type { DesignColumn, FitSpecification, Penalty } from '../../protocol/specification/types.js';
import type { Moments } from './moments.js';
import type { PooledSurvey } from './survey.js';

/** A standard deviation this small beside the mean is rounding: the column has no spread. */
const SPREAD_LEAST = 1e-12;

/** How design columns become solver columns, for the coordinator's own use. */
export interface Frame {
  readonly scaling: Scaling;
  /** Solver columns: the intercept, where there is one, and the columns kept. */
  readonly p: number;
  readonly intercept: boolean;
  readonly kept: readonly DesignColumn[];
  /** 1/N standard deviations of the kept columns. */
  readonly sd: Float64Array;
  readonly dropped: readonly string[];
}

/**
 * Stage two: the pooled scaling. With an intercept, columns are centred and scaled to unit standard deviation; without
 * one they are only scaled, to unit root mean square, since centring would bring an intercept in.
 */
export function scale(
  specification: FitSpecification,
  columns: readonly DesignColumn[],
  survey: PooledSurvey,
): Frame {
  const intercept = specification.intercept === 'shared';
  const size = (j: number): number => (intercept ? survey.sd[j] : Math.hypot(survey.mean[j], survey.sd[j]));
  const all = columns.map((_, j) => j);
  const isKept = (j: number): boolean => size(j) > (intercept ? SPREAD_LEAST * Math.abs(survey.mean[j]) : 0);
  const kept = all.filter(isKept);
  return {
    scaling: {
      rowCountTotal: survey.rowsTotal,
      kept,
      center: Float64Array.from(kept, (j) => (intercept ? survey.mean[j] : 0)),
      scale: Float64Array.from(kept, size),
    },
    p: kept.length + (intercept ? 1 : 0),
    intercept,
    kept: kept.map((j) => columns[j]),
    sd: Float64Array.from(kept, (j) => survey.sd[j]),
    dropped: all.filter((j) => !isKept(j)).map((j) => columns[j].name),
  };
}

/** How many fits the specification asks for: one for each λ. */
export const fitCount = ({ penalties }: FitSpecification): number =>
  Math.max(1, ...penalties.map(({ path, lambda }) => path?.count ?? lambda.length));

/** The λ of every penalty at fit number `fit`: of a path, the λ given for it. */
export const lambdasOf = (
  { penalties }: FitSpecification,
  fit: number,
  path: readonly number[] | null,
): number[] =>
  penalties.map((penalty) => {
    const list = penalty.path === null ? penalty.lambda : (path ?? []);
    return list[Math.min(fit, list.length - 1)];
  });

/** Factor by which a penalty weighs solver column j: θ_j = b_j · scale_j, and it weighs b_j · sd_j (scaled) or b_j. */
export const columnFactor = (
  { scaled }: Pick<Penalty, 'scaled'>,
  { scaling }: Frame,
  sd: Float64Array,
  j: number,
): number => (scaled ? sd[j] : 1) / scaling.scale[j];

/** Penalties with these λ on solver columns, `sd` the standard deviations over the rows that the problem is about. */
export function penaltyOf(
  penalties: readonly Penalty[],
  lambdas: readonly number[],
  { terms }: Pick<FitSpecification, 'terms'>,
  frame: Frame,
  sd: Float64Array,
): SolverPenalty {
  const out = noPenalty(frame.p);
  const first = frame.intercept ? 1 : 0;
  for (const [at, penalty] of penalties.entries()) {
    perTermMultipliers(penalty, terms, frame.kept).forEach((multiplier, j) => {
      const factor = columnFactor(penalty, frame, sd, j);
      out.l1[first + j] += lambdas[at] * penalty.l1 * multiplier * factor;
      out.l2[first + j] += lambdas[at] * (1 - penalty.l1) * multiplier * factor * factor;
    });
  }
  return out;
}

/** The intercept-only fit of some rows, on solver columns: where every method starts. */
export function startOn(
  { loss }: Pick<FitSpecification, 'loss'>,
  frame: Frame,
  { weightSum, weightedSum, exposureSum }: Moments['response'],
): Float64Array {
  const start = new Float64Array(frame.p);
  if (!frame.intercept) return start;
  const mean = weightedSum / weightSum;
  start[0] = {
    squared: mean,
    huber: mean,
    logistic: Math.log(mean / (1 - mean)),
    poisson: Math.log(weightedSum / exposureSum),
  }[loss.kind];
  return start;
}

/** Coefficients on the original scale from solver coefficients θ. */
export function originalScale(
  frame: Frame,
  theta: Float64Array,
): { readonly intercept: number | null; readonly coefficients: Record<string, number> } {
  const first = frame.intercept ? 1 : 0;
  const values = frame.kept.map((_, j) => theta[first + j] / frame.scaling.scale[j]);
  const shift = values.reduce((sum, value, j) => sum + value * frame.scaling.center[j], 0);
  return {
    intercept: frame.intercept ? theta[0] - shift : null,
    coefficients: Object.fromEntries(frame.kept.map((column, j) => [column.name, values[j]])),
  };
}
