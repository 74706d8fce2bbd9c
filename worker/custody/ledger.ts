import { createHash } from 'node:crypto';
import { z } from 'zod';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { LeaveKind } from '../../protocol/messages/survey.js';
import { addCurvature, type CurvatureCount, type Departed, NOTHING_DEPARTED } from './policy.js';

/**
 * The site's own record of everything that left: JSON lines, only ever appended to, each line holding the hash of the
 * one before. A line is on disk before its answer is sent. Whoever keeps the last hash elsewhere can tell whether
 * lines were changed or removed later.
 */

/** What one answer takes out of the site. */
export interface Departure {
  readonly run: string;
  /** SHA-256 of the canonical specification, hex. */
  readonly digest: string;
  readonly ask: number;
  readonly kinds: readonly LeaveKind[];
  /** Numbers (float64) in the answer. */
  readonly numbers: number;
  readonly curvature: CurvatureCount;
  /** SHA-256 of what was asked (`contentDigest`), hex. */
  readonly content: string;
}

const sha256 = z.string().regex(/^[0-9a-f]{64}$/);
const whole = z.int().min(0);

const record = z.strictObject({
  at: z.iso.datetime(),
  run: z.string().min(1),
  digest: sha256,
  ask: z.int().min(1),
  kinds: z.array(z.string()),
  numbers: whole,
  /** Curvature matrices by problem number; `all`: those that serve every fit of the run. */
  curvature: z.record(z.string().regex(/^(all|\d+)$/), whole),
  /** Columns of curvature sketched, by problem number; left out where there are none. */
  sketched: z.record(z.string().regex(/^\d+$/), whole).optional(),
  content: sha256,
  previous: sha256,
  hash: sha256,
});

export type LedgerRecord = z.infer<typeof record>;

/** `previous` of the first line. */
export const LEDGER_START = '0'.repeat(64);

/** Line without its line break, and its hash: SHA-256 of the line's JSON without the `hash` field. */
export function recordLine(
  departure: Departure,
  at: Date,
  previous: string,
): { readonly line: string; readonly record: LedgerRecord } {
  const { run, digest, ask, kinds, numbers, content } = departure;
  const curvature = curvatureFields(departure.curvature);
  const sketched = Object.fromEntries(departure.curvature.sketched);
  const body = {
    at: at.toISOString(),
    run,
    digest,
    ask,
    kinds: [...kinds],
    numbers,
    curvature,
    ...(departure.curvature.sketched.size > 0 ? { sketched } : {}),
    content,
    previous,
  };
  const hash = hashOf(body);
  return { line: JSON.stringify({ ...body, hash }), record: { ...body, hash } };
}

/** Checks one line against its own hash and against the hash of the line before. */
export function verifyLine(line: string, previous: string): Checked<LedgerRecord> {
  let value: unknown;
  try {
    value = JSON.parse(line);
  } catch {
    return broken('is not JSON');
  }
  const parsed = record.safeParse(value);
  if (!parsed.success) return broken('is not a ledger line');
  const { hash, ...body } = parsed.data;
  if (hashOf(body) !== hash)
    return broken('does not match its own hash: it was changed after it was written');
  if (body.previous !== previous)
    return broken('does not follow the line before it: lines are missing or moved');
  return succeed(parsed.data);
}

const broken = (what: string) => fail('ledger-broken', what);

const hashOf = (body: Omit<LedgerRecord, 'hash'>): string =>
  createHash('sha256').update(JSON.stringify(body)).digest('hex');

function curvatureFields(count: CurvatureCount): Record<string, number> {
  const fields: Record<string, number> = count.all > 0 ? { all: count.all } : {};
  for (const [problem, matrices] of count.problems) fields[String(problem)] = matrices;
  return fields;
}

function curvatureCount({ curvature: fields, sketched }: LedgerRecord): CurvatureCount {
  const problems = new Map<number, number>();
  for (const [problem, matrices] of Object.entries(fields))
    if (problem !== 'all') problems.set(Number(problem), matrices);
  const columns = Object.entries(sketched ?? {});
  return {
    all: fields.all ?? 0,
    problems,
    sketched: new Map(columns.map(([problem, count]) => [Number(problem), count])),
  };
}

/** The whole file checked: its records, and how much of it is sound. */
export interface LedgerText {
  readonly records: readonly LedgerRecord[];
  /** Bytes up to the end of the last whole line. */
  readonly soundBytes: number;
  /** A last line without its line break: the process or the machine stopped in mid-write, its answer was never sent. */
  readonly torn: boolean;
}

