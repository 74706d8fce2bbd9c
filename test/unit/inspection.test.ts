import { describe, expect, test } from 'vitest';
import { numbersOfAnswer } from '../../protocol/numbers.js';
import type { PossibleDeparture } from '../../worker/commands/departures.js';
import { type Inspection, inspectionOf } from '../../worker/commands/inspection.js';
import type { Policy, SiteFile } from '../../worker/custody/site-file.js';
import { buildRawShard } from '../../worker/design/build.js';
import { scaleShard } from '../../worker/design/scale.js';
import { localSolver } from '../../worker/local/local-solver.js';
import { lossOf } from '../../worker/losses/index.js';
import { OPEN_POLICY, SCALING, SITE, specification, TABLE } from '../support/worker-site.js';

const raw = (() => {
  const built = buildRawShard(specification(), TABLE);
  if (!built.ok) throw new Error(built.failure.message);
  return built.value;
})();

function inspected(
  quorum: number | 'all',
  policy: Policy = OPEN_POLICY,
  lines: readonly string[] = [],
): Inspection {
  const plain = specification(lines);
  const spec = { ...plain, barrier: { ...plain.barrier, quorum } };
  const site: SiteFile = {
    site: SITE,
    coordinator: { url: 'wss://fit.example', tokenFile: 'token', caFile: null, pairFiles: null },
    table: { kind: 'csv', path: 'pipes.csv' },
    shard: { index: 1, of: 1 },
    policy,
    file: 'castlefen.site.yaml',
  };
  const file = { file: 'breaks.fit.yaml', specification: spec, digest: 'a'.repeat(64) };
  return inspectionOf(site, file, new Set(), raw);
}

const departures = (...of: Parameters<typeof inspected>) => inspected(...of).departures;
const reads = (lines: readonly string[]) => inspected('all', OPEN_POLICY, lines).reads;

const late = (rows: readonly PossibleDeparture[]): PossibleDeparture[] =>
  rows.filter(({ times }) => times === 'where this site is late');

describe('what could leave a site that is late', () => {
  test('is listed where rounds may go on without it, with the numbers that its answer has', () => {
    expect(late(departures('all'))).toEqual([]);
    const zero = new Float64Array(3);
    const solver = localSolver(scaleShard(raw, SCALING, true), lossOf({ kind: 'poisson' }));
    const others = { curvature: Float64Array.of(1, 0, 1, 0, 0, 1), linear: zero };
    const joint = solver.joint(zero, others, zero, zero);
    if (!joint.ok) throw new Error(joint.failure.message);
    const numbers = numbersOfAnswer({ work: 'joint', problem: 0, ...joint.value });
    expect(late(departures(1))).toMatchObject([
      { numbers, kinds: ['proximal', 'gradients', 'curvature'], kept: null },
    ]);
  });

  test('needs two curvature matrices', () => {
    const kept = (curvatureMost: number): (string | null)[] =>
      late(departures(1, { ...OPEN_POLICY, curvatureMost })).map((row) => row.kept);
    expect([kept(1), kept(2)]).toEqual([['policy.curvature-most is 1'], [null]]);
  });
});

describe('what a report makes leave', () => {
  const reported = (lines: readonly string[], policy = OPEN_POLICY) =>
    departures('all', policy, lines).filter(({ rung }) => rung === 'report');

  test('is listed part by part, with the kinds that the policy must name', () => {
    expect(reported([])).toEqual([]);
    const all = 'report: [sandwich: {cluster: zone}, margins, compare-sites, fit-quality]';
    expect(reported([all]).map(({ kinds, kept }) => [kinds, kept])).toEqual([
      [['gradients', 'curvature'], null],
      [['gradients'], null],
      [['site-estimates'], 'policy.leave has no site-estimates'],
      [['residual-bins'], 'policy.leave has no residual-bins'],
    ]);
  });

  test('has the numbers that the answer has', () => {
    const vector = (length: number) => new Float64Array(length);
    const scores = {
      ...{ work: 'scores' as const, problem: 0, gradient: vector(3), clusterCount: 2, pearson: 1 },
      ...{ meat: vector(6), clustered: vector(6) },
    };
    const fit = { point: vector(3), value: 1, curvature: vector(6), undetermined: [], pearson: 1 };
    const [clustered, own] = reported(['report: [sandwich: {cluster: zone}, compare-sites]']);
    const [plain] = reported(['report: [sandwich]']);
    expect(clustered?.numbers).toBe(numbersOfAnswer(scores));
    expect(plain?.numbers).toBe(numbersOfAnswer({ ...scores, clustered: null }));
    expect(own?.numbers).toBe(numbersOfAnswer({ work: 'site-fit', problem: 0, fit, reason: null }));
  });

  test('without a matrix where none may leave', () => {
    const kept = reported(['report: [sandwich]'], { ...OPEN_POLICY, curvatureMost: 0 }).map(
      (row) => row.kept,
    );
    expect(kept).toEqual(['policy.curvature-most is 0']);
  });

  test('reads the columns that folds and clusters go by, as labels', () => {
    const lines = [
      'penalty: [{kind: lasso, lambda: [1, 0.1]}]',
      'choose: {folds: {column: year}}',
      'report: [sandwich: {cluster: zone}]',
    ];
    expect(reads(lines).slice(-2)).toEqual([
      { column: 'year', role: 'fold', type: 'any value, as a label', allowed: true },
      { column: 'zone', role: 'cluster', type: 'any value, as a label', allowed: true },
    ]);
  });
});
