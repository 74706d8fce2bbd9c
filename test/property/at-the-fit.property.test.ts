import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { cholesky, choleskySolve } from '../../numerics/cholesky.js';
import { packSymmetric, unpackSymmetric } from '../../numerics/packed.js';
import { seededRandom } from '../../numerics/random.js';
import type { Scaling } from '../../protocol/messages/run.js';
import type { FitSpecification, LossForm } from '../../protocol/specification/types.js';
import { buildRawShard } from '../../worker/design/build.js';
import { lastOf } from '../../worker/local/local-solver.js';
import { margins } from '../../worker/local/margins.js';
import { CELL_ROWS_LEAST, quality } from '../../worker/local/quality.js';
import { scores } from '../../worker/local/scores.js';
import { siteFit } from '../../worker/local/site-fit.js';
import { siteSolvers } from '../../worker/local/site-solvers.js';
import { lossOf } from '../../worker/losses/index.js';
import { entriesOf } from '../support/dense.js';
import { levelsTerm, numericTerm, specification, table } from '../support/designs.js';
import { NO_REPORT } from '../support/specifications.js';
import { failureOf, soundValue } from '../support/tables.js';

const LOSSES: readonly LossForm[] = [
  { kind: 'squared' },
  { kind: 'logistic' },
  { kind: 'poisson' },
  { kind: 'huber', threshold: 2 },
];
const INTERCEPTS = ['shared', 'per-site', 'none'] as const;
const LEVELS = ['pvc', 'steel', 'iron'];

interface Case {
  readonly seed: number;
  readonly rowCount: number;
  readonly loss: LossForm;
  readonly intercept: FitSpecification['intercept'];
  readonly folds: boolean;
}

const cases: fc.Arbitrary<Case> = fc.record({
  seed: fc.integer({ min: 1, max: 1e9 }),
  rowCount: fc.integer({ min: 24, max: 60 }),
  loss: fc.constantFrom(...LOSSES),
  intercept: fc.constantFrom(...INTERCEPTS),
  folds: fc.boolean(),
});

const material = levelsTerm('material', LEVELS, 'pvc');
const TERMS = [
  numericTerm('age'),
  numericTerm('age', { power: 2 }),
  numericTerm('d', 'log'),
  numericTerm('d', 'sqrt'),
  material,
  { kind: 'product' as const, factors: [numericTerm('age'), material], name: 'age:material' },
];

/** A site whose table, design and solvers all are there, so that a twin can go back to the rows. */
function siteOf({ seed, rowCount, loss, intercept, folds }: Case) {
  const random = seededRandom(seed);
  const rows = Array.from({ length: rowCount }, (_, r) => r);
  const spec = specification({
    loss,
    intercept,
    terms: TERMS,
    weights: { column: 'w' },
    offset: { kind: 'offset', column: 'o' },
    choose: folds ? { kind: 'folds', by: { kind: 'hash', folds: 3, seed: 1 }, rule: 'minimum' } : null,
    report: { ...NO_REPORT, margins: true, sandwich: { cluster: 'crew' } },
  });
  const numbers = {
    y: rows.map((r) =>
      loss.kind === 'logistic' || loss.kind === 'poisson'
        ? r < 2
          ? r
          : random.integer(2)
        : 2 * random.normal(),
    ),
    age: rows.map(() => 1 + 3 * random.uniform()),
    d: rows.map(() => 0.5 + random.uniform()),
    w: rows.map(() => random.integer(3) / 2),
    o: rows.map(() => 0.3 * random.normal()),
  };
  // a best intercept needs both responses among the rows that count
  numbers.w[0] = 1;
  numbers.w[1] = 1;
  const codes = Int32Array.from(rows, (r) => (r < 9 ? r % 3 : random.integer(3)));
  const crew = { levels: ['n', 'e', 's'], codes: Int32Array.from(rows, () => random.integer(3)) };
  const made = (changed: Partial<typeof numbers>, levelCodes = codes) => ({
    ...table({ ...numbers, ...changed }, { material: { levels: LEVELS, codes: levelCodes } }),
    labels: new Map([['crew', crew]]),
  });
  const raw = soundValue(buildRawShard(spec, made({})));
  const p = raw.columns.length;
  const scaling: Scaling = {
    rowCountTotal: 3 * rowCount,
    kept: Array.from({ length: p }, (_, j) => j),
    center:
      intercept === 'none' ? new Float64Array(p) : Float64Array.from({ length: p }, () => random.normal()),
    scale: Float64Array.from({ length: p }, () => 0.5 + random.uniform()),
  };
  const solvers = siteSolvers(spec, raw, scaling);
  const solver = solvers.parts.solver(null);
  const width = p + (intercept === 'shared' ? 1 : 0);
  const point = Float64Array.from({ length: width }, () => 0.2 * random.normal());
  return {
    spec,
    raw,
    scaling,
    solvers,
    solver,
    point,
    made,
    numbers,
    codes,
    width,
    random,
    loss: lossOf(loss),
  };
}

