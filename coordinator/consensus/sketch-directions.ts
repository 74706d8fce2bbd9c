import type { Random } from '../../numerics/random.js';
import { addScaled, dot, norm, scaled } from '../../numerics/vector.js';
import type { SketchAsk } from './method.js';
import { type PooledEvaluation, required } from './pooled.js';
import type { ConsensusProblem } from './problem.js';

/** What orthogonalisation must leave of a unit direction for it to be a direction of its own. */
const REMAINDER_LEAST = 1e-6;
/** Random directions drawn beyond those wanted: one that falls into the span of the others is passed over. */
const SPARE = 2;

/**
 * Chooses the directions along which curvature is asked: first where the model was most wrong, then at random, each
 * orthogonal in the D-norm to all those measured in this cycle of p. Directions have unit D-norm.
 */
export class SketchDirections {
  /** √D times the directions measured in this cycle: an orthonormal set. */
  private measured: Float64Array[] = [];
  private left: number;

  constructor(
    private readonly random: Random,
    private readonly budget: ConsensusProblem['sketch'],
  ) {
    this.left = budget.columnsMost;
  }

  /** The directions of the next ask, given the errors Y − B S of the last; none once the budget is spent. */
  next(errors: readonly Float64Array[], diagonal: Float64Array): Float64Array[] {
    const p = diagonal.length;
    if (this.measured.length >= p) this.measured = [];
    const root = diagonal.map(Math.sqrt);
    const most = Math.min(this.budget.columns, this.left, p - this.measured.length);
    if (most <= 0) return [];
    const candidates = [
      ...longestFirst(errors.map((error) => error.map((value, j) => value / root[j]))),
      ...Array.from({ length: most + SPARE }, () => root.map(() => this.random.normal())),
    ];
    const chosen: Float64Array[] = [];
    for (const candidate of candidates) {
      if (chosen.length === most) break;
      const fresh = unitRemainder(candidate, [...this.measured, ...chosen]);
      if (fresh !== null) chosen.push(fresh);
    }
    this.left -= chosen.length;
    return chosen.map((direction) => direction.map((value, j) => value / root[j]));
  }

  /** Curvature along these directions was measured and kept. */
  keep(directions: readonly Float64Array[], diagonal: Float64Array): void {
    const root = diagonal.map(Math.sqrt);
    for (const direction of directions) {
      // D may have changed since they were chosen
      const fresh = unitRemainder(
        direction.map((value, j) => value * root[j]),
        this.measured,
      );
      if (fresh !== null) this.measured.push(fresh);
    }
  }
}

const longestFirst = (vectors: Float64Array[]): Float64Array[] =>
  [...vectors].sort((a, b) => dot(b, b) - dot(a, a));

/** What is left of a vector outside the span of an orthonormal set, at unit length; null where that is nothing. */
function unitRemainder(vector: Float64Array, set: readonly Float64Array[]): Float64Array | null {
  const length = norm(vector);
  if (!(length > 0)) return null;
  const rest = scaled(1 / length, vector);
  // twice is enough (Giraud, Langou, Rozložník 2005)
  for (let pass = 0; pass < 2; pass++) for (const unit of set) addScaled(rest, -dot(unit, rest), unit);
  const left = norm(rest);
  return left > REMAINDER_LEAST ? scaled(1 / left, rest) : null;
}

/** Directions one after the other, to be applied at the first point of the ask. */
export function sketchAsk(sketch: readonly Float64Array[]): SketchAsk | null {
  if (sketch.length === 0) return null;
  const p = sketch[0].length;
  const directions = new Float64Array(sketch.length * p);
  sketch.forEach((direction, k) => {
    directions.set(direction, k * p);
  });
  return { at: 0, directions, columns: sketch.length };
}

/** The columns of Y = H S in the answer to that ask. */
export function productsOf(answers: PooledEvaluation, columns: number): Float64Array[] {
  if (columns === 0) return [];
  const all = required(answers.sketch, 'sketch');
  const p = all.length / columns;
  return Array.from({ length: columns }, (_, k) => all.slice(k * p, (k + 1) * p));
}
