import { seededRandom } from '../../numerics/random.js';
import { INVERSE_LINKS, type ModelDocument } from '../../protocol/model/model-document.js';
import { designColumns } from '../../protocol/specification/design-columns.js';
import type { LevelsTerm, LossKind, NumericTerm, Term } from '../../protocol/specification/types.js';
import { levelsTerm, numericTerm } from './designs.js';

/** A row as it stands in a table: `material` and `soil` have levels, the others are numbers above zero. */
export type PipeRow = Readonly<Record<string, string | number>>;

const MATERIALS = ['pvc', 'cast iron', 'steel, "lined"', '7'];
const SOILS = ['sand', 'clay'];

export function modelDocument(partial: Partial<ModelDocument>): ModelDocument {
  const loss = partial.loss ?? 'squared';
  return {
    commonfitModel: 1,
    title: 'Breaks <by> age & "material"',
    specification: 'ab'.repeat(32),
    software: 'commonfit 0.1.0',
    sites: ['harrowmere', 'castlefen'],
    rowsTotal: 4321,
    fit: {
      number: 1,
      of: 1,
      lambda: 0.01,
      outcome: 'solved',
      certificate: { kind: 'measured', relativeGap: 1e-9 },
    },
    loss,
    inverseLink: INVERSE_LINKS[loss],
    response: { column: 'breaks', positive: null },
    offset: null,
    intercept: 0.5,
    terms: [],
    coefficients: [],
    dropped: [],
    ...partial,
  };
}

/** A model with transforms, levels, products of two or three factors, coefficients of 0, any loss and offset. */
export function randomModel(seed: number): ModelDocument {
  const random = seededRandom(seed);
  const draw = <T>(list: readonly T[]): T => list[Math.floor(random.uniform() * list.length)] as T;
  const listed: (NumericTerm | LevelsTerm)[] = [
    numericTerm('age_years'),
    numericTerm('age_years', { power: draw([2, -1, 0.5, -1.5]) }),
    numericTerm('diameter & mm', draw(['log', 'sqrt'] as const)),
    numericTerm('pressure_bar', draw(['none', 'log'] as const)),
    levelsTerm('material', MATERIALS, draw([null, ...MATERIALS])),
    levelsTerm('soil', SOILS, draw([null, ...SOILS])),
  ].filter(() => random.uniform() < 0.8);
  const products: Term[] = [];
  for (let k = 0; k < 3 && listed.length >= 3; k++) {
    const factors = [...listed].sort(() => random.uniform() - 0.5).slice(0, draw([2, 3]));
    const name = factors.map((factor) => factor.name).join(':');
    if (!products.some((product) => product.name === name)) products.push({ kind: 'product', factors, name });
  }
  const terms: Term[] = [...listed, ...products];
  const loss = draw<LossKind>(['squared', 'huber', 'logistic', 'poisson']);
  return modelDocument({
    loss,
    inverseLink: INVERSE_LINKS[loss],
    terms,
    intercept: draw([null, random.normal()]),
    offset: draw([
      null,
      { kind: 'exposure' as const, column: 'km_years' },
      { kind: 'offset' as const, column: 'shift' },
    ]),
    coefficients: designColumns({ terms }).map(({ name }) => ({
      name,
      value: random.uniform() < 0.2 ? 0 : random.normal() / 4,
    })),
  });
}

export function randomRows(seed: number, count: number): PipeRow[] {
  const random = seededRandom(seed);
  const draw = <T>(list: readonly T[]): T => list[Math.floor(random.uniform() * list.length)] as T;
  return Array.from({ length: count }, (_, at) => ({
    pipe: `P-${at}`,
    age_years: 0.5 + 3 * random.uniform(),
    'diameter & mm': Math.exp(random.normal()),
    pressure_bar: 0.1 + random.uniform(),
    material: draw(MATERIALS),
    soil: draw(SOILS),
    km_years: Math.exp(random.normal()),
    shift: random.normal(),
  }));
}

export const columnsOf = (rows: readonly PipeRow[]): string[] => Object.keys(rows[0] ?? {});

export const csvOf = (rows: readonly PipeRow[], columns = columnsOf(rows)): string =>
  [columns, ...rows.map((row) => columns.map((name) => row[name]))]
    .map((cells) => `${cells.map((cell) => `"${String(cell).replaceAll('"', '""')}"`).join(',')}\n`)
    .join('');