type Site = ReturnType<typeof siteOf>;

/** Σ μ over the rows of a table at a point, by the design as it is built for a fit; the own intercept is that of the real rows. */
function meanSum(site: Site, point: Float64Array, changed: object, codes = site.codes): number {
  const { spec, scaling, loss, made } = site;
  const intercept = ownIntercept(site, point);
  const raw = soundValue(buildRawShard(spec, made(changed, codes)));
  const lead = spec.intercept === 'shared' ? 1 : 0;
  let sum = 0;
  for (let r = 0; r < raw.rowCount; r++) {
    let eta = intercept + (raw.offset?.[r] ?? 0) + (lead === 1 ? point[0] : 0);
    for (let j = 0; j < raw.columns.length; j++)
      eta +=
        (point[lead + j] * (entriesOf(raw)[r * raw.columns.length + j] - scaling.center[j])) /
        scaling.scale[j];
    sum += loss.mean(eta);
  }
  return sum;
}

/** By bisection of the slope, on the pooled scaling; 0 without an intercept of its own. */
function ownIntercept({ spec, raw, scaling, loss }: Site, point: Float64Array): number {
  if (spec.intercept !== 'per-site') return 0;
  const slope = (shift: number): number => {
    let sum = 0;
    for (let r = 0; r < raw.rowCount; r++) {
      let eta = shift + (raw.offset?.[r] ?? 0);
      for (let j = 0; j < point.length; j++)
        eta += (point[j] * (entriesOf(raw)[r * point.length + j] - scaling.center[j])) / scaling.scale[j];
      sum += (raw.weights?.[r] ?? 1) * loss.slope(raw.y[r], eta);
    }
    return sum;
  };
  let [low, high] = [-200, 200];
  for (let k = 0; k < 100; k++) {
    const middle = (low + high) / 2;
    if (slope(middle) >= 0) high = middle;
    else low = middle;
  }
  return high;
}

const close = (a: number, b: number, tolerance: number): void =>
  expect(Math.abs(a - b)).toBeLessThanOrEqual(tolerance * (1 + Math.abs(b)));

describe('margins', () => {
  const asked = (site: Site, point: Float64Array) =>
    soundValue(
      lastOf(
        margins(site.solvers.parts, site.raw.margins, site.solvers.scaling, {
          work: 'margins',
          problem: 1,
          point,
          settings: [
            ...LEVELS.map((level) => ({ set: 'level' as const, column: 'material', level })),
            { set: 'slope', column: 'age' },
            { set: 'slope', column: 'd' },
          ],
        }),
      ),
    );

  test('at a level are the means of a table where every row has it', () => {
    fc.assert(
      fc.property(cases, (one) => {
        const site = siteOf(one);
        const { settings, rows } = asked(site, site.point);
        expect(rows).toBe(one.rowCount);
        LEVELS.forEach((_, code) => {
          const codes = new Int32Array(one.rowCount).fill(code);
          close(settings[code].sum, meanSum(site, site.point, {}, codes), 1e-9);
        });
      }),
      { numRuns: 40 },
    );
  });

  test('slopes are how the means of a table move with the column', () => {
    fc.assert(
      fc.property(cases, (one) => {
        const site = siteOf(one);
        const { settings } = asked(site, site.point);
        (['age', 'd'] as const).forEach((column, k) => {
          const h = 1e-5;
          const at = (by: number): number =>
            meanSum(site, site.point, { [column]: site.numbers[column].map((value) => value + by) });
          close(settings[3 + k].sum, (at(h) - at(-h)) / (2 * h), 1e-6);
        });
      }),
      { numRuns: 40 },
    );
  });

  test('gradients are finite differences of the sums, the own intercept moving along', () => {
    fc.assert(
      fc.property(cases, fc.nat({ max: 7 }), (one, pick) => {
        fc.pre(one.loss.kind !== 'huber' || one.intercept !== 'per-site');
        const site = siteOf(one);
        const j = pick % site.width;
        const h = 1e-5;
        const moved = (by: number) => {
          const point = Float64Array.from(site.point);
          point[j] += by;
          return asked(site, point).settings;
        };
        const [up, down] = [moved(h), moved(-h)];
        asked(site, site.point).settings.forEach(({ gradient }, k) => {
          expect(gradient).toHaveLength(site.width);
          close(gradient[j], (up[k].sum - down[k].sum) / (2 * h), 1e-5);
        });
      }),
      { numRuns: 60 },
    );
  });

  test('are refused where the specification has none, or no such level', () => {
    const site = siteOf({
      seed: 1,
      rowCount: 24,
      loss: { kind: 'squared' },
      intercept: 'shared',
      folds: false,
    });
    const { parts, scaling } = site.solvers;
    const work = (column: string, level: string) => ({
      work: 'margins' as const,
      problem: 1,
      point: site.point,
      settings: [{ set: 'level' as const, column, level }],
    });
    expect(failureOf(lastOf(margins(parts, null, scaling, work('material', 'pvc')))).code).toBe(
      'not-supported',
    );
    const { margins: made } = site.raw;
    expect(failureOf(lastOf(margins(parts, made, scaling, work('material', 'lead')))).code).toBe(
      'level-unknown',
    );
    expect(failureOf(lastOf(margins(parts, made, scaling, work('age', '3')))).code).toBe('not-supported');
  });
});

