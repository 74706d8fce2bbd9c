import { describe, expect, test } from 'vitest';
import type { EvaluateWork, Want } from '../../protocol/messages/evaluate.js';
import type { Work } from '../../protocol/messages/round.js';
import {
  addCurvature,
  allowanceOf,
  checkNumbers,
  checkRows,
  checkSpecification,
  checkWorks,
  curvatureOfWorks,
  type Departed,
  NOTHING_DEPARTED,
} from '../../worker/custody/policy.js';
import type { Policy } from '../../worker/custody/site-file.js';
import { OPEN_POLICY, specification } from '../support/worker-site.js';

const DIGEST = 'a'.repeat(64);
/** Solver columns of the fit. */
const P = 10;
const policyWith = (more: Partial<Policy>): Policy => ({ ...OPEN_POLICY, ...more });

const survey: Work = { work: 'survey' };
const factor: Work = { work: 'factor', folds: [] };
const proximal: Work = {
  work: 'proximal',
  problems: [
    {
      problem: 0,
      part: null,
      center: Float64Array.of(0),
      scale: 1,
      diagonal: Float64Array.of(1),
      diagonalAsk: 1,
      start: Float64Array.of(0),
      startAsk: 1,
    },
  ],
};
const evaluate = (want: Want, more: Partial<EvaluateWork> = {}): Work => ({
  work: 'evaluate',
  problem: 0,
  part: null,
  points: [{ point: Float64Array.of(0), want }],
  ownFit: null,
  sketch: null,
  ...more,
});

const joint = (problem = 0): Work => {
  const one = Float64Array.of(1);
  return { work: 'joint', problem, start: one, curvature: one, linear: one, l1: one, l2: one };
};

const POINT = Float64Array.of(0);
const scores = (meat: boolean, clustered: boolean): Work => ({
  work: 'scores',
  problem: 0,
  point: POINT,
  meat,
  clustered,
});
const siteFit: Work = { work: 'site-fit', problem: 0, start: POINT };
const margins: Work = {
  work: 'margins',
  problem: 0,
  point: POINT,
  settings: [{ set: 'slope', column: 'age_years' }],
};
const quality: Work = {
  work: 'quality',
  problem: 0,
  point: POINT,
  edges: POINT,
  inverse: null,
  leverageHigh: 1,
};

const sketch = (columns: number, problem = 0): Work =>
  evaluate('gradient', { problem, sketch: { at: 0, directions: new Float64Array(columns), columns } });

/** What has left after these asks were answered. */
const departedAfter = (...asks: Work[][]): Departed => ({
  asks: asks.length,
  numbers: 0,
  curvature: asks.map(curvatureOfWorks).reduce(addCurvature, NOTHING_DEPARTED.curvature),
});

const codeFor = (policy: Policy, departed: Departed, works: Work[], fits = 1): string | null =>
  checkWorks(policy, departed, works, { fits, columns: P })?.code ?? null;

describe('columns and approval', () => {
  test('a column that the policy does not list is named, with the part it plays', () => {
    const policy = policyWith({ columns: ['breaks', 'km_years', 'age_years'] });
    const failure = checkSpecification(policy, specification(), DIGEST, new Set());
    expect(failure).toMatchObject({ code: 'policy-column', where: { column: 'pressure_bar' } });
    expect(failure?.message).toContain('pressure_bar (as term)');
  });

  test.each([
    ['response', 'breaks'],
    ['exposure', 'km_years'],
    ['term', 'age_years'],
  ])('the %s column needs a permission like any other', (_role, column) => {
    const columns = ['breaks', 'km_years', 'age_years', 'pressure_bar'].filter((name) => name !== column);
    const failure = checkSpecification(policyWith({ columns }), specification(), DIGEST, new Set());
    expect(failure?.where?.column).toBe(column);
  });

  test('the weights column needs a permission', () => {
    const spec = specification(['weights: {column: w}']);
    const columns = ['breaks', 'km_years', 'age_years', 'pressure_bar'];
    expect(checkSpecification(policyWith({ columns }), spec, DIGEST, new Set())?.where?.column).toBe('w');
  });

  test('where approvals are listed, only a listed digest is let in', () => {
    const policy = policyWith({ approvals: 'listed' });
    expect(checkSpecification(policy, specification(), DIGEST, new Set(['b'.repeat(64)]))?.code).toBe(
      'policy-approval',
    );
    expect(checkSpecification(policy, specification(), DIGEST, new Set([DIGEST]))).toBeNull();
  });
});

