import { describe, expect, test } from 'vitest';
import type { FitDocument } from '../../coordinator/run/result.js';
import type { FitSpecification, RungLimit } from '../../protocol/specification/types.js';
import { buildRawShard } from '../../worker/design/build.js';
import { RawDenseRows } from '../../worker/design/dense-rows.js';
import { RawSparseRows } from '../../worker/design/raw-sparse-rows.js';
import type { RawShard } from '../../worker/design/shard.js';
import { fitOn, sitesOn } from '../support/in-process-fit.js';
import { must } from '../support/method-driver.js';
import { type SparseSize, sparseScenario } from '../support/sparse-scenario.js';

/** Level columns and products of them at four sites, over few enough columns to write them in full. */
const SMALL: SparseSize = {
  sites: 4,
  rowsEach: 120,
  factors: 2,
  levels: 14,
  products: 1,
  lambda: 0.01,
  seed: 4,
};
const WIDE: SparseSize = {
  sites: 4,
  rowsEach: 800,
  factors: 6,
  levels: 80,
  products: 3,
  lambda: 0.01,
  seed: 1,
};

const inFull = (raw: RawShard): RawShard => {
  const x = new Float64Array(raw.rowCount * raw.rows.p);
  raw.rows.copy(0, raw.rowCount, x);
  return { ...raw, rows: new RawDenseRows(x, raw.rows.p, raw.rowCount) };
};

const rawShards = (size: SparseSize, partial: Partial<FitSpecification>) => {
  const { spec, tables } = sparseScenario(size, partial);
  const raws = tables.map((table) => must(buildRawShard(spec, table)));
  for (const { rows } of raws) expect(rows).toBeInstanceOf(RawSparseRows);
  return { spec, raws };
};

/**
 * F(b) − D of a logistic lasso on indicators, D the dual at the fit's own residuals, shrunk until it is feasible: a bound
 * on F(b) − F* from the rows alone.
 */
function dualityGap(
  fit: FitDocument,
  raws: readonly RawShard[],
  lambda: number,
): { gap: number; primal: number } {
  const total = raws.reduce((sum, { rowCount }) => sum + rowCount, 0);
  const { columns } = raws[0];
  const b = Float64Array.from(columns, (name) => fit.coefficients[name] ?? 0);
  const mean = new Float64Array(b.length);
  for (const { rows } of raws)
    rows.weightedSum(null).forEach((sum, j) => {
      mean[j] += sum / total;
    });
  const bound = mean.map((m) => lambda * Math.sqrt(m * (1 - m)));
  const predictors = raws.map(({ rowCount, rows }) => {
    const { starts, columns: places } = (rows as RawSparseRows).entries;
    return Float64Array.from({ length: rowCount }, (_, r) =>
      places.subarray(starts[r], starts[r + 1]).reduce((sum, j) => sum + b[j], 0),
    );
  });
  const intercept = balanced(predictors, raws);
  let primal = b.reduce((sum, value, j) => sum + bound[j] * Math.abs(value), 0);
  const slope = new Float64Array(b.length);
  const residuals = predictors.map((eta, i) =>
    eta.map((value, r) => {
      const at = value + intercept;
      primal += (Math.log1p(Math.exp(-Math.abs(at))) + Math.max(at, 0) - raws[i].y[r] * at) / total;
      return 1 / (1 + Math.exp(-at)) - raws[i].y[r];
    }),
  );
  raws.forEach(({ rows }, i) => {
    rows.weightedSum(residuals[i]).forEach((sum, j) => {
      slope[j] += sum / total;
    });
  });
  const shrink = slope.reduce(
    (least, value, j) => (value === 0 ? least : Math.min(least, bound[j] / Math.abs(value))),
    1,
  );
  let dual = 0;
  const entropy = (q: number): number =>
    q <= 0 || q >= 1 ? 0 : -q * Math.log(q) - (1 - q) * Math.log(1 - q);
  raws.forEach(({ y }, i) => {
    y.forEach((own, r) => {
      dual += entropy(own + shrink * residuals[i][r]) / total;
    });
  });
  return { gap: primal - dual, primal };
}