describe('scores', () => {
  test('are sums over rows and clusters of products of scores', () => {
    fc.assert(
      fc.property(cases, (one) => {
        const site = siteOf(one);
        const { raw, point, width, solvers, spec } = site;
        const answer = soundValue(
          scores(solvers.parts, raw.clusters, {
            work: 'scores',
            problem: 4,
            point,
            meat: true,
            clustered: true,
          }),
        );
        const evaluated = soundValue(site.solver.evaluate(point, 'gradient'));
        for (let j = 0; j < width; j++)
          close(answer.gradient[j], evaluated.gradient?.[j] ?? Number.NaN, 1e-12);
        // the score of a row: the gradient of a shard in which no other row has weight, about the same means
        const lead = spec.intercept === 'shared' ? 1 : 0;
        const intercept = ownIntercept(site, point);
        const n = site.scaling.rowCountTotal;
        const rowsOf = Array.from({ length: raw.rowCount }, (_, r) => {
          const columns = Array.from({ length: width }, (_, j) =>
            j < lead
              ? 1
              : (entriesOf(raw)[r * raw.columns.length + j - lead] - site.scaling.center[j - lead]) /
                site.scaling.scale[j - lead],
          );
          const eta =
            intercept + (raw.offset?.[r] ?? 0) + columns.reduce((sum, x, j) => sum + x * point[j], 0);
          return { columns, eta, w: raw.weights?.[r] ?? 1, y: raw.y[r] };
        });
        const curvatures = rowsOf.map(({ eta, w, y }) => w * site.loss.curvature(y, eta));
        const total = curvatures.reduce((sum, h) => sum + h, 0);
        const means = Array.from({ length: width }, (_, j) =>
          spec.intercept === 'per-site' && total > 0
            ? rowsOf.reduce((sum, { columns }, r) => sum + curvatures[r] * columns[j], 0) / total
            : 0,
        );
        const own = rowsOf.map(({ columns, eta, w, y }) =>
          columns.map((x, j) => w * site.loss.slope(y, eta) * (x - means[j])),
        );
        const products = (vectors: readonly (readonly number[])[]) => {
          const sum = new Float64Array(width * width);
          for (const v of vectors)
            for (let i = 0; i < width; i++)
              for (let j = 0; j < width; j++) sum[i * width + j] += (v[i] * v[j]) / n;
          return packSymmetric(sum, width);
        };
        const meat = products(own);
        meat.forEach((value, k) => {
          close(answer.meat?.[k] ?? Number.NaN, value, 1e-8);
        });
        const groups = [...new Set(raw.clusters?.ofRow)].map((cluster) =>
          own
            .filter((_, r) => raw.clusters?.ofRow[r] === cluster)
            .reduce((sum, v) => sum.map((value, j) => value + v[j])),
        );
        products(groups).forEach((value, k) => {
          close(answer.clustered?.[k] ?? Number.NaN, value, 1e-8);
        });
        expect(answer.clusterCount).toBe(groups.length);
        const variance = {
          squared: () => 1,
          huber: () => 1,
          poisson: (m: number) => m,
          logistic: (m: number) => m * (1 - m),
        }[one.loss.kind];
        const pearson = rowsOf.reduce((sum, { eta, w, y }) => {
          const mean = site.loss.mean(eta);
          return sum + (w * (y - mean) ** 2) / variance(mean);
        }, 0);
        close(answer.pearson, pearson, 1e-8);
      }),
      { numRuns: 60 },
    );
  });

  test('clusters need a column of the specification', () => {
    const site = siteOf({
      seed: 1,
      rowCount: 24,
      loss: { kind: 'squared' },
      intercept: 'shared',
      folds: false,
    });
    const work = { work: 'scores' as const, problem: 1, point: site.point, meat: false, clustered: true };
    expect(failureOf(scores(site.solvers.parts, null, work)).code).toBe('not-supported');
  });
});

