import { type Penalty, penaltyValue } from '../../numerics/penalty.js';
import type { LocalSolver } from '../../worker/local/local-solver.js';
import { must } from '../support/method-driver.js';

/** Rounds after which a baseline is given up. */
export const BASELINE_ROUNDS_MOST = 500;

/** What a baseline is given. It is stopped by the true gap, which no user has: its counts are lower bounds. */
export interface BaselineProblem {
  readonly sites: readonly LocalSolver[];
  /** n_i / N. */
  readonly siteWeights: readonly number[];
  readonly penalty: Penalty;
  readonly start: Float64Array;
  /** F*. */
  readonly optimum: number;
  /** Relative gaps, the finest last. */
  readonly tolerances: readonly number[];
}

/** Rounds to each tolerance, null where 500 were not enough, and the numbers one site sends and receives meanwhile. */
export interface BaselineRun {
  readonly rounds: readonly (number | null)[];
  readonly numbersUp: number;
  readonly numbersDown: number;
}

/** Counts rounds and numbers, and notes when F(z) first was within each tolerance of the optimum. */
export class GapWatch {
  rounds = 0;
  private readonly reached: (number | null)[];
  private up = 0;
  private down = 0;

  constructor(private readonly problem: BaselineProblem) {
    this.reached = problem.tolerances.map(() => null);
  }

  /** One round in which each site sends `up` and receives `down` numbers. */
  count(up: number, down: number): void {
    this.rounds++;
    this.up += up;
    this.down += down;
  }

  /** Looks at z after the rounds counted so far; looking is free. */
  look(z: Float64Array): void {
    const { sites, penalty, optimum, tolerances } = this.problem;
    const loss = sites.reduce((sum, site) => sum + must(site.evaluate(z, 'value')).value, 0);
    const gap = (loss + penaltyValue(penalty, z) - optimum) / Math.max(Math.abs(optimum), 1e-12);
    tolerances.forEach((tolerance, k) => {
      if (this.reached[k] === null && gap <= tolerance) this.reached[k] = this.rounds;
    });
  }

  get done(): boolean {
    return this.reached.every((rounds) => rounds !== null) || this.rounds >= BASELINE_ROUNDS_MOST;
  }

  get run(): BaselineRun {
    return { rounds: this.reached, numbersUp: this.up, numbersDown: this.down };
  }
}
