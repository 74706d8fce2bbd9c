import { packSymmetric } from '../../numerics/packed.js';
import { penaltyValue } from '../../numerics/penalty.js';
import { plusScaled } from '../../numerics/vector.js';
import { measuredCertificate, modelStep, relativeTo } from './certificate.js';
import { type Flaw, flawFromTheStart, verdict } from './existence.js';
import type { Certificate, MethodAsk, Progress, SiteAnswers } from './method.js';
import { definiteMetric, diagonalOf, flooredDiagonal } from './metric.js';
import { evaluate, type PooledEvaluation, required } from './pooled.js';
import type { ConsensusProblem } from './problem.js';

/** Shorter steps tried by value alone beside each full step. */
const SHORTER = [0.3, 0.1] as const;
/** A step must bring the decrement down to this share, or the rest of the budget is kept for later. */
const CONTRACTION_MOST = 0.3;

/** Share of √tolerance that a relative gap must be under for the next Newton point to be expected to certify. */
const NEWTON_SHARE = 0.3;

/**
 * Where a second-order finish ended: the best point it has measured with every site's gradient there, or, once
 * certified, one model step beyond it.
 */
export interface Finish {
  readonly z: Float64Array;
  readonly loss: number;
  readonly certificate: Certificate | null;
  /** The certificate reaches the tolerance, and nothing is wrong with its point. */
  readonly stands: boolean;
  readonly curvature: Float64Array;
  /** Why there is no optimum to certify, if that was found: `rank-deficient` or `separable`, and the columns. */
  readonly flaw: Flaw | null;
  /** One model step beyond the point measured: where an estimate may hold though the certificate did not. */
  readonly beyond: Float64Array | null;
  /** The sites' answers at the point measured: its gradients and curvatures restart the iteration there. */
  readonly measured: PooledEvaluation;
  readonly matricesSpent: number;
}

interface Settings {
  /** D, the pooled diagonal curvature at z₀. */
  readonly startDiagonal: Float64Array;
  /** Matrices that may be spent. */
  readonly budget: number;
  /** No curvature has been seen before: aliased columns would show in the first. */
  readonly first: boolean;
}

/**
 * Spends curvature matrices at and after z: each round measures f, ∇f and H; where that does not certify, its own
 * z-step gives the next point. Stops when certified, when `budget` is spent, or when the steps do not contract.
 */
export function* secondOrderFinish(
  problem: ConsensusProblem,
  start: Float64Array,
  { startDiagonal, budget, first }: Settings,
  progress: (purpose: string, gap: number | null, objective: number | null) => Progress,
): Generator<MethodAsk, { readonly finish: Finish; readonly rounds: number }, SiteAnswers> {
  const g = problem.penalty;
  let z = start;
  let direction: Float64Array | null = null;
  let best: Finish | null = null;
  let bestObjective = Number.POSITIVE_INFINITY;
  let decrement = Number.POSITIVE_INFINITY;
  let gap: number | null = null;
  let rounds = 0;
  for (let spent = 1; ; spent++) {
    const shorter =
      direction === null ? [] : SHORTER.map((t) => plusScaled(z, t - 1, direction as Float64Array));
    const answers: PooledEvaluation = yield* evaluateAt(
      z,
      shorter,
      progress('curvature at z', gap, finiteOrNull(bestObjective)),
    );
    rounds++;
    const at = answers.points[0];
    const objective = at.value + penaltyValue(g, z);
    const curvature = required(at.curvature, 'curvature');
    const gradient = required(at.gradient, 'gradient');
    if (objective > bestObjective && best !== null) {
      const values = shorter.map((point, k) => answers.points[k + 1].value + penaltyValue(g, point));
      const least = values[0] <= values[1] ? 0 : 1;
      if (spent >= budget || !(values[least] < bestObjective))
        return { finish: { ...best, matricesSpent: spent }, rounds };
      z = shorter[least];
      direction = null;
      continue;
    }
    const step = modelStep(
      g,
      definiteMetric(curvature, flooredDiagonal(diagonalOf(curvature, problem.p))),
      gradient,
      z,
    );
    const certificate =
      step === null ? null : measuredCertificate(problem, z, gradient, step.decrement, objective);
    const found =
      step === null || certificate === null
        ? 'goes on'
        : verdict(problem, certificate, curvature, step, startDiagonal);
    const aliased = first && spent === 1 ? flawFromTheStart(problem, curvature) : null;
    const flaw = aliased ?? (typeof found === 'string' ? null : found);
    best = {
      z,
      loss: at.value,
      certificate,
      stands: flaw === null && found === 'stands',
      curvature: packSymmetric(curvature, problem.p),
      flaw,
      beyond: step?.z ?? null,
      measured: answers,
      matricesSpent: spent,
    };
    bestObjective = objective;
    gap = step === null ? null : step.decrement / relativeTo(objective);
    const contracting = step !== null && step.decrement <= CONTRACTION_MOST * decrement;
    // Newton steps square the relative gap: the last matrix waits until its point may be expected to certify
    const early = spent === budget - 1 && gap !== null && gap > NEWTON_SHARE * Math.sqrt(problem.tolerance);
    if (best.stands && step !== null)
      return { finish: { ...best, z: step.z, loss: at.value + step.lossChange }, rounds };
    if (flaw !== null || step === null || spent >= budget || early || !contracting)
      return { finish: best, rounds };
    decrement = step.decrement;
    z = step.z;
    direction = step.direction;
  }
}

function evaluateAt(z: Float64Array, shorter: readonly Float64Array[], progress: Progress) {
  return evaluate(
    [{ point: z, want: 'curvature' }, ...shorter.map((point) => ({ point, want: 'value' as const }))],
    null,
    progress,
  );
}

const finiteOrNull = (value: number): number | null => (Number.isFinite(value) ? value : null);
