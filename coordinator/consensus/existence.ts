import { dependentColumns, runawayColumns } from '../../numerics/determined.js';
import { isFixed, type Penalty } from '../../numerics/penalty.js';
import { maxAbs } from '../../numerics/vector.js';
import type { Certificate } from './method.js';
import type { ConsensusProblem } from './problem.js';

/** A relative gap this small is the optimum itself, to rounding. */
const EXACT = 1e-12;

/** Columns without a penalty that are linear combinations of earlier ones without a penalty: the optimum is not unique. */
export const aliasedColumns = (curvature: Float64Array, g: Penalty): number[] =>
  dependentColumns(
    curvature,
    g.l1.length,
    [...g.l1.keys()].filter((j) => g.l1[j] === 0 && g.l2[j] === 0 && !isFixed(g, j)),
  );

/** Why there is no optimum, or no unique one, and the columns it lies with. */
export interface Flaw {
  readonly reason: 'rank-deficient' | 'separable';
  readonly columns: readonly number[];
}

/** Rank as the first curvature measured shows it, anywhere; where curvature may vanish that shows nothing. */
export function flawFromTheStart(
  { penalty, curvatureMayVanish }: ConsensusProblem,
  curvature: Float64Array,
): Flaw | null {
  const columns = curvatureMayVanish ? [] : aliasedColumns(curvature, penalty);
  return columns.length === 0 ? null : { reason: 'rank-deficient', columns };
}

/**
 * What a certificate and the curvature at its point say: the point stands, it is no optimum or not the only one, or
 * the search goes on. Where curvature may vanish, the loss runs off nowhere, but is flat along whatever has no curvature
 * at the optimum itself; short of the optimum a singular curvature says nothing.
 */
export function verdict(
  problem: ConsensusProblem,
  certificate: Certificate,
  curvature: Float64Array,
  step: { readonly direction: Float64Array; readonly bend: number },
  startDiagonal: Float64Array,
): 'stands' | 'goes on' | Flaw {
  // what is not a number certifies nothing
  if (!(certificate.relativeGap <= problem.tolerance)) return 'goes on';
  if (!problem.curvatureMayVanish) {
    const columns = runawayColumns(step.direction, step.bend, startDiagonal);
    return columns.length === 0 ? 'stands' : { reason: 'separable', columns };
  }
  const columns = aliasedColumns(curvature, problem.penalty);
  if (columns.length === 0) return 'stands';
  return certificate.relativeGap <= EXACT ? { reason: 'rank-deficient', columns } : 'goes on';
}

/**
 * Columns of a z that separates the classes: with the mean loss under ln 2 / N (`separatedBelow`) every row's loss is
 * under ln 2, so that every row is on its own side of the border, and without a penalty the loss falls to zero along z
 * (Albert and Anderson 1984). Proof, not judgement. Empty where the loss or a penalty on these columns forbids that.
 */
export function separatedColumns(
  { penalty: g, separatedBelow }: ConsensusProblem,
  z: Float64Array,
  loss: number,
): number[] {
  if (separatedBelow === null || !(loss < separatedBelow)) return [];
  const moved = [...z.keys()].filter((j) => z[j] !== 0);
  const free = moved.every(
    (j) => g.l1[j] === 0 && g.l2[j] === 0 && !Number.isFinite(g.lower[j]) && !Number.isFinite(g.upper[j]),
  );
  const longest = maxAbs(z);
  return free ? moved.filter((j) => Math.abs(z[j]) >= 0.5 * longest) : [];
}
