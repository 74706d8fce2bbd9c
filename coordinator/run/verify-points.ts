import { unpackSymmetric } from '../../numerics/packed.js';
import { leastSubgradient, penaltyValue } from '../../numerics/penalty.js';
import { dot, maxAbs, sumOf } from '../../numerics/vector.js';
import {
  estimatedCertificate,
  measuredCertificate,
  modelStep,
  relativeTo,
} from '../consensus/certificate.js';
import type { Certificate } from '../consensus/method.js';
import { definiteMetric, diagonalOf, flooredDiagonal } from '../consensus/metric.js';
import { required } from '../consensus/pooled.js';
import type { ConsensusProblem } from '../consensus/problem.js';
import type { PointAnswers } from './answer-book.js';

/** What the answers at one point say a fit is: its coefficients on solver columns, its objective, its certificate. */
export interface Candidate {
  readonly at: 'step' | 'point' | 'function';
  readonly ask: number;
  readonly extent: 'recomputed' | 'part';
  readonly z: Float64Array;
  readonly loss: number;
  readonly penalty: number;
  readonly certificate: Certificate;
}

interface Pooled {
  readonly value: number;
  readonly gradient: Float64Array;
}

/** f and ∇f: the answers summed in roster order. */
function pooledAt({ answers }: PointAnswers): Pooled {
  return {
    value: answers.reduce((sum, { value }) => sum + value, 0),
    gradient: sumOf(answers.map(({ gradient }) => required(gradient, 'gradient'))),
  };
}

const curvatureAt = ({ answers }: PointAnswers): Float64Array =>
  unpackSymmetric(sumOf(answers.map(({ curvature }) => required(curvature, 'curvature'))));

/**
 * By curvature measured at the point: the decrement there is the certificate; the coefficients are one model step
 * beyond, or, of a fit that did not end solved, the point itself.
 */
export function measuredCandidates(problem: ConsensusProblem, there: PointAnswers): Candidate[] {
  const { point, ask } = there;
  const { value, gradient } = pooledAt(there);
  const curvature = curvatureAt(there);
  const metric = definiteMetric(curvature, flooredDiagonal(diagonalOf(curvature, problem.p)));
  const step = modelStep(problem.penalty, metric, gradient, point);
  if (step === null) return [];
  const penalty = penaltyValue(problem.penalty, point);
  const certificate = measuredCertificate(problem, point, gradient, step.decrement, value + penalty);
  const base = { ask, extent: 'recomputed' as const, certificate };
  const beyond = { z: step.z, loss: value + step.lossChange, penalty: penaltyValue(problem.penalty, step.z) };
  return [
    { ...base, at: 'step', ...beyond },
    { ...base, at: 'point', z: point, loss: value, penalty },
  ];
}

/** Squared loss: the answers at any point are the function; its minimiser is the fit, and the step after it certifies. */
export function quadraticCandidates(problem: ConsensusProblem, there: PointAnswers): Candidate[] {
  const { penalty: g, p } = problem;
  const { point, ask } = there;
  const { value, gradient } = pooledAt(there);
  const curvature = curvatureAt(there);
  const metric = definiteMetric(curvature, flooredDiagonal(diagonalOf(curvature, p)));
  const step = modelStep(g, metric, gradient, point);
  if (step === null) return [];
  const slope = gradient.map((entry, i) => {
    let sum = entry;
    for (let j = 0; j < p; j++) sum += curvature[i * p + j] * (step.z[j] - point[j]);
    return sum;
  });
  const next = modelStep(g, metric, slope, step.z);
  if (next === null) return [];
  const loss = value + 0.5 * (dot(gradient, step.direction) + dot(slope, step.direction));
  const penalty = penaltyValue(g, step.z);
  const certificate = measuredCertificate(problem, step.z, slope, next.decrement, loss + penalty);
  return [{ at: 'function', ask, extent: 'recomputed', z: step.z, loss, penalty, certificate }];
}

/**
 * Where only gradients were given at the coefficients: the estimate by the diagonal curvature, which is the whole of it
 * or, where models or sketches learned in other rounds say that the gap is larger, a part; then the recorded gap is
 * taken over, and only what does not depend on it is compared. `start`: the answers where the run started.
 */
export function gradientCandidates(
  { penalty: g, start }: ConsensusProblem,
  there: PointAnswers,
  startAnswers: PointAnswers | null,
  recorded: Certificate | null,
): Candidate[] {
  const { point: z, ask, answers } = there;
  const { value: loss, gradient } = pooledAt(there);
  const penalty = penaltyValue(g, z);
  const objective = loss + penalty;
  const startLoss = startAnswers?.answers.reduce((sum, { value }) => sum + value, 0);
  const startObjective = startLoss === undefined ? 1 : startLoss + penaltyValue(g, start);
  const base = { at: 'point' as const, ask, z, loss, penalty };
  const diagonals = answers.map(({ diagonal }) => diagonal).filter((own) => own !== null);
  const own =
    diagonals.length < answers.length
      ? null
      : estimatedCertificate(g, z, gradient, sumOf(diagonals), null, objective, startObjective);
  if (recorded === null || (own !== null && recorded.kind === 'estimate' && recorded.gap <= own.gap))
    return own === null ? [] : [{ ...base, extent: 'recomputed', certificate: own }];
  const relative =
    recorded.kind === 'estimate' ? relativeTo(objective, startObjective) : relativeTo(objective);
  const kkt = maxAbs(leastSubgradient(g, z, gradient));
  const certificate = { kind: recorded.kind, gap: recorded.gap, relativeGap: recorded.gap / relative, kkt };
  return [{ ...base, extent: 'part', certificate }];
}
