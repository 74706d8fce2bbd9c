import { describe, expect, test } from 'vitest';
import { checkAnswer } from '../../protocol/check-answer.js';
import { checkAsk } from '../../protocol/check-ask.js';
import type { Answer, Ask } from '../../protocol/messages/round.js';
import type { SurveyAnswer } from '../../protocol/messages/survey.js';
import { answer, ask } from '../support/messages.js';

/** `value` with the member at the path replaced; the original is left alone. */
function changed<T>(value: T, path: readonly (string | number)[], member: unknown): T {
  const copy = structuredClone(value);
  let at = copy as Record<string | number, unknown>;
  for (const step of path.slice(0, -1)) at = at[step] as Record<string | number, unknown>;
  at[path[path.length - 1]] = member;
  return copy;
}

const vector = (length: number): Float64Array => new Float64Array(length);

describe('checkAsk', () => {
  test('an ask of the right lengths may be computed', () => {
    expect(checkAsk(ask, 2)).toBeNull();
  });

  test('only a survey may be asked before the scaling is known', () => {
    const survey: Ask = { ...ask, work: [{ work: 'survey' }] };
    const factor: Ask = { ...ask, work: [{ work: 'survey' }, { work: 'factor', folds: [] }] };
    expect(checkAsk(survey, null)).toBeNull();
    expect(checkAsk(factor, null)).toMatchObject({ code: 'dimension-wrong', where: { field: 'work[1]' } });
  });

  test.each([
    [['work', 1, 'problems', 0, 'center'], vector(3)],
    [['work', 1, 'problems', 0, 'diagonal'], vector(1)],
    [['work', 1, 'problems', 0, 'start'], vector(0)],
    [['work', 2, 'points', 3, 'point'], vector(3)],
    [['work', 2, 'ownFit', 'at'], 4],
    [['work', 2, 'sketch', 'at'], 4],
    [['work', 2, 'sketch', 'directions'], vector(2)],
    [['work', 2, 'sketch', 'columns'], 3],
    [['work', 1, 'problems', 1, 'problem'], 0],
    [['work', 5, 'start'], vector(3)],
    [['work', 5, 'curvature'], vector(2)],
    [['work', 5, 'linear'], vector(1)],
    [['work', 5, 'l1'], vector(3)],
    [['work', 5, 'l2'], vector(1)],
    [['work', 5, 'l1'], Float64Array.of(0.1, -1e-9)],
    [['work', 5, 'l2'], Float64Array.of(-1, 0)],
    [
      ['work', 4, 'folds'],
      ['1', '1'],
    ],
    [['work', 6, 'point'], vector(3)],
    [['work', 8, 'start'], vector(1)],
    [['work', 10, 'point'], vector(1)],
    [['work', 11, 'point'], vector(3)],
    [['work', 11, 'inverse'], vector(2)],
    [['work', 11, 'edges'], Float64Array.of(0.5, -1)],
    [['work', 11, 'edges'], Float64Array.of(0.5, 0.5)],
  ])('dimension-wrong where %j does not fit', (path, member) => {
    expect(checkAsk(changed(ask, path, member), 2)?.code).toBe('dimension-wrong');
  });

  test.each([
    ['a diagonal of no ask', 'diagonalAsk', 0],
    ['a diagonal of a later ask', 'diagonalAsk', 8],
    ['a start of no ask', 'startAsk', 0],
    ['a start that would be this ask’s own answer', 'startAsk', 7],
  ])('memory-missing for %s', (_, field, number) => {
    const wrong = changed(ask, ['work', 1, 'problems', 1, field], number);
    expect(checkAsk(wrong, 2)?.code).toBe('memory-missing');
  });

  test('an ask sent again may leave out the diagonal it brought itself', () => {
    expect(checkAsk(changed(ask, ['work', 1, 'problems', 1, 'diagonalAsk'], 7), 2)).toBeNull();
  });
});

