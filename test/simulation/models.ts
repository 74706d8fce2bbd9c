import { type Random, seededRandom } from '../../numerics/random.js';
import { canonicalText, digestOf } from '../../protocol/specification/canonical.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { Policy } from '../../worker/custody/site-file.js';
import type { Table } from '../../worker/source/table.js';
import type { RunPlan } from './cluster.js';

/** What is fitted in a simulation. Together they use every rung, both finishes and a list of λ. */
const MODEL_LINES = {
  'poisson elastic net': [
    'response: {column: breaks}',
    'loss: poisson',
    'exposure: {column: km_years}',
    'terms: [{column: age_years}, {column: pressure_bar}, {column: material, levels: [pvc, steel, iron], baseline: pvc}]',
    'penalty: [{kind: elastic-net, lambda: 0.02, l1: 0.5}]',
  ],
  'poisson list': [
    'response: {column: breaks}',
    'loss: poisson',
    'exposure: {column: km_years}',
    'terms: [{column: age_years}, {column: pressure_bar}]',
    'penalty: [{kind: lasso, lambda: [0.2, 0.05, 0.01]}]',
  ],
  'logistic ridge': [
    'response: {column: broke}',
    'loss: logistic',
    'terms: [{column: age_years}, {column: pressure_bar}]',
    'penalty: [{kind: ridge, lambda: 0.05}]',
  ],
  'squared plain': [
    'response: {column: flow_lps}',
    'loss: squared',
    'terms: [{column: age_years}, {column: pressure_bar}, {column: material, levels: [pvc, steel, iron], baseline: pvc}]',
  ],
  'squared list': [
    'response: {column: flow_lps}',
    'loss: squared',
    'terms: [{column: age_years}, {column: pressure_bar}]',
    'penalty: [{kind: elastic-net, lambda: [0.5, 0.1], l1: 0.9}]',
  ],
} as const satisfies Record<string, readonly string[]>;

export type ModelName = keyof typeof MODEL_LINES;
export const MODELS = Object.keys(MODEL_LINES) as ModelName[];

/** What the custodians let leave: the default, everything, or no curvature. */
export type PolicyName = 'default' | 'open' | 'closed';
export const POLICIES: readonly PolicyName[] = ['default', 'open', 'closed'];

export interface Model {
  readonly name: ModelName;
  readonly specification: FitSpecification;
  readonly canonical: string;
  readonly digest: string;
}

export const DEADLINE_MS = 5000;

export function modelOf(run: RunPlan): Model {
  const { model: name, sites, least, quorum, missing, patienceMinutes } = run;
  const heard = quorum === null ? '' : `, quorum: ${quorum.sites}, oldest: ${quorum.oldest}`;
  const text = [
    'commonfit: 1',
    `title: ${name}`,
    `sites: ${least === null ? `[${sites.join(', ')}]` : `{least: ${least}}`}`,
    ...MODEL_LINES[name],
    'rounds: {tolerance: 1e-7, most: 200}',
    `barrier: {deadline: ${DEADLINE_MS / 1000}s, patience: ${patienceMinutes}m, missing: ${missing}${heard}}`,
  ].join('\n');
  const parsed = parseFitSpecification(text, `${name}.fit.yaml`);
  if (!parsed.ok) throw new Error(parsed.failures.map(({ message }) => message).join(' '));
  const canonical = canonicalText(parsed.value);
  return { name, specification: parsed.value, canonical, digest: digestOf(canonical) };
}

export function policyOf(name: PolicyName): Policy {
  const closed = name === 'closed';
  return {
    columns: 'any',
    rowsLeast: 10,
    leave: ['counts', 'moments', 'proximal', 'gradients', ...(closed ? [] : (['curvature'] as const))],
    curvatureMost: name === 'default' ? 3 : 'any',
    numbersMost: 'any',
    roundsMost: 'any',
    approvals: 'any',
  };
}

export const SITES: readonly string[] = ['harrowmere', 'lindell-bay', 'castlefen', 'oakhythe'];
const ROWS: Readonly<Record<string, number>> = {
  harrowmere: 60,
  'lindell-bay': 44,
  castlefen: 36,
  oakhythe: 28,
};
const LEVELS = ['pvc', 'steel', 'iron'];

/** The rows of one shard of a site: invented, and the same in every simulation. */
export function tableOf(site: string, shard: { readonly index: number; readonly of: number }): Table {
  const random = seededRandom(SITES.indexOf(site) + 11);
  const rows = Array.from({ length: ROWS[site] }, () => rowOf(random, site.length / 10));
  const own = rows.filter((_, index) => index % shard.of === shard.index - 1);
  const column = (of: (row: Row) => number): Float64Array => Float64Array.from(own, of);
  return {
    rowCount: own.length,
    rowsDropped: 0,
    numeric: new Map([
      ['breaks', column((row) => row.breaks)],
      ['broke', column((row) => Math.min(1, row.breaks))],
      ['flow_lps', column((row) => row.flow)],
      ['km_years', column((row) => row.kmYears)],
      ['age_years', column((row) => row.age)],
      ['pressure_bar', column((row) => row.pressure)],
    ]),
    levels: new Map([['material', { levels: LEVELS, codes: Int32Array.from(own, (row) => row.material) }]]),
  };
}

type Row = ReturnType<typeof rowOf>;

function rowOf(random: Random, own: number) {
  const age = 80 * random.uniform();
  const pressure = 2 + own + 3 * random.uniform();
  const material = random.integer(LEVELS.length);
  const kmYears = 0.5 + 2 * random.uniform();
  const rate = Math.exp(-1.5 + 0.02 * age + 0.1 * pressure + 0.3 * material);
  const flow = 12 + 0.1 * age - 1.5 * pressure + 2 * material + random.normal();
  return { age, pressure, material, kmYears, flow, breaks: random.poisson(kmYears * rate) };
}
