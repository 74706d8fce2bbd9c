import { describe, expect, test } from 'vitest';
import type { Member } from '../../coordinator/run/run.js';
import { chooseRung, type RungChoice } from '../../coordinator/run/rung.js';
import type { PooledSurvey } from '../../coordinator/run/survey.js';
import type { Allowance, SurveyAnswer } from '../../protocol/messages/survey.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { breaksWith, parsedValue } from '../support/specifications.js';

const P = 50;
const roster: Member[] = ['harrowmere', 'castlefen'].map((site) => ({
  site,
  shard: { index: 1, of: 1 },
  kernel: 'here',
}));

const OPEN: Allowance = {
  leave: ['counts', 'moments', 'proximal', 'gradients', 'curvature', 'sketches'],
  curvatureMost: null,
  numbersMost: null,
  roundsMost: null,
};
const without = (kind: Allowance['leave'][number], more: Partial<Allowance> = {}): Allowance => ({
  ...OPEN,
  leave: OPEN.leave.filter((other) => other !== kind),
  ...more,
});

function surveyed(allowances: readonly Allowance[]): PooledSurvey {
  const response = {
    weightSum: 2,
    weightedSum: 1,
    exposureSum: 2,
    least: 0,
    most: 1,
    saturatedLoss: 0,
  };
  const answers = allowances.map(
    (allowance): SurveyAnswer => ({
      work: 'survey',
      rowsUsed: 100,
      rowsDropped: 0,
      columns: [],
      mean: new Float64Array(),
      centredSquares: new Float64Array(),
      response,
      folds: [],
      allowance,
      notes: [],
    }),
  );
  const sites = roster.map(({ site }) => ({ site, rowsUsed: 100, rowsDropped: 0 }));
  const none = new Float64Array();
  return {
    rowsTotal: 200,
    sites,
    columns: [],
    mean: none,
    sd: none,
    response,
    folds: [],
    answers,
    agesMs: [10, 10],
    notes: [],
  };
}

/** The choice where castlefen has this policy and harrowmere an open one. */
function choice(allowance: Allowance, rung = 'highest', loss = 'poisson', p = P): RungChoice {
  const lines = { 5: `loss: ${loss}`, 6: '', 14: `rounds: {rung: ${rung}}` };
  const specification = parsedValue(parseFitSpecification(breaksWith(lines), 'breaks.fit.yaml'));
  const chosen = chooseRung(specification, surveyed([OPEN, allowance]), roster, p);
  if ('outcome' in chosen) expect.unreachable(chosen.reason);
  return chosen;
}

describe('the sketched rung is taken', () => {
  test('where sketches may leave and no curvature matrix may', () => {
    expect(choice(without('curvature'))).toMatchObject({
      rung: 'sketched',
      reason: 'castlefen lets no curvature matrix leave',
      sketch: { columns: 8, columnsMost: Number.POSITIVE_INFINITY },
    });
    expect(choice(without('curvature'), 'highest', 'squared').rung).toBe('sketched');
  });

  test('where one matrix may: its worth of columns is spread over ten rounds', () => {
    expect(choice({ ...OPEN, curvatureMost: 1 })).toMatchObject({
      rung: 'sketched',
      sketch: { columns: 5, columnsMost: 50 },
    });
  });

  test('where the specification asks for it, though curvature has no limit', () => {
    expect(choice(OPEN, 'sketched')).toMatchObject({
      rung: 'sketched',
      reason: 'the specification asks for no rung above it',
    });
  });

  test('where proximal points may not leave', () => {
    expect(choice(without('proximal', { curvatureMost: 3 })).rung).toBe('sketched');
  });
});

describe('another rung is taken', () => {
  test('curvature, where it has no limit', () => {
    expect(choice(OPEN).rung).toBe('curvature');
  });

  test('proximal, where matrices enough may leave to lead it by models of the sites', () => {
    expect(choice({ ...OPEN, curvatureMost: 2 }).rung).toBe('proximal');
  });

  test('proximal, where the specification asks for no rung above it', () => {
    expect(choice(without('curvature'), 'proximal').rung).toBe('proximal');
  });

  test('proximal, where a site lets no sketch leave, and says so if the sketched rung was asked for', () => {
    expect(choice(without('sketches'), 'sketched')).toMatchObject({
      rung: 'proximal',
      reason: 'castlefen does not let sketches and gradients leave',
      sketch: { columns: 0, columnsMost: 0 },
    });
    expect(choice({ ...OPEN, curvatureMost: 0 }, 'highest').rung).toBe('proximal');
  });
});

describe('directions a round', () => {
  test('are a tenth of the columns where there are many, no more than the columns where there are few', () => {
    expect(choice(without('curvature'), 'highest', 'poisson', 200).sketch.columns).toBe(20);
    expect(choice(without('curvature'), 'highest', 'poisson', 5).sketch.columns).toBe(5);
  });

  test('keep sixty rounds within the numbers that are left after the survey', () => {
    const survey = 8;
    const round = (m: number): number => (m + 4) * P + 7;
    const limit = (numbersMost: number): RungChoice => choice(without('curvature', { numbersMost }));
    expect(limit(survey + 60 * round(6)).sketch.columns).toBe(6);
    expect(limit(survey + 60 * round(6) - 1).sketch.columns).toBe(5);
  });

  test('too few for the columns: the proximal rung, and the reason names the site', () => {
    expect(choice(without('curvature', { numbersMost: 60 * (4 * P + 7 + 4 * P) + 8 }))).toMatchObject({
      rung: 'proximal',
      reason:
        'castlefen lets no curvature matrix leave, and 50 columns need more than the 4 directions of curvature a round that castlefen allows',
    });
  });
});
