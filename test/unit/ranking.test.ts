import { expect, test } from 'vitest';
import { rankingOf } from '../../coordinator/run/fit-quality.js';

const site = (rows: number[], observed: number[]) => ({
  binRows: Float64Array.from(rows),
  binPredicted: Float64Array.from(rows),
  binObserved: Float64Array.from(observed),
  rowsSuppressed: 0,
});

test('the area under the ranking curve counts pairs in the right order, and ties within a bin as half', () => {
  // bins from low to high prediction over two sites: 10 rows with 1 event, 10 rows with 4, 5 rows with 5
  const ranking = rankingOf([site([6, 4, 0], [1, 1, 0]), site([4, 6, 5], [0, 3, 5])]);
  // events 1, 4, 5; others 9, 6, 0: pairs won 4·9 + 5·(9 + 6), ties 1·9 + 4·6, of 10·15
  expect(ranking?.area).toBeCloseTo((4 * 9 + 5 * 15 + 0.5 * (9 + 24)) / 150, 14);
  expect(ranking?.curve.at(-1)).toEqual({ falseShare: 1, trueShare: 1 });
});

test('events alone have no ranking', () => {
  expect(rankingOf([site([3], [3])])).toBeNull();
});
