import { describe, expect, test } from 'vitest';
import { lessSpent, Spending } from '../../coordinator/run/spending.js';
import type { PooledSurvey } from '../../coordinator/run/survey.js';
import type { Work } from '../../protocol/messages/round.js';

const evaluate = (want: 'gradient' | 'curvature', problem = 0): Work => ({
  work: 'evaluate',
  problem,
  part: null,
  points: [{ point: new Float64Array(4), want }],
  ownFit: null,
  sketch: null,
});

describe('what a member has spent before a fit begins again', () => {
  test('matrices count over all fits together, whichever problem an ask names', () => {
    const spending = new Spending();
    spending.add([evaluate('curvature'), evaluate('curvature', 1), evaluate('gradient')], null);
    spending.add([evaluate('curvature', 1)], null);
    expect(spending.spent()).toEqual({ matrices: 3, numbers: 0 });
    spending.add([{ work: 'factor', folds: [] }], [{ work: 'factor', factors: [new Float64Array(15)] }]);
    expect(spending.spent()).toEqual({ matrices: 4, numbers: 15 });
  });

  test('as many sketched columns as the point is long count as a matrix', () => {
    const spending = new Spending();
    const sketch = { at: 0, columns: 3, directions: new Float64Array(12) };
    const [work] = [evaluate('gradient')];
    if (work.work !== 'evaluate') throw new Error('not reached');
    spending.add([{ ...work, sketch }], null);
    expect(spending.spent().matrices).toBe(0.75);
    spending.add([{ ...work, sketch }], null);
    expect(spending.spent().matrices).toBe(1.5);
  });

  test('is taken from what the site allows, never below nothing, and said; without a limit nothing changes', () => {
    const allowing = (curvatureMost: number | null) => ({
      allowance: { leave: [], curvatureMost, numbersMost: 100, roundsMost: null },
    });
    const survey = {
      answers: [allowing(3), allowing(1), allowing(null)],
      notes: [],
    } as unknown as PooledSurvey;
    const roster = ['harrowmere', 'castlefen', 'oakhythe'].map((site) => ({
      site,
      shard: { index: 1, of: 1 },
      kernel: 'k',
    }));
    const spent = [
      { matrices: 3.5, numbers: 30 },
      { matrices: 4, numbers: 130 },
      { matrices: 4, numbers: 0 },
    ];
    const left = lessSpent(survey, roster, spent, 2);
    expect(left.answers.map(({ allowance }) => [allowance.curvatureMost, allowance.numbersMost])).toEqual([
      [1, 70],
      [0, 0],
      [null, 100],
    ]);
    expect(left.notes).toHaveLength(2);
    expect(left.notes[0]).toMatch(
      /^harrowmere lets 3 curvature matrices a fit leave; up to 2 of them had left/,
    );
  });
});