describe('checkAnswer', () => {
  test('an answer item by item of the right lengths is one', () => {
    expect(checkAnswer(ask, answer, 2)).toBeNull();
  });

  test.each<[readonly (string | number)[], unknown]>([
    [['run'], 'r2'],
    [['ask'], 6],
    [['work'], answer.work.slice(0, -1)],
    [['work'], [...answer.work, answer.work[5]]],
    [['work', 0], answer.work[1]],
    [['work', 4], answer.work[0]],
    [['work', 1, 'problems', 0, 'problem'], 1],
    [['work', 1, 'problems'], []],
    [['work', 2, 'problem'], 1],
    [['work', 3, 'points'], []],
    [['work', 2, 'points', 0, 'gradient'], vector(2)],
    [['work', 2, 'points', 1, 'gradient'], null],
    [['work', 2, 'points', 1, 'diagonal'], vector(2)],
    [['work', 2, 'points', 2, 'curvature'], vector(3)],
    [['work', 2, 'points', 3, 'diagonal'], null],
    [['work', 2, 'points', 3, 'curvature'], null],
    [['work', 2, 'ownFit'], null],
    [['work', 3, 'ownFit'], { curvature: vector(3), linear: vector(2) }],
    [['work', 2, 'sketch'], null],
    [['work', 3, 'sketch'], vector(2)],
    [['work', 5, 'problem'], 0],
    [['work', 5], answer.work[4]],
    [['work', 4, 'factors'], [vector(6)]],
    [['work', 6, 'problem'], 0],
    [['work', 6, 'meat'], null],
    [['work', 6, 'clustered'], null],
    [['work', 7, 'meat'], vector(3)],
    [['work', 7, 'clustered'], vector(3)],
    [['work', 8, 'problem'], 5],
    [['work', 8, 'reason'], 'a fit and a reason'],
    [['work', 9, 'reason'], null],
    [['work', 10, 'problem'], 0],
    [['work', 10, 'settings'], [{ sum: 0, gradient: vector(2) }]],
    [['work', 11, 'problem'], 0],
    [['work', 11, 'leverage'], null],
    [['work', 12, 'leverage'], { sum: 0, most: 0, rowsHigh: 0 }],
  ])('answer-unasked where %j is not what was asked', (path, member) => {
    const wrong: Answer = changed(answer, path, member);
    expect(checkAnswer(ask, wrong, 2)?.code).toBe('answer-unasked');
  });

  test.each([
    [['work', 0, 'mean'], vector(3)],
    [['work', 0, 'centredSquares'], vector(1)],
    [['work', 1, 'problems', 1, 'point'], vector(3)],
    [['work', 2, 'points', 1, 'gradient'], vector(1)],
    [['work', 2, 'points', 2, 'diagonal'], vector(3)],
    [['work', 2, 'points', 3, 'curvature'], vector(4)],
    [['work', 2, 'ownFit', 'curvature'], vector(2)],
    [['work', 2, 'ownFit', 'linear'], vector(3)],
    [['work', 2, 'sketch'], vector(2)],
    [['work', 4, 'factors', 1], vector(3)],
    [['work', 0, 'folds', 1, 'mean'], vector(3)],
    [['work', 0, 'folds', 0, 'centredSquares'], vector(1)],
    [['work', 6, 'gradient'], vector(3)],
    [['work', 6, 'meat'], vector(2)],
    [['work', 6, 'clustered'], vector(4)],
    [['work', 8, 'fit', 'point'], vector(3)],
    [['work', 8, 'fit', 'curvature'], vector(2)],
    [['work', 8, 'fit', 'undetermined'], [2]],
    [
      ['work', 8, 'fit', 'undetermined'],
      [1, 0],
    ],
    [['work', 10, 'settings', 1, 'gradient'], vector(1)],
    [['work', 11, 'binRows'], vector(2)],
    [['work', 11, 'binPredicted'], vector(4)],
    [['work', 11, 'binObserved'], vector(2)],
    [['work', 12, 'binRows'], vector(0)],
    [['work', 5, 'start', 'gradient'], vector(3)],
    [['work', 5, 'start', 'curvature'], vector(2)],
    [['work', 5, 'point'], vector(1)],
    [['work', 5, 'end', 'gradient'], vector(1)],
    [['work', 5, 'end', 'curvature'], vector(4)],
  ])('dimension-wrong where %j has another length', (path, member) => {
    expect(checkAnswer(ask, changed(answer, path, member), 2)?.code).toBe('dimension-wrong');
  });

  test.each<[string, readonly (string | number)[], unknown]>([
    ['out of order', ['work', 0, 'folds', 0, 'fold'], '3'],
    ['with a label twice', ['work', 0, 'folds', 0, 'fold'], '2'],
    ['that hold fewer rows than are used', ['work', 0, 'folds', 0, 'rowsUsed'], 179],
  ])('folds %s are refused', (_, path, member) => {
    expect(checkAnswer(ask, changed(answer, path, member), 2)?.code).toBe('dimension-wrong');
  });

  test('a site that has no row in a fold may leave it out', () => {
    const { folds } = answer.work[0] as SurveyAnswer;
    const one = changed(answer, ['work', 0, 'folds'], [{ ...folds[0], rowsUsed: 300 }]);
    expect(checkAnswer(ask, one, 2)).toBeNull();
    expect(checkAnswer(ask, changed(answer, ['work', 0, 'folds'], []), 2)).toBeNull();
  });

  test('a survey needs no scaling, other work does', () => {
    const only = (index: number): [Ask, Answer] => [
      { ...ask, work: [ask.work[index]] },
      { ...answer, work: [answer.work[index]] },
    ];
    expect(checkAnswer(...only(0), null)).toBeNull();
    expect(checkAnswer(...only(4), null)?.code).toBe('dimension-wrong');
  });

  test('names the field', () => {
    const wrong = changed(answer, ['work', 2, 'points', 3, 'curvature'], vector(4));
    expect(checkAnswer(ask, wrong, 2)).toMatchObject({
      where: { field: 'work[2].points[3].curvature' },
      message: expect.stringContaining('3 are expected'),
    });
  });
});
