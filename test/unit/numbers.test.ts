import { expect, test } from 'vitest';
import {
  curvatureMatricesOf,
  numbersOfAnswer,
  numbersOfWork,
  sketchColumnsOf,
} from '../../protocol/numbers.js';
import { answer, ask } from '../support/messages.js';

test('numbers of an ask: vectors sent, scale and hold; nothing for what is left out', () => {
  // survey; (1 + 3 · 2) + (1 + 2); 4 points of 2, hold and 2 directions of 2; one point of 2; factor; 4 · 2 + 3
  expect(ask.work.map(numbersOfWork)).toEqual([0, 10, 13, 2, 0, 11]);
});

test('numbers of an answer: everything that depends on the rows', () => {
  // 2 counts, 2 · 2 moments, 6 sums; 2 · (2 + 1); 1 + 3 + 5 + 8 at the points, 3 + 2 and a sketch of 2 · 2; one value; 6;
  // 2 · (1 + 2 + 3) + 2 + 1
  expect(answer.work.map(numbersOfAnswer)).toEqual([12, 6, 26, 1, 6, 15]);
});

test('curvature matrices: points that want one, the own fit, the factor, both ends of a joint step', () => {
  expect(ask.work.map(curvatureMatricesOf)).toEqual([0, 0, 2, 0, 1, 2]);
});

test('sketched columns: one for each direction', () => {
  expect(ask.work.map(sketchColumnsOf)).toEqual([0, 0, 2, 0, 0, 0]);
});
