import { unpackSymmetric } from '../../numerics/packed.js';
import { sumOf } from '../../numerics/vector.js';
import type { MethodAsk, Progress, SiteAnswers, SiteEvaluation, SketchAsk } from './method.js';
import { flooredDiagonal, plusDiagonal } from './metric.js';

/** The sites' answers at one point, summed in roster order: f, ∇f and what curvature was asked. */
export interface PooledPoint {
  readonly value: number;
  readonly gradient: Float64Array | null;
  readonly diagonal: Float64Array | null;
  /** Row-major p × p. */
  readonly curvature: Float64Array | null;
}

export interface PooledEvaluation {
  readonly points: readonly PooledPoint[];
  /** Σ H_i(x_i) (row-major) and Σ H_i x_i − ∇φ_i(x_i) at the sites' own fits. */
  readonly ownFit: { readonly curvature: Float64Array; readonly linear: Float64Array } | null;
  /** Σ H_i(point) S, in the order of the directions asked. */
  readonly sketch: Float64Array | null;
  /** The answers themselves, in roster order. */
  readonly sites: readonly SiteEvaluation[];
}

/** Asks all sites for values and derivatives and pools their answers. */
export function* evaluate(
  points: Extract<MethodAsk, { kind: 'evaluate' }>['points'],
  ownFit: { readonly at: number; readonly hold: number } | null,
  progress: Progress,
  sketch: SketchAsk | null = null,
): Generator<MethodAsk, PooledEvaluation, SiteAnswers> {
  const answers = yield { kind: 'evaluate', points, ownFit, sketch, progress };
  if (answers.kind !== 'evaluate') throw new TypeError(`an evaluate ask was answered with ${answers.kind}`);
  return pool(answers.sites);
}

function pool(sites: readonly SiteEvaluation[]): PooledEvaluation {
  const points = sites[0].points.map((_, k) => {
    const at = sites.map((site) => site.points[k]);
    return {
      value: at.reduce((sum, point) => sum + point.value, 0),
      gradient: sumPresent(at.map((point) => point.gradient)),
      diagonal: sumPresent(at.map((point) => point.diagonal)),
      curvature: unpackPresent(sumPresent(at.map((point) => point.curvature))),
    };
  });
  const fits = sites.map((site) => site.ownFit);
  const curvature = unpackPresent(sumPresent(fits.map((fit) => fit?.curvature ?? null)));
  const linear = sumPresent(fits.map((fit) => fit?.linear ?? null));
  return {
    points,
    ownFit: curvature === null || linear === null ? null : { curvature, linear },
    sketch: sumPresent(sites.map((site) => site.sketch)),
    sites,
  };
}

/** Every site's gradient at the first point of the ask. */
export const siteGradients = ({ sites }: PooledEvaluation): Float64Array[] =>
  sites.map(({ points }) => required(points[0].gradient, 'gradient'));

/** Every site's curvature at the first point of the ask, row-major p × p. */
export const siteCurvatures = ({ sites }: PooledEvaluation): Float64Array[] =>
  sites.map(({ points }) => unpackSymmetric(required(points[0].curvature, 'curvature')));

/** Every site's diagonal curvature at the first point of the ask, floored, as a row-major p × p matrix. */
export const diagonalCurvatures = ({ sites }: PooledEvaluation): Float64Array[] =>
  sites.map(({ points }) => {
    const diagonal = flooredDiagonal(required(points[0].diagonal, 'diagonal'));
    return plusDiagonal(new Float64Array(diagonal.length ** 2), 1, diagonal);
  });

const unpackPresent = (packed: Float64Array | null): Float64Array | null =>
  packed === null ? null : unpackSymmetric(packed);

/** Sum in the order given, or null where any is missing. */
function sumPresent(vectors: readonly (Float64Array | null)[]): Float64Array | null {
  const present = vectors.filter((vector) => vector !== null);
  return present.length === vectors.length ? sumOf(present) : null;
}

/** What an answer must hold because it was asked; its absence is a defect of the panel, not of a site. */
export function required<T>(value: T | null, what: string): T {
  if (value === null) throw new TypeError(`the panel passed an answer without its ${what}`);
  return value;
}
