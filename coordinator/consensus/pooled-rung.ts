import { packSymmetric } from '../../numerics/packed.js';
import { isFixed, isSmooth, type Penalty, penaltyValue } from '../../numerics/penalty.js';
import { mergeFactors, triangularFactor } from '../../numerics/triangular-factor.js';
import { maxOf } from '../../numerics/vector.js';
import { zStepFull } from '../../numerics/z-step.js';
import { measuredCertificate, modelStep } from './certificate.js';
import type { Certificate, Method, MethodEnd } from './method.js';
import { diagonalOf } from './metric.js';
import type { ConsensusProblem } from './problem.js';

/** Refinement steps: each takes the residual through the factor itself, which restores the digits the Gram lost. */
const REFINEMENTS = 3;
/** A diagonal entry of R this small, relative to its column, is rounding. */
const PIVOT_LEAST = 1e-13;
/** Share of the largest squared column length under which a column is rounding. */
const SPREAD_LEAST = 1e-20;

/**
 * The `pooled` rung, for squared loss: one round brings every site's triangular factor of √w·[X, y]; merged in roster
 * order (TSQR: Demmel, Grigori, Hoemmen, Langou 2012) they give f(z) = ½‖R z − q‖² + ½ρ² exactly, so the coordinator
 * solves the rest alone.
 */
export function* pooledRung(problem: ConsensusProblem): Method {
  const answers = yield {
    kind: 'factor',
    progress: {
      rung: 'pooled',
      purpose: 'triangular factors',
      primalResidual: null,
      dualResidual: null,
      relativeGap: null,
      gapMeasured: false,
      objective: null,
    },
  };
  if (answers.kind !== 'factor') throw new TypeError(`a factor ask was answered with ${answers.kind}`);
  return solvePooled(problem, mergeFactors(answers.factors, problem.p + 1));
}

/** Solves from the merged packed factor of [X, y], order p + 1. */
export function solvePooled(problem: ConsensusProblem, factor: Float64Array): MethodEnd {
  const { p, penalty: g } = problem;
  const model = new FactoredModel(factor, p);
  const gram = model.gram();
  const end = (z: Float64Array, outcome: MethodEnd['outcome'], certificate: Certificate | null) => ({
    outcome,
    reason: null,
    columnsAtFault: [] as number[],
    z,
    loss: model.value(z),
    penalty: penaltyValue(g, z),
    certificate,
    curvature: packSymmetric(gram, p),
    rounds: 1,
    rung: 'pooled' as const,
  });
  const aliased = model.aliased(g);
  if (aliased.length > 0)
    return { ...end(problem.start, 'refused', null), reason: 'rank-deficient', columnsAtFault: aliased };

  let z = problem.start;
  for (let k = 0; k < REFINEMENTS; k++) {
    const next = refine(problem, model, gram, z);
    if (next === null)
      return { ...end(z, 'stalled', null), reason: 'the pooled curvature could not be factored' };
    z = next;
  }
  const gradient = model.gradient(z);
  const step = modelStep(g, positive(gram, p), gradient, z);
  if (step === null)
    return { ...end(z, 'stalled', null), reason: 'the pooled curvature could not be factored' };
  const objective = model.value(z) + penaltyValue(g, z);
  const certificate = measuredCertificate(problem, z, gradient, step.decrement, objective);
  const solved = certificate.relativeGap <= problem.tolerance;
  return {
    ...end(z, solved ? 'solved' : 'stalled', certificate),
    reason: solved ? null : 'rounding keeps the gap above the tolerance',
  };
}

/** One consensus step on the exact model, written as a correction of z so that it refines. */
function refine(
  problem: ConsensusProblem,
  model: FactoredModel,
  gram: Float64Array,
  z: Float64Array,
): Float64Array | null {
  const { p, penalty: g } = problem;
  if (isSmooth(g) && g.l2.every((weight) => weight === 0)) return model.leastSquares(z);
  const metric = positive(gram, p);
  const gradient = model.gradient(z);
  const b = gradient.map((slope, i) => {
    let sum = -slope;
    for (let j = 0; j < p; j++) sum += metric[i * p + j] * z[j];
    return sum;
  });
  return zStepFull(g, metric, b, z);
}