/** The intercept at which the residuals add up to zero, as the dual of an unpenalised intercept demands. */
function balanced(predictors: readonly Float64Array[], raws: readonly RawShard[]): number {
  let [low, high] = [-20, 20];
  for (let k = 0; k < 80; k++) {
    const middle = (low + high) / 2;
    let sum = 0;
    predictors.forEach((eta, i) => {
      eta.forEach((value, r) => {
        sum += 1 / (1 + Math.exp(-value - middle)) - raws[i].y[r];
      });
    });
    if (sum > 0) high = middle;
    else low = middle;
  }
  return (low + high) / 2;
}

describe('a fit over rows by their entries', () => {
  test.each<[RungLimit, number | null, FitSpecification['intercept']]>([
    ['highest', null, 'shared'],
    ['sketched', 3, 'shared'],
    ['proximal', 3, 'shared'],
    ['proximal', 0, 'shared'],
    ['proximal', 0, 'per-site'],
    ['curvature', null, 'none'],
  ])(
    'is that over the same rows in full: rung %s, matrices %s, intercept %s',
    (rung, matrices, intercept) => {
      const rounds = { tolerance: 1e-8, most: 300, rung };
      const { spec, raws } = rawShards(SMALL, { rounds, intercept });
      const [sparse, dense] = [raws, raws.map(inFull)].map((own) =>
        fitOn(sitesOn(spec, own, matrices), null),
      );
      expect([sparse.outcome, dense.outcome]).toEqual(['solved', 'solved']);
      const [got, wanted] = [sparse.fits[0], dense.fits[0]];
      expect(got.rung).toBe(wanted.rung);
      expect(Math.abs(got.objective / wanted.objective - 1)).toBeLessThan(2e-8);
      for (const [name, value] of Object.entries(wanted.coefficients))
        expect(Math.abs(got.coefficients[name] - value), name).toBeLessThan(1e-4);
    },
    120_000,
  );

  test('is that over the same rows in full where folds choose among fits', () => {
    const penalty = { kind: 'lasso', path: null, l1: 1, scaled: true, perTerm: {} } as const;
    const { spec, raws } = rawShards(SMALL, {
      choose: { kind: 'folds', by: { kind: 'hash', folds: 3, seed: 5 }, rule: 'minimum' },
      penalties: [{ ...penalty, lambda: [0.03, 0.02] }],
      rounds: { tolerance: 1e-7, most: 300, rung: 'highest' },
    });
    const [sparse, dense] = [raws, raws.map(inFull)].map((own) => fitOn(sitesOn(spec, own, null), null));
    expect([sparse.outcome, dense.outcome]).toEqual(['solved', 'solved']);
    const [got, wanted] = [sparse.choice, dense.choice];
    expect(got?.chosen).toBe(wanted?.chosen);
    sparse.fits.forEach((fit, k) => {
      expect(Math.abs(fit.objective / dense.fits[k].objective - 1)).toBeLessThan(2e-7);
    });
  }, 120_000);

  test('of ten thousand columns is certified without a matrix, and the certificate holds', () => {
    const { spec, raws } = rawShards(WIDE, {});
    const close = { ...spec, rounds: { ...spec.rounds, tolerance: 1e-9 } };
    const [fit, closer] = [spec, close].map((own) => {
      const result = fitOn(sitesOn(own, raws, null), null);
      expect(result.outcome).toBe('solved');
      return result.fits[0];
    });
    expect(fit.rung).toBe('proximal');
    expect(fit.certificate?.relativeGap).toBeLessThanOrEqual(1e-4);
    expect(Object.keys(fit.coefficients).length).toBeGreaterThan(6000);
    const [{ primal }, best] = [fit, closer].map((own) => dualityGap(own, raws, WIDE.lambda));
    expect(Math.abs(fit.objective / primal - 1)).toBeLessThan(1e-6);
    expect(best.gap).toBeGreaterThanOrEqual(0);
    expect(best.gap / best.primal).toBeLessThanOrEqual(1e-4);
    expect(primal / (best.primal - best.gap) - 1).toBeLessThanOrEqual(2e-4);
  }, 120_000);
});
