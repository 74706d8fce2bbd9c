import { seededRandom } from '../../numerics/random.js';
import type { EvaluateWork } from '../../protocol/messages/evaluate.js';
import type { ProximalProblem } from '../../protocol/messages/proximal.js';
import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import type { SurveyAnswer } from '../../protocol/messages/survey.js';

/** Rows that each light site says it has. */
const ROWS = 1000;
/** Of all columns, those on which the sites' responses lean one way; at the others a lasso leaves zero. */
const LEANING_EVERY = 20;
const NEWTON_STEPS_MOST = 40;

/**
 * A site whose answers cost next to nothing, so that a coordinator alone is measured: the logistic loss of a table in
 * which every row has one level, without an intercept,
 *
 *     φ(x) = (n / N p) Σ_j [log(1 + exp x_j) − q_j x_j] .
 *
 * It is separable: a proximal point is a scalar Newton iteration a column.
 */
export class LightSite {
  private readonly share: Float64Array;
  private readonly weight: number;
  private readonly p: number;
  private diagonal: Float64Array | null = null;
  private point: Float64Array | null = null;

  constructor(
    private readonly columns: string[],
    siteCount: number,
    seed: number,
  ) {
    const p = columns.length;
    this.p = p;
    const random = seededRandom(seed + 1);
    this.share = Float64Array.from({ length: p }, (_, j) =>
      j % LEANING_EVERY === 0
        ? 0.8 - (j % (2 * LEANING_EVERY) === 0 ? 0.6 : 0) + 0.2 * (random.uniform() - 0.5)
        : 0.5 + 0.1 * (random.uniform() - 0.5),
    );
    this.weight = 1 / (siteCount * p);
  }

  answer(work: Work): WorkAnswer {
    switch (work.work) {
      case 'survey':
        return this.survey();
      case 'evaluate':
        return this.evaluate(work);
      case 'proximal':
        return { work: 'proximal', problems: work.problems.map((problem) => this.proximal(problem)) };
      default:
        throw new Error(`a light site is not asked for ${work.work}`);
    }
  }

  private survey(): SurveyAnswer {
    return {
      work: 'survey',
      rowsUsed: ROWS,
      rowsDropped: 0,
      columns: this.columns,
      mean: new Float64Array(this.p),
      centredSquares: new Float64Array(this.p).fill(ROWS),
      response: {
        weightSum: ROWS,
        weightedSum: ROWS / 2,
        exposureSum: ROWS,
        least: 0,
        most: 1,
        saturatedLoss: 0,
      },
      folds: [],
      allowance: {
        leave: ['counts', 'moments', 'proximal', 'gradients', 'sketches'],
        curvatureMost: null,
        numbersMost: null,
        roundsMost: null,
      },
      notes: [],
    };
  }

  private evaluate({ problem, points, sketch }: EvaluateWork): WorkAnswer {
    const { share, weight, p } = this;
    const at = points.map(({ point, want }) => {
      const wantsGradient = want !== 'value';
      const gradient = new Float64Array(wantsGradient ? p : 0);
      const diagonal = new Float64Array(want === 'diagonal' ? p : 0);
      let value = 0;
      for (let j = 0; j < p; j++) {
        const mean = logistic(point[j]);
        value += Math.log1p(Math.exp(-Math.abs(point[j]))) + Math.max(point[j], 0) - share[j] * point[j];
        if (wantsGradient) gradient[j] = weight * (mean - share[j]);
        if (want === 'diagonal') diagonal[j] = weight * mean * (1 - mean);
      }
      return {
        value: weight * value,
        gradient: wantsGradient ? gradient : null,
        diagonal: want === 'diagonal' ? diagonal : null,
        curvature: null,
      };
    });
    const products = sketch === null ? null : this.products(points[sketch.at].point, sketch.directions);
    return { work: 'evaluate', problem, points: at, ownFit: null, sketch: products };
  }

  private products(point: Float64Array, directions: Float64Array): Float64Array {
    return directions.map((value, k) => {
      const mean = logistic(point[k % this.p]);
      return this.weight * mean * (1 - mean) * value;
    });
  }

  private proximal({ problem, center, scale, diagonal, start }: ProximalProblem) {
    this.diagonal = diagonal ?? this.diagonal;
    const from = start ?? this.point;
    if (this.diagonal === null || from === null) throw new Error('a light site remembers what it was sent');
    const { share, weight, diagonal: metric } = this;
    const point = new Float64Array(this.p);
    for (let j = 0; j < point.length; j++) {
      const hold = (scale * metric[j]) / weight;
      point[j] = heldAt(share[j], hold, center[j], from[j]);
    }
    this.point = point;
    return { problem, point, newtonSteps: 1 };
  }
}

/** argmin log(1 + exp x) − q x + ½ hold (x − center)². */
function heldAt(q: number, hold: number, center: number, start: number): number {
  let x = start;
  for (let step = 0; step < NEWTON_STEPS_MOST; step++) {
    const mean = logistic(x);
    const move = (mean - q + hold * (x - center)) / (mean * (1 - mean) + hold);
    x -= Math.max(-1, Math.min(1, move));
    if (Math.abs(move) < 1e-13) break;
  }
  return x;
}

const logistic = (x: number): number => 1 / (1 + Math.exp(-x));
