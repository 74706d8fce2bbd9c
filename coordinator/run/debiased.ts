import { noPenalty } from '../../numerics/penalty.js';
import { sumOf } from '../../numerics/vector.js';
import { zStepFull } from '../../numerics/z-step.js';
import { interval, reachOf, twoSided } from '../inference/tests.js';
import { type Description, pooledMeat } from './description.js';
import type { Basis } from './infer.js';
import type { Grounds } from './problems.js';
import type { InferenceDocument } from './result-parts.js';

/**
 * De-biased estimates of a penalised fit (Zhang and Zhang 2014; van de Geer, Bühlmann, Ritov, Dezeure 2014; Javanmard and
 * Montanari 2014): b = θ − Θ ∇f(θ) with Θ an approximate inverse of the curvature, row by row from the nodewise lasso at
 * λ = √(ln p / N); var = Θ B Θᵀ / N, B the meat, or the curvature times the dispersion where the meat is not known.
 */
export function debiasedIntervals(
  { survey, frame }: Grounds,
  description: Description,
  { level, degreesOfFreedom, dispersion }: Basis,
): InferenceDocument['debiased'] {
  const { curvature, columns, end, scores } = description;
  const gradients =
    scores?.map(({ gradient }) => gradient) ?? description.members?.map(({ gradient }) => gradient);
  if (curvature === null || gradients === undefined) return [];
  const { p } = frame;
  const n = survey.rowsTotal;
  const gradient = sumOf(gradients);
  const meat = pooledMeat(scores, 'meat') ?? curvature.map((value) => value * dispersion.value);
  const reach = reachOf(level, degreesOfFreedom);
  const first = columns.intercept ? 1 : 0;
  return columns.names.slice(first).map((name, at) => {
    const j = first + at;
    const row = nodewiseRow(curvature, p, j, Math.sqrt(Math.log(p) / n));
    let shift = 0;
    let variance = 0;
    for (let k = 0; k < p; k++) {
      shift += row[k] * gradient[k];
      for (let m = 0; m < p; m++) variance += (row[k] * meat[k * p + m] * row[m]) / n;
    }
    const scale = columns.scale[at];
    const estimate = (end.z[j] - shift) / scale;
    const standardError = Math.sqrt(variance) / scale;
    const pValue = twoSided(estimate / standardError, degreesOfFreedom);
    return { name, ...interval(estimate, standardError, reach), pValue };
  });
}

/** Row j of the approximate inverse: 1/τ² (−γ, with 1 at j), γ the lasso regression of column j on the others in H. */
function nodewiseRow(h: Float64Array, p: number, j: number, lambda: number): Float64Array {
  const others = [...Array(p).keys()].filter((k) => k !== j);
  const m = others.length;
  const metric = new Float64Array(m * m);
  const right = new Float64Array(m);
  const root = others.map((k) => Math.sqrt(h[k * p + k]));
  const own = Math.sqrt(h[j * p + j]);
  for (let a = 0; a < m; a++) {
    right[a] = h[others[a] * p + j] / (root[a] * own);
    for (let c = 0; c < m; c++) metric[a * m + c] = h[others[a] * p + others[c]] / (root[a] * root[c]);
  }
  const penalty = noPenalty(m);
  penalty.l1.fill(lambda);
  const gamma = zStepFull(penalty, metric, right, new Float64Array(m)) ?? right;
  // in the scale of the diagonal: τ² = 1 − rᵀγ is the KKT form of the residual variance plus λ‖γ‖₁
  let tau = 1;
  for (let a = 0; a < m; a++) tau -= right[a] * gamma[a];
  const row = new Float64Array(p);
  row[j] = 1 / (tau * own * own);
  for (let a = 0; a < m; a++) row[others[a]] = -gamma[a] / (tau * own * root[a]);
  return row;
}
