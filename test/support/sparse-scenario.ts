import { seededRandom } from '../../numerics/random.js';
import type { FitSpecification, Term } from '../../protocol/specification/types.js';
import type { Table } from '../../worker/source/table.js';
import { levelsTerm, specification } from './designs.js';

/** Rows of level columns and products of some of them: a row has an entry for each term, out of very many. */
export interface SparseSize {
  readonly sites: number;
  readonly rowsEach: number;
  /** Columns of levels, and how many levels each has. */
  readonly factors: number;
  readonly levels: number;
  /** Products of two of the columns: the first with the second, the third with the fourth, … */
  readonly products: number;
  readonly lambda: number;
  readonly seed: number;
}

export interface SparseScenario {
  readonly spec: FitSpecification;
  readonly tables: readonly Table[];
}

const SITE_NAMES = [
  'harrowmere',
  'lindell-bay',
  'castlefen',
  'oakhythe',
  'sallowfield',
  'thornwick',
  'merrowdale',
  'quarrybank',
];

/** A logistic lasso; the chance of a break hangs on one level in twenty of each column and of each product. */
export function sparseScenario(size: SparseSize, partial: Partial<FitSpecification> = {}): SparseScenario {
  const { sites, factors, levels, products } = size;
  const names = Array.from({ length: levels }, (_, level) => `v${level}`);
  const columns = Array.from({ length: factors }, (_, f) => `zone_${f}`);
  const terms: Term[] = columns.map((column) => levelsTerm(column, names, null));
  for (let k = 0; k < products; k++) {
    const [a, b] = [
      columns[(2 * k) % factors],
      columns[(2 * k + 1 + 2 * Math.floor((2 * k) / factors)) % factors],
    ];
    terms.push({
      kind: 'product',
      factors: [levelsTerm(a, names, null), levelsTerm(b, names, null)],
      name: `${a}:${b}`,
    });
  }
  const spec = specification({
    sites: SITE_NAMES.slice(0, sites),
    loss: { kind: 'logistic' },
    terms,
    penalties: [{ kind: 'lasso', lambda: [size.lambda], path: null, l1: 1, scaled: true, perTerm: {} }],
    rounds: { tolerance: 1e-4, most: 300, rung: 'proximal' },
    ...partial,
  });
  const tables = Array.from({ length: sites }, (_, site) => tableOf(size, names, columns, site));
  return { spec, tables };
}

function tableOf(
  size: SparseSize,
  names: readonly string[],
  columns: readonly string[],
  site: number,
): Table {
  const { rowsEach: rowCount, levels } = size;
  const random = seededRandom(1000 * size.seed + site);
  const codes = columns.map(() =>
    // few levels are common, most are rare
    Int32Array.from({ length: rowCount }, () => Math.floor(levels * random.uniform() ** 1.5)),
  );
  const y = Float64Array.from({ length: rowCount }, (_, row) => {
    let eta = -1;
    for (let f = 0; f < codes.length; f++) {
      eta += effect(f, codes[f][row]);
      if (f % 2 === 0 && f / 2 < size.products && f + 1 < codes.length)
        eta += effect(f, 17 * codes[f][row] + codes[f + 1][row]);
    }
    return random.uniform() < 1 / (1 + Math.exp(-eta)) ? 1 : 0;
  });
  return {
    rowCount,
    rowsDropped: 0,
    numeric: new Map([['y', y]]),
    levels: new Map(columns.map((column, f) => [column, { levels: names, codes: codes[f] }])),
  };
}

/** Of a level of column f: the same at every site, and none for most. */
const effect = (f: number, level: number): number => {
  const hash = Math.imul(level * 31 + f + 1, 0x9e3779b9) >>> 0;
  return hash % 20 === 0 ? (hash % 40 === 0 ? 0.8 : -0.8) : 0;
};
