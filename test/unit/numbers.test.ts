import { expect, test } from 'vitest';
import {
  curvatureMatricesOf,
  numbersOfAnswer,
  numbersOfWork,
  sketchColumnsOf,
} from '../../protocol/numbers.js';
import { answer, ask } from '../support/messages.js';

test('numbers of an ask: vectors sent, scale and hold; nothing for what is left out', () => {
  // survey; (1 + 3 · 2) + (1 + 2); 4 points of 2, hold and 2 directions of 2; one point of 2; factors; 4 · 2 + 3; a point
  // each; point, 2 edges, inverse of 3 and a bound; point and bound
  expect(ask.work.map(numbersOfWork)).toEqual([0, 10, 13, 2, 0, 11, 2, 2, 2, 2, 2, 8, 3]);
});

test('numbers of an answer: everything that depends on the rows', () => {
  // 2 counts, 2 · 2 moments, 6 sums, and 1 + 2 · 2 + 6 in each of 2 folds; 2 · (2 + 1); 1 + 3 + 5 + 8 at the points, 3 + 2
  // and a sketch of 2 · 2; one value; 2 · 6; 2 · (1 + 2 + 3) + 2 + 1
  expect(answer.work.slice(0, 6).map(numbersOfAnswer)).toEqual([34, 6, 26, 1, 12, 15]);
  // 2 + 3 + 3, clusters and a sum; 2, clusters and a sum; 2, value, 3, one index and a sum; no fit; rows and 2 · (1 + 2);
  // 3 · 3 in bins, 2 counts, 2 sums, 3 of leverages and 2 of zeros; 3 · 1, 2 counts, 2 sums
  expect(answer.work.slice(6).map(numbersOfAnswer)).toEqual([10, 4, 8, 0, 7, 18, 7]);
});

test('curvature matrices: points that want one, own fits, every factor, both ends of a joint step, score products', () => {
  expect(ask.work.map(curvatureMatricesOf)).toEqual([0, 0, 2, 0, 2, 2, 2, 0, 1, 1, 0, 0, 0]);
  expect(curvatureMatricesOf({ work: 'factor', folds: [] })).toBe(1);
});

test('sketched columns: one for each direction', () => {
  expect(ask.work.map(sketchColumnsOf)).toEqual([0, 0, 2, ...new Array(10).fill(0)]);
});
