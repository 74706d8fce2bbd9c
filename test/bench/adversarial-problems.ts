import type { Random } from '../../numerics/random.js';
import type { LossKind } from '../../protocol/specification/types.js';
import { type Drawn, type Hardship, makeHardProblem } from './hard-problem.js';
import type { BenchProblem } from './problems.js';

const LOSSES: readonly LossKind[] = ['squared', 'logistic', 'poisson', 'huber'];
const NONE = {};
const RIDGE = { l2: 1e-6 };
const LASSO = { l1: 0.01 };

function correlated(): Record<string, Hardship> {
  const out: Record<string, Hardship> = {};
  for (const loss of LOSSES)
    for (const correlation of [0.99, 0.999])
      for (const [word, penalty] of Object.entries({ none: NONE, 'ridge 1e-6': RIDGE, lasso: LASSO }))
        out[`${loss}, correlation ${correlation}, ${word}`] = {
          loss,
          correlation,
          penalty,
          split: word === 'lasso' ? 'by-covariate' : 'random',
        };
  return out;
}

/** More columns than rows, at every site and pooled. */
function wide(): Record<string, Hardship> {
  const out: Record<string, Hardship> = {};
  for (const loss of LOSSES) {
    const shape = { loss, rows: 80, columns: 120, correlation: 0.5 };
    out[`${loss}, 120 columns and 80 rows, lasso`] = { ...shape, penalty: { l1: 0.05 } };
    out[`${loss}, 120 columns and 80 rows, lasso by response`] = {
      ...shape,
      penalty: { l1: 0.1 },
      split: 'by-response',
    };
    out[`${loss}, 120 columns and 80 rows, ridge`] = { ...shape, penalty: { l2: 0.1 } };
  }
  return out;
}

/** Classes by the sign of the linear predictor; the `flipped` rows nearest to the border are of the other class. */
const signs =
  (flipped: number) =>
  ({ y, eta }: Drawn): void => {
    const order = [...eta.keys()].sort((a, b) => Math.abs(eta[a]) - Math.abs(eta[b]));
    order.forEach((row, k) => {
      y[row] = Number(eta[row] > 0 !== k < flipped);
    });
  };

function separation(): Record<string, Hardship> {
  const base: Hardship = { loss: 'logistic', columns: 3, rows: 200 };
  return {
    'separated classes, no penalty': { ...base, responseTo: signs(0) },
    'separated classes, no penalty, by response': { ...base, responseTo: signs(0), split: 'by-response' },
    'separated classes, ridge 1e-6': { ...base, responseTo: signs(0), penalty: RIDGE },
    'separated classes, lasso': { ...base, responseTo: signs(0), penalty: LASSO },
    'separated classes, wide': { ...base, columns: 40, rows: 30, responseTo: signs(0), penalty: RIDGE },
    'separated classes, narrow margin': { ...base, responseTo: signs(1) },
    'nearly separated, 4 rows across': { ...base, responseTo: signs(4) },
    'nearly separated, 4 rows across, by covariate': {
      ...base,
      responseTo: signs(4),
      split: 'by-covariate',
    },
    'nearly separated, 12 rows across, by response': {
      ...base,
      responseTo: signs(12),
      split: 'by-response',
    },
    'nearly separated, 12 rows across, ridge 1e-6': { ...base, responseTo: signs(12), penalty: RIDGE },
    'nearly separated, correlation 0.99': { ...base, responseTo: signs(12), correlation: 0.99 },
    'effects of size 20, no penalty': { ...base, effects: 20 },
    'single-class sites, no penalty': { ...base, split: 'by-response', rows: 300 },
    'single-class sites, ridge 1e-6': { ...base, split: 'by-response', rows: 300, penalty: RIDGE },
    'single-class sites of unequal size, lasso': {
      ...base,
      split: 'sizes-by-response',
      rows: 300,
      penalty: LASSO,
    },
    'two sites, one class each, no penalty': { ...base, split: 'by-response', sites: 2, rows: 300 },
  };
}

const repeatColumn = (raw: Float64Array, rows: number, columns: number): void => {
  for (let i = 0; i < rows; i++) raw[i * columns + columns - 1] = -2 * raw[i * columns];
};
/** Indicators of every level: their sum is the intercept. */
const allLevels = (raw: Float64Array, rows: number, columns: number): void => {
  for (let i = 0; i < rows; i++) for (let j = 0; j < 3; j++) raw[i * columns + j] = Number(i % 3 === j);
};
const noSpread = (raw: Float64Array, rows: number, columns: number): void => {
  for (let i = 0; i < rows; i++) raw[i * columns + 1] = 4;
};

function aliases(): Record<string, Hardship> {
  const out: Record<string, Hardship> = {};
  for (const loss of LOSSES) {
    out[`${loss}, a column repeated, no penalty`] = { loss, columnsTo: repeatColumn };
    out[`${loss}, indicators of all levels, no penalty`] = { loss, columnsTo: allLevels };
    out[`${loss}, a column repeated, lasso`] = { loss, columnsTo: repeatColumn, penalty: LASSO };
  }
  out['logistic, a column without spread, no penalty'] = { loss: 'logistic', columnsTo: noSpread };
  for (const loss of LOSSES)
    out[`${loss}, a column without spread, lasso`] = { loss, columnsTo: noSpread, penalty: LASSO };
  return out;
}

