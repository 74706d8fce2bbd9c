import { existsSync, readFileSync } from 'node:fs';
import { dirname, join } from 'node:path';
import { fileURLToPath } from 'node:url';

/**
 * An outside check case: open data, a model and reference values (see test/reference/README.md for where they come
 * from). Cases whose data may be shipped are in test/reference; the others are read from a `shared/reference` folder
 * beside the checkout where there is one.
 */
export interface ReferenceCase {
  readonly name: string;
  readonly folder: string;
  readonly description: ReferenceDescription;
}

interface ReferenceTerm {
  readonly name: string;
  readonly column: string;
  readonly equals?: string | number;
  readonly power?: number;
}

export interface ReferenceFit {
  readonly at?: { readonly lambda: number };
  readonly intercept: number;
  readonly coefficients: Readonly<Record<string, number>>;
  readonly objective: number;
  readonly deviance?: number;
}

export interface ReferenceDescription {
  readonly name: string;
  readonly dataset: { readonly published_source: string };
  readonly site: { readonly column: string; readonly counts: Readonly<Record<string, number>> };
  readonly model: {
    readonly family: 'gaussian' | 'binomial' | 'poisson' | 'huber';
    readonly response: string;
    readonly terms: readonly ReferenceTerm[];
    readonly offset?: string;
    readonly weights?: string;
    readonly penalty: {
      readonly type: string;
      readonly lambda?: number | readonly number[];
      readonly alpha?: number;
    };
    readonly standardize: boolean;
    /** Threshold of Huber's loss. */
    readonly delta?: number;
  };
  readonly tool: {
    readonly certified?: { readonly source: string; readonly coefficients: Readonly<Record<string, number>> };
  };
  readonly expected: { readonly fits: readonly ReferenceFit[] };
}

const here = dirname(fileURLToPath(import.meta.url));
const FOLDERS = [join(here, '../reference'), join(here, '../../../shared/reference')];

/** The case of that name, or null where its data are not on this machine. */
export function referenceCase(name: string): ReferenceCase | null {
  const folder = FOLDERS.map((base) => join(base, name)).find((path) => existsSync(join(path, 'case.json')));
  if (folder === undefined) return null;
  const description = JSON.parse(readFileSync(join(folder, 'case.json'), 'utf8')) as ReferenceDescription;
  return { name, folder, description };
}

/** The fit specification of a case, as an analyst would write it. */
export function specificationOf(reference: ReferenceCase, tolerance: number, rung = 'highest'): string {
  const { description } = reference;
  const { model } = description;
  const lines = [
    'commonfit: 1',
    `title: ${JSON.stringify(description.name)}`,
    `sites: ${JSON.stringify(Object.keys(description.site.counts))}`,
    `response: {column: ${model.response}}`,
    `loss: ${lossOf(model)}`,
    ...(model.offset === undefined ? [] : [`offset: {column: ${model.offset}}`]),
    ...(model.weights === undefined ? [] : [`weights: {column: ${model.weights}}`]),
    'terms:',
    ...termLines(reference),
    ...penaltyLines(model),
    `rounds: {tolerance: ${tolerance}, most: 300, rung: ${rung}}`,
  ];
  return `${lines.join('\n')}\n`;
}

const lossOf = ({ family, delta }: ReferenceDescription['model']): string =>
  ({
    gaussian: 'squared',
    binomial: 'logistic',
    poisson: 'poisson',
    huber: `{kind: huber, threshold: ${delta}}`,
  })[family];

function termLines({ folder, description }: ReferenceCase): string[] {
  const seen = new Set<string>();
  return description.model.terms.flatMap((term) => {
    if (term.power !== undefined) return [`  - {column: ${term.column}, transform: {power: ${term.power}}}`];
    if (term.equals === undefined) return [`  - {column: ${term.column}}`];
    if (seen.has(term.column)) return [];
    seen.add(term.column);
    const named = description.model.terms.filter((other) => other.column === term.column);
    const levels = distinct(folder, term.column);
    const baseline = levels.find((level) => named.every((other) => String(other.equals) !== level));
    return [
      `  - {column: ${term.column}, levels: ${JSON.stringify(levels)}, baseline: ${JSON.stringify(baseline ?? null)}}`,
    ];
  });
}

function penaltyLines({ penalty, standardize }: ReferenceDescription['model']): string[] {
  if (penalty.type === 'none') return [];
  const kind = penalty.type === 'elasticnet' ? 'elastic-net' : penalty.type;
  const share = kind === 'elastic-net' ? `, l1: ${penalty.alpha}` : '';
  return [
    `penalty:`,
    `  - {kind: ${kind}, lambda: ${JSON.stringify(penalty.lambda)}${share}, scaled: ${standardize}}`,
  ];
}

/** Distinct values of a column, sorted; the reference tables are plain CSV without quoted commas. */
function distinct(folder: string, column: string): string[] {
  const [header, ...rows] = readFileSync(join(folder, 'data.csv'), 'utf8').trim().split('\n');
  const at = header.split(',').indexOf(column);
  return [...new Set(rows.map((row) => row.split(',')[at]))].sort();
}