describe('the quality of a fit', () => {
  test('bins, residuals and leverages are those of the rows; leverages add up to the coefficients', () => {
    fc.assert(
      fc.property(cases, (one) => {
        const site = siteOf({ ...one, loss: one.loss.kind === 'huber' ? { kind: 'squared' } : one.loss });
        const { solvers, solver, point, width, spec } = site;
        const at = soundValue(solver.evaluate(point, 'curvature'));
        const chol = cholesky(unpackSymmetric(at.curvature ?? new Float64Array(0)), width);
        fc.pre(chol !== null);
        if (chol === null) return;
        const inverse = new Float64Array(width * width);
        for (let j = 0; j < width; j++) {
          const unit = new Float64Array(width);
          unit[j] = 1;
          choleskySolve(chol, width, unit).forEach((value, i) => {
            inverse[i * width + j] = value;
          });
        }
        const work = {
          work: 'quality' as const,
          problem: 1,
          point,
          edges: Float64Array.of(-0.5, 0, 0.5),
          inverse: packSymmetric(inverse, width),
          leverageHigh: 0.3,
        };
        const answer = soundValue(quality(solvers.parts, work));
        expect(answer.rows).toBe(one.rowCount);
        expect(answer.binRows.reduce((sum, rows) => sum + rows, 0) + answer.rowsSuppressed).toBe(
          one.rowCount,
        );
        close(answer.leverage?.sum ?? Number.NaN, width + (spec.intercept === 'per-site' ? 1 : 0), 1e-6);
        const scored = soundValue(
          scores(solvers.parts, null, { work: 'scores', problem: 1, point, meat: false, clustered: false }),
        );
        close(answer.pearsonSquares, scored.pearson, 1e-10);
        answer.binRows.forEach((rows, bin) => {
          if (rows === 0) {
            expect(answer.binPredicted[bin]).toBe(0);
            expect(answer.binObserved[bin]).toBe(0);
            return;
          }
          expect(rows).toBeGreaterThanOrEqual(CELL_ROWS_LEAST);
          if (spec.loss.kind !== 'logistic') return;
          for (const count of [answer.binObserved[bin], rows - answer.binObserved[bin]])
            expect(count === 0 || count >= CELL_ROWS_LEAST).toBe(true);
        });
        const wide = soundValue(
          quality(solvers.parts, { ...work, edges: new Float64Array(0), inverse: null }),
        );
        expect(wide.leverage).toBeNull();
        expect(wide.zeros === null).toBe(spec.loss.kind !== 'poisson');
        if (wide.binRows[0] > 0) close(wide.binPredicted[0], meanSum(site, point, {}), 1e-9);
      }),
      { numRuns: 60 },
    );
  });

  /** A site without terms but one, whose predictor is the column itself. */
  const plain = (
    y: readonly number[],
    eta: readonly number[],
    loss: LossForm['kind'] & ('squared' | 'logistic'),
  ) => {
    const spec = specification({ loss: { kind: loss }, intercept: 'none', terms: [numericTerm('a')] });
    const raw = soundValue(buildRawShard(spec, table({ y, a: eta })));
    const scaling = {
      rowCountTotal: y.length,
      kept: [0],
      center: new Float64Array(1),
      scale: Float64Array.of(1),
    };
    return siteSolvers(spec, raw, scaling).parts;
  };
  const asked = (edges: readonly number[]) => ({
    work: 'quality' as const,
    problem: 1,
    point: Float64Array.of(1),
    edges: Float64Array.from(edges),
    inverse: null,
    leverageHigh: 1,
  });

  test('an edge belongs to the bin above it', () => {
    const eta = [...Array(6).fill(1), ...Array(7).fill(2)];
    const answer = soundValue(quality(plain(eta, eta, 'squared'), asked([1, 2])));
    expect([...answer.binRows]).toEqual([0, 6, 7]);
    expect([...answer.binPredicted]).toEqual([0, 6, 14]);
  });

  test('a small bin takes another with it, so that it cannot be had from the totals', () => {
    const eta = [...Array(4).fill(1), ...Array(6).fill(2), ...Array(9).fill(3)];
    const answer = soundValue(quality(plain(eta, eta, 'squared'), asked([1.5, 2.5])));
    expect([...answer.binRows]).toEqual([0, 0, 9]);
    expect(answer.rowsSuppressed).toBe(10);
  });

  test('few events, or few without one, hide a bin of many rows', () => {
    const y = [...Array(20).fill(0), 1, 1, ...Array(10).fill(0), ...Array(10).fill(1), ...Array(12).fill(0)];
    const eta = [...Array(22).fill(-1), ...Array(20).fill(0), ...Array(12).fill(1)];
    const answer = soundValue(quality(plain(y, eta, 'logistic'), asked([-0.5, 0.5])));
    // the second bin goes too: two events alone would show by difference; no event at all shows nobody
    expect([...answer.binRows]).toEqual([0, 0, 12]);
    expect(answer.rowsSuppressed).toBe(42);
  });
});