describe('rows', () => {
  test('rows-least is the least number that is let in', () => {
    expect(checkRows(policyWith({ rowsLeast: 50 }), 49)?.code).toBe('policy-rows');
    expect(checkRows(policyWith({ rowsLeast: 50 }), 50)).toBeNull();
  });
});

describe('kinds of answer', () => {
  test.each<[string, Work, Policy['leave']]>([
    ['a survey', survey, ['counts', 'moments']],
    ['a proximal point', proximal, ['proximal']],
    ['a value', evaluate('value'), ['gradients']],
    ['a gradient', evaluate('gradient'), ['gradients']],
    ['a diagonal', evaluate('diagonal'), ['gradients']],
    ['a curvature matrix', evaluate('curvature'), ['gradients', 'curvature']],
    ['a fit of its own', evaluate('value', { ownFit: { at: 0, hold: 0.3 } }), ['gradients', 'curvature']],
    ['a sketch', sketch(3), ['gradients', 'sketches']],
    ['a joint step', joint(), ['proximal', 'gradients', 'curvature']],
    ['a factor', factor, ['curvature']],
    ['scores', scores(false, false), ['gradients']],
    ['score products', scores(true, false), ['gradients', 'curvature']],
    ['score products by cluster', scores(false, true), ['gradients', 'curvature']],
    ['the site’s own fit', siteFit, ['site-estimates']],
    ['margins', margins, ['gradients']],
    ['binned responses', quality, ['residual-bins']],
  ])('%s leaves with its kinds and with none of them missing', (_name, work, kinds) => {
    expect(codeFor(policyWith({ leave: kinds }), NOTHING_DEPARTED, [work])).toBeNull();
    for (const kind of kinds) {
      const leave = kinds.filter((other) => other !== kind);
      expect(codeFor(policyWith({ leave }), NOTHING_DEPARTED, [work])).toBe('policy-kind');
    }
  });

  test('one forbidden item refuses the whole ask', () => {
    const policy = policyWith({ leave: ['counts', 'moments', 'gradients'] });
    expect(codeFor(policy, NOTHING_DEPARTED, [evaluate('gradient'), proximal])).toBe('policy-kind');
  });
});

describe('curvature matrices', () => {
  const three = policyWith({ curvatureMost: 3 });
  const one = [evaluate('curvature')];

  test('as many as the policy says leave, and not one more', () => {
    expect(codeFor(three, departedAfter(one, one), one)).toBeNull();
    expect(codeFor(three, departedAfter(one, one, one), one)).toBe('policy-curvature');
  });

  test('a fit of its own and every point of an ask count', () => {
    const point = { point: Float64Array.of(0), want: 'curvature' as const };
    const four = evaluate('curvature', { points: [point, point, point], ownFit: { at: 0, hold: 0.3 } });
    expect(codeFor(three, NOTHING_DEPARTED, [four])).toBe('policy-curvature');
  });

  test('a joint step counts both of its ends, for its own fit', () => {
    expect(codeFor(three, departedAfter(one), [joint()])).toBeNull();
    expect(codeFor(three, departedAfter(one, one), [joint()])).toBe('policy-curvature');
    expect(codeFor(three, departedAfter(one, one), [joint(1)], 2)).toBeNull();
  });

  test('what needs no matrix goes on leaving after the last one', () => {
    expect(codeFor(three, departedAfter(one, one, one), [proximal])).toBeNull();
  });

  test('none means none, the factor included', () => {
    expect(codeFor(policyWith({ curvatureMost: 0 }), NOTHING_DEPARTED, [factor])).toBe('policy-curvature');
  });

  test('every fit of a run adds an allowance, whichever problem number its matrices go by', () => {
    const other = [evaluate('curvature', { problem: 1 })];
    expect(codeFor(three, departedAfter(one, one, one), other, 2)).toBeNull();
    expect(codeFor(three, departedAfter(one, one, one, one, one), one, 2)).toBeNull();
    expect(codeFor(three, departedAfter(one, one, one, one, one, one), one, 2)).toBe('policy-curvature');
    expect(codeFor(three, departedAfter(one, one, one, other, other, other), other, 2)).toBe(
      'policy-curvature',
    );
  });

  test('problem numbers beyond the fits of the specification gain nothing', () => {
    const other = [evaluate('curvature', { problem: 999 })];
    expect(codeFor(three, departedAfter(one, one, one), other, 1)).toBe('policy-curvature');
  });

  test('a factor counts as one, and one for each fold', () => {
    expect(codeFor(three, departedAfter([factor], one), one)).toBeNull();
    expect(codeFor(three, departedAfter([factor], one, one), one)).toBe('policy-curvature');
    const folds: Work = { work: 'factor', folds: ['1', '2', '3', '4'] };
    expect(codeFor(three, NOTHING_DEPARTED, [folds])).toBe('policy-curvature');
    expect(codeFor(three, NOTHING_DEPARTED, [folds], 2)).toBeNull();
  });

  test('score products and the site’s own fit count', () => {
    const open = policyWith({ curvatureMost: 3, leave: [...OPEN_POLICY.leave, 'site-estimates'] });
    expect(codeFor(open, departedAfter(one), [scores(true, true)])).toBeNull();
    expect(codeFor(open, departedAfter(one, one), [scores(true, true)])).toBe('policy-curvature');
    expect(codeFor(open, departedAfter(one, one), [scores(true, false)])).toBeNull();
    expect(codeFor(open, departedAfter(one, one, one), [scores(false, false), margins])).toBeNull();
    expect(codeFor(open, departedAfter(one, one, one), [siteFit])).toBe('policy-curvature');
  });
});

