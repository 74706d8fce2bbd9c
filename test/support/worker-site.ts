import type { Checked } from '../../protocol/failure.js';
import { succeed } from '../../protocol/failure.js';
import type { Ask, Work } from '../../protocol/messages/round.js';
import type { Prepare, Scaling } from '../../protocol/messages/run.js';
import { canonicalText, digestOf } from '../../protocol/specification/canonical.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { Ledger, type LedgerFile } from '../../worker/custody/ledger.js';
import type { Policy } from '../../worker/custody/site-file.js';
import { type Answerer, type AnswererDeps, createAnswerer } from '../../worker/service/answerer.js';
import type { WorkerEvent } from '../../worker/service/events.js';
import type { Table, TableRequest } from '../../worker/source/table.js';
import { parsedValue } from './specifications.js';

/** A site whose rows, files and clock are in memory: breaks by age and pressure, p = 3 with the intercept. */
export const SITE = 'castlefen';

export function specification(lines: readonly string[] = []): FitSpecification {
  const text = [
    'commonfit: 1',
    'title: Breaks by age',
    `sites: [harrowmere, ${SITE}]`,
    'response: {column: breaks}',
    'loss: poisson',
    'exposure: {column: km_years}',
    'terms: [{column: age_years}, {column: pressure_bar}]',
    ...lines,
  ].join('\n');
  return parsedValue(parseFitSpecification(text, 'breaks.fit.yaml'));
}

const ROWS = 60;
export const SCALING: Scaling = {
  rowCountTotal: 200,
  kept: [0, 1],
  center: Float64Array.of(20, 4),
  scale: Float64Array.of(10, 1),
};

export const TABLE: Table = {
  rowCount: ROWS,
  rowsDropped: 2,
  numeric: new Map([
    ['breaks', Float64Array.from({ length: ROWS }, (_, i) => (i * 7) % 4)],
    ['km_years', Float64Array.from({ length: ROWS }, (_, i) => 1 + (i % 5))],
    ['age_years', Float64Array.from({ length: ROWS }, (_, i) => (i * 13) % 41)],
    ['pressure_bar', Float64Array.from({ length: ROWS }, (_, i) => 3 + ((i * 5) % 17) / 5)],
  ]),
  levels: new Map(),
};

export const OPEN_POLICY: Policy = {
  columns: 'any',
  rowsLeast: 1,
  leave: ['counts', 'moments', 'proximal', 'gradients', 'curvature', 'sketches'],
  curvatureMost: 'any',
  numbersMost: 'any',
  roundsMost: 'any',
  approvals: 'any',
};

export function prepareOf(run: string, spec = specification(), scaling: Scaling | null = SCALING): Prepare {
  const text = canonicalText(spec);
  return { kind: 'prepare', run, specification: text, digest: digestOf(text), scaling };
}

export const askOf = (run: string, ask: number, ...work: Work[]): Ask => ({ kind: 'ask', run, ask, work });

/** A file in memory; `text` is what is on disk. */
export class MemoryLedgerFile implements LedgerFile {
  readonly name = 'castlefen.ledger';
  text: string;

  constructor(text = '') {
    this.text = text;
  }

  async read(): Promise<Checked<string>> {
    return succeed(this.text);
  }

  async cutTo(bytes: number): Promise<Checked<null>> {
    this.text = Buffer.from(this.text).subarray(0, bytes).toString();
    return succeed(null);
  }

  async append(line: string): Promise<Checked<null>> {
    this.text += `${line}\n`;
    return succeed(null);
  }
}

export interface SiteInMemory {
  readonly answerer: Answerer;
  readonly file: MemoryLedgerFile;
  readonly events: WorkerEvent[];
  readonly reads: TableRequest[];
}

/** A worker's answerer on that site; start it again on the same `file` for a restart. */
export async function siteInMemory(
  more: Partial<AnswererDeps> & { file?: MemoryLedgerFile } = {},
): Promise<SiteInMemory> {
  const file = more.file ?? new MemoryLedgerFile();
  const opened = await Ledger.open(file, () => new Date('2026-03-01T09:00:00Z'));
  if (!opened.ok) throw new Error(opened.failure.message);
  const events: WorkerEvent[] = [];
  const reads: TableRequest[] = [];
  const answerer = createAnswerer({
    site: SITE,
    shard: { index: 1, of: 1 },
    policy: OPEN_POLICY,
    approved: async () => succeed(new Set()),
    readTable: async (request) => {
      reads.push(request);
      return succeed(TABLE);
    },
    ledger: opened.value.ledger,
    nowMs: () => 0,
    onEvent: (event) => events.push(event),
    pause: async () => undefined,
    ...more,
  });
  return { answerer, file, events, reads };
}