describe("the site's own fit", () => {
  const fitOf = (site: Site) =>
    soundValue(
      siteFit(site.solvers.parts, { work: 'site-fit', problem: 1, start: new Float64Array(site.width) }),
    );

  test('is where the gradient is zero, with the curvature there', () => {
    fc.assert(
      fc.property(cases, (one) => {
        const site = siteOf({ ...one, rowCount: 60, loss: { kind: 'squared' } });
        const { fit } = fitOf(site);
        if (fit === null) throw new Error('sixty rows determine eight coefficients');
        expect(fit.undetermined).toEqual([]);
        const at = soundValue(site.solver.evaluate(fit.point, 'curvature'));
        for (const slope of at.gradient ?? []) expect(Math.abs(slope)).toBeLessThan(1e-11);
        expect(fit.curvature).toEqual(at.curvature);
        expect(fit.value).toBe(at.value);
      }),
      { numRuns: 30 },
    );
  });

  const small = (
    kind: 'logistic' | 'poisson' | 'squared',
    columns: { y: number[]; a: number[]; b: number[] },
    intercept: FitSpecification['intercept'] = 'shared',
  ) => {
    const spec = specification({ loss: { kind }, intercept, terms: [numericTerm('a'), numericTerm('b')] });
    const raw = soundValue(buildRawShard(spec, table(columns)));
    const scaling = {
      rowCountTotal: raw.rowCount,
      kept: [0, 1],
      center: Float64Array.of(0.3, 0.1),
      scale: Float64Array.of(1, 2),
    };
    const { parts } = siteSolvers(spec, raw, scaling);
    const start = new Float64Array(intercept === 'shared' ? 3 : 2);
    return soundValue(siteFit(parts, { work: 'site-fit', problem: 1, start }));
  };
  const varied = [0.1, 0.9, 0.4, 0.7, 0.2, 0.8, 0.5, 0.3];

  test('leaves out a column without spread and one that another repeats', () => {
    const y = [0, 1, 1, 0, 1, 0, 1, 0];
    for (const kind of ['squared', 'logistic', 'poisson'] as const) {
      const flat = small(kind, { y, a: varied, b: y.map(() => 4) });
      expect(flat.fit?.undetermined).toEqual([2]);
      expect(flat.fit?.point[2]).toBe(0);
      const twice = small(kind, { y, a: varied, b: varied.map((value) => 3 - 2 * value) }, 'per-site');
      expect(twice.fit?.undetermined).toEqual([1]);
      const alone = small(kind, { y, a: varied, b: y.map(() => 4) }, 'none');
      expect(alone.fit?.undetermined).toEqual([]);
    }
  });

  test('is none where the classes are separated, or nearly so, or a combination has no events', () => {
    const a = [1, 2, 3, 4, 5, 6, 7, 8];
    const b = varied;
    const separated = small('logistic', { y: [0, 0, 0, 0, 1, 1, 1, 1], a, b });
    expect(separated.fit).toBeNull();
    expect(separated.reason).toContain('separate');
    const nearly = small('logistic', { y: [0, 1, 0, 1, 0, 1, 1, 1], a: [0, 0, 0, 0, 0, 0, 1, 1], b });
    expect(nearly.fit).toBeNull();
    const none = small('poisson', { y: [2, 1, 3, 1, 2, 2, 0, 0], a: [0, 0, 0, 0, 0, 0, 1, 1], b });
    expect(none.fit).toBeNull();
    expect(none.reason).toContain('no events');
    const same = small('logistic', { y: a.map(() => 1), a, b }, 'per-site');
    expect(same.reason).toContain('same');
  });

  test('is none where there are not more rows than coefficients', () => {
    const few = small('squared', { y: [1, 2, 4], a: [1, 2, 3], b: [1, 4, 9] });
    expect(few.fit).toBeNull();
    expect(few.reason).toContain('3 rows');
  });
});