/**
 * A ridge in the last digits: the refinement takes it out again, and rank-deficient penalised fits need it. A column
 * without spread has no slope either: any curvature leaves its coefficient where the penalty alone puts it.
 */
function positive(gram: Float64Array, p: number): Float64Array {
  const out = Float64Array.from(gram);
  const most = maxOf(diagonalOf(gram, p));
  for (let j = 0; j < p; j++) {
    const own = out[j * p + j];
    out[j * p + j] = own > SPREAD_LEAST * most ? own * (1 + 1e-14 * p) : most;
  }
  return out;
}

/** f(z) = ½‖R z − q‖² + ½ρ² from the packed upper factor of [X, y], order p + 1. */
export class FactoredModel {
  constructor(
    private readonly factor: Float64Array,
    private readonly p: number,
  ) {}

  private entry(i: number, j: number): number {
    return i <= j ? this.factor[(j * (j + 1)) / 2 + i] : 0;
  }

  /** R z − q, length p. */
  private residual(z: Float64Array): Float64Array {
    return Float64Array.from({ length: this.p }, (_, i) => {
      let sum = -this.entry(i, this.p);
      for (let j = i; j < this.p; j++) sum += this.entry(i, j) * z[j];
      return sum;
    });
  }

  value(z: Float64Array): number {
    const rho = this.entry(this.p, this.p);
    return this.residual(z).reduce((sum, r) => sum + 0.5 * r * r, 0.5 * rho * rho);
  }

  gradient(z: Float64Array): Float64Array {
    const r = this.residual(z);
    return Float64Array.from({ length: this.p }, (_, j) => {
      let sum = 0;
      for (let i = 0; i <= j; i++) sum += this.entry(i, j) * r[i];
      return sum;
    });
  }

  /** RᵀR, row-major. */
  gram(): Float64Array {
    const { p } = this;
    const out = new Float64Array(p * p);
    for (let i = 0; i < p; i++) {
      for (let j = 0; j <= i; j++) {
        let sum = 0;
        for (let k = 0; k <= j; k++) sum += this.entry(k, i) * this.entry(k, j);
        out[i * p + j] = sum;
        out[j * p + i] = sum;
      }
    }
    return out;
  }

  /** z + R⁻¹(q − R z): the least-squares solution by back substitution, without forming RᵀR. */
  leastSquares(z: Float64Array): Float64Array {
    const step = this.residual(z).map((value) => -value);
    for (let i = this.p - 1; i >= 0; i--) {
      for (let j = i + 1; j < this.p; j++) step[i] -= this.entry(i, j) * step[j];
      step[i] /= this.entry(i, i);
    }
    return z.map((value, j) => value + step[j]);
  }

  /** Columns without a penalty that are combinations of earlier ones without a penalty. */
  aliased(g: Penalty): number[] {
    const free = Array.from({ length: this.p }, (_, j) => j).filter(
      (j) => g.l1[j] === 0 && g.l2[j] === 0 && !isFixed(g, j),
    );
    const m = free.length;
    if (m === 0) return [];
    const rows = new Float64Array(this.p * m);
    for (let i = 0; i < this.p; i++)
      free.forEach((j, a) => {
        rows[i * m + a] = this.entry(i, j);
      });
    const triangle = triangularFactor(rows, this.p, m);
    return free.filter((_, a) => {
      const from = (a * (a + 1)) / 2;
      const column = triangle.subarray(from, from + a + 1);
      const size = Math.hypot(...column);
      return !(Math.abs(column[a]) > PIVOT_LEAST * size);
    });
  }
}
