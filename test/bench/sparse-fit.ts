import { readFile } from 'node:fs/promises';
import type { Table } from '../../worker/source/table.js';
import { siteFileOf } from '../support/small-scenario.js';
import { type SparseSize, sparseScenario } from '../support/sparse-scenario.js';
import { Stage } from '../support/stage.js';

/** A million columns: 8 sites with 25,000 rows each, of which every one has 30 entries. */
export const MILLION: SparseSize = {
  sites: 8,
  rowsEach: 25_000,
  factors: 20,
  levels: 316,
  products: 10,
  lambda: 8e-4,
  seed: 1,
};
const SPECIFICATION = 'sparse.fit.yaml';

export interface SparseFit {
  readonly name: string;
  readonly outcome: string;
  readonly columns: number;
  readonly rounds: number;
  readonly relativeGap: number | null;
  readonly seconds: number;
  /** Most memory that was resident. MiB. */
  readonly coordinatorMib: number;
  readonly workerMib: number;
  readonly coordinatorCpuSeconds: number;
  readonly workerCpuSeconds: number;
}

/** A logistic lasso on levels and products of them, through a coordinator and workers in processes of their own. */
export async function measureSparseFit(
  name: string,
  size: SparseSize,
  patienceMs: number,
): Promise<SparseFit> {
  const stage = await Stage.open('bench-sparse');
  try {
    await stage.serve();
    const { spec, tables } = sparseScenario(size);
    const sites = spec.sites as readonly string[];
    for (const [at, site] of sites.entries()) {
      await stage.write(`${site}.csv`, csvOf(tables[at]));
      const policy = ['curvature-most: 0', 'numbers-most: any'];
      await stage.write(`${site}.site.yaml`, siteFileOf(stage, site, `{csv: ./${site}.csv}`, policy));
      await stage.admit(site);
      stage.join(site);
    }
    await stage.write(SPECIFICATION, specificationOf(size, sites));
    const started = performance.now();
    const following = stage.submit(SPECIFICATION);
    const watch = setInterval(() => process.stderr.write(`${lastRound(following.program.stdout)}\n`), 30_000);
    const { event, result } = await following.outcome(patienceMs).finally(() => clearInterval(watch));
    const seconds = (performance.now() - started) / 1000;
    const [fit] = (JSON.parse(result) as { fits: FitFigures[] }).fits;
    const coordinator = await resourcesOf(stage.coordinator?.pid ?? 0);
    const workers = await Promise.all(sites.map((site) => resourcesOf(stage.workerOf(site).pid)));
    return {
      name,
      outcome: event.outcome,
      columns: Object.keys(fit.coefficients).length,
      rounds: fit.rounds,
      relativeGap: fit.certificate?.relativeGap ?? null,
      seconds,
      coordinatorMib: coordinator.mib,
      workerMib: Math.max(...workers.map(({ mib }) => mib)),
      coordinatorCpuSeconds: coordinator.cpuSeconds,
      workerCpuSeconds: Math.max(...workers.map(({ cpuSeconds }) => cpuSeconds)),
    };
  } finally {
    await stage.close();
  }
}

interface FitFigures {
  readonly coefficients: Readonly<Record<string, number>>;
  readonly rounds: number;
  readonly certificate: { readonly relativeGap: number } | null;
}

const lastRound = (stdout: string): string => stdout.trimEnd().split('\n').at(-1) ?? '';

function csvOf({ rowCount, numeric, levels }: Table): string {
  const coded = [...levels];
  const y = numeric.get('y') ?? new Float64Array(rowCount);
  const lines = [['y', ...coded.map(([name]) => name)].join(',')];
  for (let row = 0; row < rowCount; row++)
    lines.push([y[row], ...coded.map(([, { levels: names, codes }]) => names[codes[row]])].join(','));
  return `${lines.join('\n')}\n`;
}

function specificationOf(
  { factors, levels, products, lambda }: SparseSize,
  sites: readonly string[],
): string {
  const names = Array.from({ length: levels }, (_, level) => `v${level}`).join(', ');
  const columns = Array.from({ length: factors }, (_, f) => `zone_${f}`);
  return [
    'commonfit: 1',
    'title: Breaks by zones of many kinds',
    `sites: [${sites.join(', ')}]`,
    'response: {column: y}',
    'loss: logistic',
    'terms:',
    ...columns.map((column) => `  - {column: ${column}, levels: [${names}], baseline: null}`),
    ...Array.from({ length: products }, (_, k) => `  - {product: [zone_${2 * k}, zone_${2 * k + 1}]}`),
    'penalty:',
    `  - {kind: lasso, lambda: ${lambda}}`,
    'rounds: {tolerance: 1e-4, most: 300}',
    'barrier: {deadline: 30m}',
    '',
  ].join('\n');
}

/** Most resident memory and processor time so far, as Linux tells them. */
async function resourcesOf(pid: number): Promise<{ mib: number; cpuSeconds: number }> {
  const status = await readFile(`/proc/${pid}/status`, 'utf8');
  const stat = await readFile(`/proc/${pid}/stat`, 'utf8');
  const kib = Number(/VmHWM:\s+(\d+)/.exec(status)?.[1] ?? Number.NaN);
  // user and system time, in hundredths of a second, after the name in parentheses
  const fields = stat.slice(stat.lastIndexOf(')') + 2).split(' ');
  return { mib: kib / 1024, cpuSeconds: (Number(fields[11]) + Number(fields[12])) / 100 };
}
