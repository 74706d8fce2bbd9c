import type { KernelVariant } from '../../numerics/kernels/kernel.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { Answer } from '../../protocol/messages/round.js';
import type { Prepare, Scaling } from '../../protocol/messages/run.js';
import { digestOf, readCanonical } from '../../protocol/specification/canonical.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { tableRequest } from '../design/request.js';
import type { RawShard } from '../design/shard.js';
import type { RowsLost } from '../design/streamed-rows.js';
import { type SiteSolvers, siteSolvers } from '../local/site-solvers.js';
import { type BuiltShard, type ShardBuilder, withinMemory } from './built-shard.js';
import type { VectorMemory } from './memory.js';

/** One run as this worker knows it. Everything in it can be built again from `prepare` messages and the table. */
export interface LiveRun {
  message: Prepare;
  readonly memory: VectorMemory;
  specification: FitSpecification | null;
  solvers: SiteSolvers | null;
  /** The newest answer, so that a repeated ask costs nothing. */
  last: { readonly content: string; readonly answer: Answer } | null;
  announced: boolean;
  ended: boolean;
}

/** The specification that came with the run, once it is what its digest says. */
export function specificationOf(run: LiveRun): Checked<FitSpecification> {
  if (run.specification !== null) return succeed(run.specification);
  const { specification: text, digest } = run.message;
  if (digestOf(text) !== digest)
    return fail('frame-malformed', 'The specification does not have the digest that came with it.');
  const read = readCanonical(text);
  if (read.ok) run.specification = read.value;
  return read;
}

/** Solver columns p, intercept included; null until the scaling is known. */
export function solverColumns(spec: FitSpecification, scaling: Scaling | null): number | null {
  return scaling === null ? null : scaling.kept.length + (spec.intercept === 'shared' ? 1 : 0);
}

/** Whether a scaling fits the columns of this design: it comes from outside and is checked before it is used. */
export function checkScaling(scaling: Scaling, columns: number): Checked<null> {
  const { kept, center, scale } = scaling;
  const ordered = kept.every((column, at) => column < columns && (at === 0 || column > kept[at - 1]));
  if (ordered && center.length === kept.length && scale.length === kept.length && scale.every((s) => s > 0))
    return succeed(null);
  return fail('dimension-wrong', `The scaling does not fit the ${columns} design columns of this run.`);
}

export const sameScaling = (a: Scaling | null, b: Scaling | null): boolean =>
  a === b ||
  (a !== null &&
    b !== null &&
    a.rowCountTotal === b.rowCountTotal &&
    sameNumbers(a.kept, b.kept) &&
    sameNumbers(a.center, b.center) &&
    sameNumbers(a.scale, b.scale));

const sameNumbers = (a: ArrayLike<number>, b: ArrayLike<number>): boolean =>
  a.length === b.length && Array.from(a).every((value, at) => Object.is(value, b[at]));

/** The run's local solvers, built when first needed. */
export async function solversOf(
  run: LiveRun,
  spec: FitSpecification,
  raw: RawShard,
  kernel: KernelVariant | undefined,
): Promise<Checked<SiteSolvers | null>> {
  const { scaling } = run.message;
  if (run.solvers !== null || scaling === null) return succeed(run.solvers);
  const fits = checkScaling(scaling, raw.columns.length);
  if (!fits.ok) return fits;
  const made = await withinMemory(() => succeed(siteSolvers(spec, raw, scaling, kernel)));
  if (made.ok) run.solvers = made.value;
  return made;
}

type Shard = { readonly index: number; readonly of: number };

/**
 * Raw shards by what they are built from, so that runs on the same columns and rows read the table once. A failed
 * reading is not kept: the custodian may mend the table while the run waits.
 */
export class RawShards {
  readonly #build: ShardBuilder;
  readonly #shard: Shard;
  readonly #shards = new Map<string, { readonly built: BuiltShard; readonly runs: Set<string> }>();

  constructor(build: ShardBuilder, shard: Shard) {
    this.#build = build;
    this.#shard = shard;
  }

  /** `fresh`: the table was read for this call. */
  async get(
    run: string,
    spec: FitSpecification,
  ): Promise<Checked<{ readonly built: BuiltShard; readonly fresh: boolean }>> {
    const request = tableRequest(spec, this.#shard);
    const { response, offset, weights, terms, loss, choose, report } = spec;
    const folds = choose?.kind === 'folds' ? choose.by : null;
    const beside = [folds, report.sandwich, report.margins];
    const key = JSON.stringify([request, response, offset, weights, terms, loss, beside]);
    const kept = this.#shards.get(key);
    if (kept !== undefined) {
      kept.runs.add(run);
      return succeed({ built: kept.built, fresh: false });
    }
    const built = await withinMemory(() => this.#build(spec, request));
    if (!built.ok) return built;
    this.#shards.set(key, { built: built.value, runs: new Set([run]) });
    return succeed({ built: built.value, fresh: true });
  }

  /** Drops what no other run uses. */
  release(run: string): void {
    for (const [key, { built, runs }] of this.#shards) {
      runs.delete(run);
      if (runs.size === 0) this.#drop(key, built);
    }
  }

  /** Drops the shard whose rows are lost, for all runs: the next `get` reads the table again. */
  discard({ reader }: RowsLost): void {
    for (const [key, { built }] of this.#shards) if (built.cache === reader) this.#drop(key, built);
  }

  #drop(key: string, { cache }: BuiltShard): void {
    this.#shards.delete(key);
    cache?.close();
  }
}