/** Column 0 an indicator of every tenth row. */
const rareLevel = (raw: Float64Array, rows: number, columns: number): void => {
  for (let i = 0; i < rows; i++) raw[i * columns] = Number(i % 10 === 0);
};
const noEventsThere = ({ y }: Drawn): void => {
  for (let i = 0; i < y.length; i += 10) y[i] = 0;
};

function noEvents(): Record<string, Hardship> {
  const base = { columnsTo: rareLevel, responseTo: noEventsThere };
  return {
    'poisson, a level without events, no penalty': { loss: 'poisson', ...base },
    'poisson, a level without events, ridge 1e-6': { loss: 'poisson', ...base, penalty: RIDGE },
    'poisson, a level without events, lasso': { loss: 'poisson', ...base, penalty: LASSO },
    'logistic, a level without events, no penalty': { loss: 'logistic', ...base },
    'logistic, a level without events, ridge 1e-6': { loss: 'logistic', ...base, penalty: RIDGE },
  };
}

function sizes(): Record<string, Hardship> {
  const out: Record<string, Hardship> = {};
  for (const loss of LOSSES) {
    out[`${loss}, sites of 2 and 2000 rows`] = { loss, rows: 2002, siteRows: [2, 2000] };
    out[`${loss}, sites of 1, 30 and 1000 rows, ridge 1e-6`] = {
      loss,
      rows: 1031,
      siteRows: [1000, 1, 30],
      penalty: RIDGE,
    };
    out[`${loss}, 64 sites of 3 rows, lasso`] = { loss, rows: 192, sites: 64, penalty: LASSO };
  }
  return out;
}

const times =
  (factor: number) =>
  ({ y }: Drawn): void => {
    for (let i = 0; i < y.length; i++) y[i] *= factor;
  };
const exact = ({ y, eta }: Drawn): void => y.set(eta);
/** Exposures log-uniform over six orders of magnitude, and the counts they give. */
const exposures = ({ y, offset, eta }: Drawn, random: Random): void => {
  for (let i = 0; i < y.length; i++) {
    const log = Math.log(10) * (6 * random.uniform() - 2);
    if (offset !== null) offset[i] = log;
    y[i] = random.poisson(Math.exp(Math.min(log + 0.5 * eta[i] - 1, 15)));
  }
};

function responses(): Record<string, Hardship> {
  const out: Record<string, Hardship> = {};
  for (const factor of [1e-8, 1e-4, 1e4, 1e8])
    for (const [word, penalty] of Object.entries({ none: NONE, lasso: { l1: 0.01 * factor } }))
      out[`squared, responses of size ${factor}, ${word}`] = {
        loss: 'squared',
        penalty,
        responseTo: times(factor),
      };
  return {
    ...out,
    'huber, responses of size 1e-4': { loss: 'huber', responseTo: times(1e-4) },
    'huber, responses of size 1e4': { loss: 'huber', responseTo: times(1e4) },
    'squared, an exact fit, no penalty': { loss: 'squared', responseTo: exact },
    'squared, an exact fit, ridge 1e-6': { loss: 'squared', responseTo: exact, penalty: RIDGE },
    'poisson, exposures over six orders, no penalty': { loss: 'poisson', responseTo: exposures },
    'poisson, exposures over six orders, ridge 1e-6': {
      loss: 'poisson',
      responseTo: exposures,
      penalty: RIDGE,
    },
    'poisson, exposures over six orders, lasso, by response': {
      loss: 'poisson',
      responseTo: exposures,
      penalty: LASSO,
      split: 'by-response',
    },
    'poisson, exposures over six orders, one a site': {
      loss: 'poisson',
      responseTo: exposures,
      split: 'sizes-by-response',
    },
    'poisson, effects of size 8, no penalty': { loss: 'poisson', effects: 8 },
    'poisson, effects of size 8, lasso, by response': {
      loss: 'poisson',
      effects: 8,
      penalty: LASSO,
      split: 'by-response',
    },
  };
}

function boxes(): Record<string, Hardship> {
  const out: Record<string, Hardship> = {};
  for (const loss of LOSSES) {
    out[`${loss}, no negative slopes`] = { loss, penalty: { box: [0, Number.POSITIVE_INFINITY] } };
    out[`${loss}, a box without the start`] = { loss, penalty: { box: [0.1, 0.3], l1: 0.01 } };
  }
  out['logistic, separated classes in a box'] = {
    loss: 'logistic',
    responseTo: signs(0),
    penalty: { box: [-3, 3] },
  };
  out['squared, a column repeated in a box'] = {
    loss: 'squared',
    columnsTo: repeatColumn,
    penalty: { box: [-0.2, 0.2] },
  };
  return out;
}

/** Named problems at and beyond the edge of what has an optimum. Each is made from its own seed, its name's. */
export const ADVERSARIAL: Readonly<Record<string, Hardship>> = {
  ...correlated(),
  ...wide(),
  ...separation(),
  ...aliases(),
  ...noEvents(),
  ...sizes(),
  ...responses(),
  ...boxes(),
};

export const makeAdversarialProblem = (name: string): BenchProblem =>
  makeHardProblem(name, ADVERSARIAL[name]);
