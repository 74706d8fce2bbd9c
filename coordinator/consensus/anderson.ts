import { CholeskyDecomposition, Matrix } from 'ml-matrix';
import { dot, norm, subtract } from '../../numerics/vector.js';
import type { Application, Extrapolation, Iteration } from './acceleration.js';

/** Pairs kept. */
const MEMORY = 8;
/** Tikhonov weight on the unit columns of the least-squares problem. */
const TIKHONOV = 1e-10;

/** Anderson extrapolation, type II (Walker and Ni 2011): T − ΔT γ with γ = argmin ‖R − ΔR γ‖. */
export class Anderson implements Extrapolation {
  readonly growthMost = 1;
  private applications: Application[] = [];

  rejected(): void {
    this.clear();
  }

  clear(): void {
    this.applications = [];
  }

  propose({ metric }: Iteration, application: Application): Float64Array[] | null {
    this.applications.push(application);
    if (this.applications.length > MEMORY + 1) this.applications.shift();
    if (this.applications.length < 2) return null;
    const next = extrapolate(this.applications);
    return next === null ? null : metric.unstack(next);
  }
}

function extrapolate(applications: readonly Application[]): Float64Array | null {
  const m = applications.length - 1;
  const last = applications[m];
  const steps = Array.from({ length: m }, (_, k) =>
    subtract(applications[k + 1].residual, applications[k].residual),
  );
  const lengths = steps.map((step) => Math.max(norm(step), 1e-150));
  const gram = new Matrix(m, m);
  const right = new Matrix(m, 1);
  for (let a = 0; a < m; a++) {
    for (let b = 0; b < m; b++) gram.set(a, b, dot(steps[a], steps[b]) / (lengths[a] * lengths[b]));
    gram.set(a, a, gram.get(a, a) + TIKHONOV);
    right.set(a, 0, dot(steps[a], last.residual) / lengths[a]);
  }
  const decomposition = new CholeskyDecomposition(gram);
  if (!decomposition.isPositiveDefinite()) return null;
  const weights = decomposition.solve(right);
  const next = Float64Array.from(last.image);
  for (let k = 0; k < m; k++) {
    const weight = weights.get(k, 0) / lengths[k];
    const later = applications[k + 1].image;
    const earlier = applications[k].image;
    for (let j = 0; j < next.length; j++) next[j] -= weight * (later[j] - earlier[j]);
  }
  return next;
}