export function readLedger(text: string, name: string): Checked<LedgerText> {
  const end = text.lastIndexOf('\n') + 1;
  const lines = end === 0 ? [] : text.slice(0, end - 1).split('\n');
  const records: LedgerRecord[] = [];
  let previous = LEDGER_START;
  for (const [index, line] of lines.entries()) {
    const checked = verifyLine(line, previous);
    if (!checked.ok) {
      return fail('ledger-broken', `This line of the ledger ${checked.failure.message}.`, {
        remedy: 'Find out who changed it; to go on, put the file aside under another name and start again.',
        where: { file: name, line: index + 1 },
      });
    }
    records.push(checked.value);
    previous = checked.value.hash;
  }
  return succeed({ records, soundBytes: Buffer.byteLength(text.slice(0, end)), torn: end < text.length });
}

/** File access, passed in. Each call ends with the bytes on disk. */
export interface LedgerFile {
  readonly name: string;
  /** Empty where there is no file yet. */
  read(): Promise<Checked<string>>;
  cutTo(bytes: number): Promise<Checked<null>>;
  /** Appends one line and its line break, or leaves the file as it was; `ledger-broken` where it has other content. */
  append(line: string): Promise<Checked<null>>;
}

interface RunEntry {
  readonly digest: string;
  readonly asks: Map<number, string>;
  departed: Departed;
}

/** The open ledger: appends, and knows what has left in every run. */
export class Ledger {
  readonly #file: LedgerFile;
  readonly #now: () => Date;
  readonly #runs = new Map<string, RunEntry>();
  #last = LEDGER_START;

  private constructor(file: LedgerFile, now: () => Date) {
    this.#file = file;
    this.#now = now;
  }

  /** Reads and verifies the file; a torn last line is cut off and named in `warning`. */
  static async open(
    file: LedgerFile,
    now: () => Date,
  ): Promise<Checked<{ readonly ledger: Ledger; readonly warning: string | null }>> {
    const text = await file.read();
    if (!text.ok) return text;
    const read = readLedger(text.value, file.name);
    if (!read.ok) return read;
    const ledger = new Ledger(file, now);
    for (const entry of read.value.records) ledger.#count(entry);
    if (!read.value.torn) return succeed({ ledger, warning: null });
    const cut = await file.cutTo(read.value.soundBytes);
    if (!cut.ok) return cut;
    const lines = read.value.records.length;
    const warning = `The last line of ${file.name} was cut short in mid-write and is removed; its answer was never sent. ${lines} whole lines stay.`;
    return succeed({ ledger, warning });
  }

  /** What has left in this run, before and after restarts. */
  departed(run: string): Departed {
    return this.#runs.get(run)?.departed ?? NOTHING_DEPARTED;
  }

  /**
   * Whether this departure is a repeat of one recorded (counted once, nothing to append) or new. The same (run, ask)
   * with other content, or a run under another specification, is `ask-changed`.
   */
  look(run: string, digest: string, ask: number, content: string): Checked<'new' | 'repeat'> {
    const entry = this.#runs.get(run);
    if (entry === undefined) return succeed('new');
    if (entry.digest !== digest)
      return changed(
        `Run ${run} was recorded with specification ${entry.digest}, it now comes with ${digest}.`,
      );
    const before = entry.asks.get(ask);
    if (before === undefined) return succeed('new');
    if (before === content) return succeed('repeat');
    return changed(`Ask ${ask} of run ${run} was answered before with other content.`);
  }

  /** Reads the file again: after `append` found that another process of this site has written to it. */
  async catchUp(): Promise<Checked<null>> {
    const text = await this.#file.read();
    if (!text.ok) return text;
    const read = readLedger(text.value, this.#file.name);
    if (!read.ok) return read;
    if (read.value.torn) return broken('The ledger is being written by another process.');
    this.#runs.clear();
    this.#last = LEDGER_START;
    for (const entry of read.value.records) this.#count(entry);
    return succeed(null);
  }

  /** Writes one line, or fails with `ledger-broken` where the file is not as this process left it. One at a time. */
  async append(departure: Departure): Promise<Checked<null>> {
    const { line, record: entry } = recordLine(departure, this.#now(), this.#last);
    const written = await this.#file.append(line);
    if (written.ok) this.#count(entry);
    return written;
  }

  #count(entry: LedgerRecord): void {
    const run = this.#runs.get(entry.run) ?? {
      digest: entry.digest,
      asks: new Map<number, string>(),
      departed: NOTHING_DEPARTED,
    };
    run.asks.set(entry.ask, entry.content);
    run.departed = {
      asks: run.departed.asks + 1,
      numbers: run.departed.numbers + entry.numbers,
      curvature: addCurvature(run.departed.curvature, curvatureCount(entry)),
    };
    this.#runs.set(entry.run, run);
    this.#last = entry.hash;
  }
}

const changed = (message: string) =>
  fail('ask-changed', message, { remedy: 'Submit the specification again: a new run starts afresh.' });