describe('sketched columns', () => {
  const three = policyWith({ curvatureMost: 3, leave: ['gradients', 'sketches'] });

  test('p of them count as one curvature matrix, begun or full', () => {
    expect(codeFor(three, departedAfter([sketch(8)], [sketch(8)], [sketch(8)]), [sketch(6)])).toBeNull();
    expect(codeFor(three, departedAfter([sketch(8)], [sketch(8)], [sketch(8)]), [sketch(7)])).toBe(
      'policy-curvature',
    );
  });

  test('count beside whole matrices', () => {
    const open = policyWith({ curvatureMost: 3, leave: ['gradients', 'sketches', 'curvature'] });
    const two = [evaluate('curvature'), evaluate('curvature')];
    expect(codeFor(open, departedAfter(two), [sketch(10)])).toBeNull();
    expect(codeFor(open, departedAfter(two), [sketch(11)])).toBe('policy-curvature');
    expect(codeFor(open, departedAfter(two, [sketch(1)]), [evaluate('curvature')])).toBe('policy-curvature');
  });

  test('each fit has its own allowance, problem numbers beyond the fits gain nothing', () => {
    const full = departedAfter([sketch(30)]);
    expect(codeFor(three, full, [sketch(30, 1)], 2)).toBeNull();
    expect(codeFor(three, full, [sketch(1, 999)], 1)).toBe('policy-curvature');
  });

  test('are without a count where curvature has no limit, and do not leave where it may not', () => {
    const leave: Policy['leave'] = ['gradients', 'sketches'];
    expect(codeFor(policyWith({ leave }), departedAfter([sketch(500)]), [sketch(500)])).toBeNull();
    expect(codeFor(policyWith({ leave, curvatureMost: 0 }), NOTHING_DEPARTED, [sketch(1)])).toBe(
      'policy-curvature',
    );
  });
});

describe('numbers and rounds', () => {
  test('numbers of a run add up to the limit and no further', () => {
    const policy = policyWith({ numbersMost: 100 });
    expect(checkNumbers(policy, { ...NOTHING_DEPARTED, numbers: 90 }, 10)).toBeNull();
    expect(checkNumbers(policy, { ...NOTHING_DEPARTED, numbers: 90 }, 11)?.code).toBe('policy-numbers');
  });

  test('asks of a run are counted up to the limit', () => {
    const policy = policyWith({ roundsMost: 2 });
    expect(codeFor(policy, departedAfter([proximal]), [proximal])).toBeNull();
    expect(codeFor(policy, departedAfter([proximal], [proximal]), [proximal])).toBe('policy-rounds');
  });
});

test('the allowance tells the coordinator the limits, null where there is none', () => {
  const policy = policyWith({ leave: ['counts', 'moments', 'proximal'], curvatureMost: 0, roundsMost: 7 });
  expect(allowanceOf(policy)).toEqual({
    leave: ['counts', 'moments', 'proximal'],
    curvatureMost: 0,
    numbersMost: null,
    roundsMost: 7,
  });
});
