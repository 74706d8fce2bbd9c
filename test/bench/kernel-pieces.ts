import type { Kernel } from '../../numerics/kernels/kernel.js';
import { seededRandom } from '../../numerics/random.js';
import { lossOf } from '../../worker/losses/index.js';

/** One thing to time: `amount` operations or bytes. */
export interface Piece {
  readonly name: string;
  readonly limit: 'multiply-add' | 'memory read';
  readonly amount: number;
  /** How often it is run in a row to be timed. */
  readonly times: number;
  /** Whether several threads share it. */
  readonly onThreads: boolean;
  readonly run: (kernel: Kernel) => void;
}

/** Rows by name, columns, and what is timed there. */
export const SHAPES = [
  { named: 1e5, p: 100, what: 'matrices' },
  { named: 2e4, p: 500, what: 'matrices' },
  { named: 1e6, p: 50, what: 'passes' },
  { named: 1e5, p: 500, what: 'passes' },
] as const;
export type Shape = (typeof SHAPES)[number] & { readonly rows: number };

interface Filled {
  readonly rows: number;
  readonly x: Float64Array;
  readonly y: Float64Array;
}

export function filled(kernel: Kernel, rows: number, p: number): Filled {
  const random = seededRandom(1);
  const x = kernel.numbers(rows * p);
  for (let at = 0; at < x.length; at++) x[at] = random.uniform() - 0.5;
  const y = kernel.numbers(rows);
  for (let at = 0; at < y.length; at++) y[at] = Number(random.uniform() < 0.5);
  return { rows, x, y };
}

export function piecesOf({ rows, x, y }: Filled, { p, named, what }: Shape): Piece[] {
  const theta = new Float64Array(p).fill(0.1);
  const along = new Float64Array(rows).fill(0.1);
  const sums = new Float64Array(p);
  const state = { eta: new Float64Array(rows), slopes: new Float64Array(rows) };
  const table = { rowCount: rows, p, x, y, weights: null, offset: null, rowCountTotal: rows };
  const size = `${named.toExponential().replace('+', '')}×${p}`;
  const bytes = 8 * rows * p;
  const pass = { theta, state, gradient: sums };
  const logistic = lossOf({ kind: 'logistic' });
  if (what === 'matrices')
    return [
      {
        name: `weighted Gram ${size}`,
        limit: 'multiply-add',
        amount: rows * p * (p + 1),
        times: 1,
        onThreads: true,
        run: (kernel) => kernel.weightedGram(x, rows, p, along, 1),
      },
      ...(p === 500 ? [choleskyPiece(p)] : []),
    ];
  return [
    {
      name: `y = Xb ${size}`,
      limit: 'memory read',
      amount: bytes,
      times: 1,
      onThreads: true,
      run: (kernel) => kernel.rowProducts(x, p, 0, rows, theta, along),
    },
    {
      name: `Xᵀr ${size}`,
      limit: 'memory read',
      amount: bytes,
      times: 1,
      onThreads: true,
      run: (kernel) => kernel.addWeightedRows(x, p, 0, rows, along, sums),
    },
    {
      name: `logistic loss and gradient ${size}`,
      limit: 'memory read',
      amount: bytes,
      times: 1,
      onThreads: true,
      run: (kernel) => kernel.passes(table, logistic, [pass]),
    },
    {
      name: `logistic loss and gradient at 4 points ${size}`,
      limit: 'memory read',
      amount: 4 * bytes,
      times: 1,
      onThreads: true,
      run: (kernel) => kernel.passes(table, logistic, [pass, pass, pass, pass]),
    },
  ];
}

function choleskyPiece(p: number): Piece {
  const matrix = new Float64Array(p * p).fill(1);
  for (let j = 0; j < p; j++) matrix[j * p + j] = p;
  return {
    name: `Cholesky ${p}`,
    limit: 'multiply-add',
    amount: (p * p * p) / 3,
    times: 25,
    onThreads: false,
    run: (kernel) => {
      if (kernel.factorise(matrix, p) === null) throw new Error('not positive definite');
    },
  };
}
