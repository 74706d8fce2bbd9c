import type { KernelVariant } from '../../numerics/kernels/kernel.js';
import { checkAsk } from '../../protocol/check-ask.js';
import { type Checked, fail, succeed } from '../../protocol/failure.js';
import type { Answer, Ask } from '../../protocol/messages/round.js';
import { numbersOfAnswer } from '../../protocol/numbers.js';
import { fitCount } from '../../protocol/specification/fit-count.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import { contentDigest, type FilledWork } from '../custody/content.js';
import type { Departure, Ledger } from '../custody/ledger.js';
import {
  allowanceOf,
  checkFolds,
  checkNumbers,
  checkRows,
  checkSpecification,
  checkWorks,
  curvatureOfWorks,
  curvatureTotal,
  kindsOfWork,
  type RunSize,
} from '../custody/policy.js';
import type { Policy } from '../custody/site-file.js';
import type { RawShard } from '../design/shard.js';
import { RowsLost } from '../design/streamed-rows.js';
import { lossOf } from '../losses/index.js';
import type { Table, TableRequest } from '../source/table.js';
import { workInWords } from './ask-words.js';
import type { ShardBuilder } from './built-shard.js';
import { computeWorks } from './compute.js';
import type { WorkerEvent } from './events.js';
import { type LiveRun, type RawShards, solverColumns, solversOf, specificationOf } from './live-run.js';
import { checkMatrices } from './matrix-size.js';
import { fillWorks, rememberAsked } from './memory.js';
import { checkWholeSite } from './whole-site.js';

/** Everything a worker's answers need from outside. */
export interface AnswerMeans {
  readonly site: string;
  readonly shard: { readonly index: number; readonly of: number };
  readonly policy: Policy;
  /** Approved digests, read at every ask: an approval taken back holds from then on. */
  readonly approved: () => Promise<Checked<ReadonlySet<string>>>;
  /** What passes over the rows are computed with; the plain one where none is named. */
  readonly kernel?: KernelVariant;
  readonly readTable: (request: TableRequest) => Promise<Checked<Table>>;
  /** How shards are made of the table; absent: in memory. */
  readonly buildShard?: ShardBuilder;
  readonly ledger: Pick<Ledger, 'departed' | 'look' | 'append' | 'catchUp'>;
  readonly nowMs: () => number;
  readonly onEvent: (event: WorkerEvent) => void;
  /** Lets sockets and signals in between two problems of one ask. */
  readonly pause: () => Promise<void>;
}

/** An ask that may be computed, with what that takes. */
interface Piece {
  readonly ask: Ask;
  readonly live: LiveRun;
  readonly spec: FitSpecification;
  readonly works: readonly FilledWork[];
  readonly wanted: () => boolean;
  readonly started: number;
}

/** Makes the answer to one ask: checks, computes, writes the ledger, remembers. One ask at a time. */
export class AnswerMaker {
  readonly #means: AnswerMeans;
  readonly #shards: RawShards;

  constructor(means: AnswerMeans, shards: RawShards) {
    this.#means = means;
    this.#shards = shards;
  }

  /** `wanted` is looked at now and then; null where the answer was given up because it is not wanted any more. */
  async make(ask: Ask, live: LiveRun, wanted: () => boolean): Promise<Checked<Answer> | null> {
    const started = this.#means.nowMs();
    const spec = await this.#admit(live);
    if (!spec.ok) return spec;
    const columns = solverColumns(spec.value, live.message.scaling);
    const wrong = checkAsk(ask, columns) ?? checkMatrices(ask.work, columns);
    if (wrong !== null) return { ok: false, failure: wrong };
    const filled = fillWorks(ask, live.memory);
    if (!filled.ok) return filled;
    return this.#answerFilled({ ask, live, spec: spec.value, works: filled.value, wanted, started });
  }

  /** The checks that need no row: digest, roster, policy. */
  async #admit(live: LiveRun): Promise<Checked<FitSpecification>> {
    const spec = specificationOf(live);
    if (!spec.ok) return spec;
    const { run, digest } = live.message;
    const { site, policy } = this.#means;
    if (!live.announced) this.#means.onEvent({ event: 'run', run, title: spec.value.title, digest: digest });
    live.announced = true;
    const { sites } = spec.value;
    if (!('least' in sites) && !sites.includes(site))
      return fail('site-unknown', `The specification does not name site ${site}.`);
    const partial = checkWholeSite(spec.value, this.#means.shard);
    if (partial !== null) return { ok: false, failure: partial };
    const approved = await this.#means.approved();
    if (!approved.ok) return approved;
    const refused = checkSpecification(policy, spec.value, digest, approved.value);
    return refused === null ? spec : { ok: false, failure: refused };
  }

  async #answerFilled(piece: Piece): Promise<Checked<Answer> | null> {
    const { ask, live, spec, works } = piece;
    const { ledger, policy } = this.#means;
    const { digest, scaling } = live.message;
    const content = contentDigest(digest, scaling, works);
    const look = ledger.look(ask.run, digest, ask.ask, content);
    if (!look.ok) return look;
    const repeated = look.value === 'repeat';
    const size = { fits: fitCount(spec), columns: solverColumns(spec, scaling) };
    const refused = repeated ? null : checkWorks(policy, ledger.departed(ask.run), ask.work, size);
    if (refused !== null) return { ok: false, failure: refused };
    rememberAsked(ask, live.memory);
    const same = live.last !== null && live.last.answer.ask === ask.ask && live.last.content === content;
    const made = same && live.last !== null ? succeed(live.last.answer) : await this.#compute(piece);
    if (made === null || !made.ok) return made;
    const numbers = made.value.work.reduce((sum, item) => sum + numbersOfAnswer(item), 0);
    if (!repeated) {
      const kinds = [...new Set(ask.work.flatMap(kindsOfWork))];
      const curvature = curvatureOfWorks(ask.work);
      const departure = { run: ask.run, digest, ask: ask.ask, kinds, numbers, curvature, content };
      const recorded = await this.#record(ask, size, departure);
      if (!recorded.ok) return recorded;
    }
    this.#keep(live, made.value, content);
    this.#tell(ask, numbers, repeated, piece.started);
    return made;
  }

  /** Where rows kept on disk are lost, the table is read again, once an answer. */
  async #compute(piece: Piece): Promise<Checked<Answer> | null> {
    try {
      return await this.#computeOnce(piece);
    } catch (error) {
      this.#giveUpLost(error, piece.live);
      this.#means.onEvent({ event: 'warning', message: `${error.message} The table is read again.` });
    }
    try {
      return await this.#computeOnce(piece);
    } catch (error) {
      this.#giveUpLost(error, piece.live);
      return fail('state-unwritable', error.message, { remedy: 'Check the disk of the site file.' });
    }
  }

  #giveUpLost(error: unknown, live: LiveRun): asserts error is RowsLost {
    if (!(error instanceof RowsLost)) throw error;
    this.#shards.discard(error);
    live.solvers = null;
  }

  async #computeOnce({ ask, live, spec, works, wanted }: Piece): Promise<Checked<Answer> | null> {
    const raw = await this.#rows(ask.run, spec);
    if (!raw.ok) return raw;
    const solvers = await solversOf(live, spec, raw.value, this.#means.kernel);
    if (!solvers.ok) return solvers;
    const means = {
      raw: raw.value,
      loss: lossOf(spec.loss),
      solvers: solvers.value,
      allowance: allowanceOf(this.#means.policy),
    };
    const computed = await computeWorks(works, means, async () => {
      await this.#means.pause();
      return live.ended || !wanted() ? 'stop' : 'go-on';
    });
    if (computed === null)
      return live.ended ? fail('run-cancelled', 'The run ended while its ask was being answered.') : null;
    return computed.ok
      ? succeed({ kind: 'answer', run: ask.run, ask: ask.ask, work: computed.value })
      : computed;
  }

  async #rows(run: string, spec: FitSpecification): Promise<Checked<RawShard>> {
    const started = this.#means.nowMs();
    const got = await this.#shards.get(run, spec);
    if (!got.ok) return got;
    const { built, fresh } = got.value;
    const { raw } = built;
    if (fresh) {
      const { bytesOnDisk } = built;
      const { rowCount: rowsUsed, rowsDropped, columns } = raw;
      const tookMs = this.#means.nowMs() - started;
      const read = { rowsUsed, rowsDropped, columns: columns.length, bytesOnDisk, tookMs };
      this.#means.onEvent({ event: 'table', run, ...read });
    }
    const { policy } = this.#means;
    const refused = checkRows(policy, raw.rowCount) ?? checkFolds(policy, raw.folds);
    return refused === null ? succeed(raw) : { ok: false, failure: refused };
  }

  /**
   * Writes the departure down. Where a worker that this one takes the place of has written meanwhile, its lines count
   * as ours do: the departure is looked at once more, and may be recorded already.
   */
  async #record(ask: Ask, size: RunSize, departure: Departure): Promise<Checked<null>> {
    const { ledger, policy } = this.#means;
    const { run, digest, content, numbers } = departure;
    const refused = checkNumbers(policy, ledger.departed(run), numbers);
    if (refused !== null) return { ok: false, failure: refused };
    const appended = await ledger.append(departure);
    if (appended.ok || appended.failure.code !== 'ledger-broken') return appended;
    const caughtUp = await ledger.catchUp();
    if (!caughtUp.ok) return caughtUp;
    const look = ledger.look(run, digest, ask.ask, content);
    if (!look.ok) return look;
    if (look.value === 'repeat') return succeed(null);
    const departed = ledger.departed(run);
    const over = checkWorks(policy, departed, ask.work, size) ?? checkNumbers(policy, departed, numbers);
    return over === null ? ledger.append(departure) : { ok: false, failure: over };
  }

  #keep(live: LiveRun, answer: Answer, content: string): void {
    live.last = { content, answer };
    for (const item of answer.work)
      if (item.work === 'proximal')
        for (const { problem, point } of item.problems)
          live.memory.remember('point', problem, answer.ask, point);
  }

  #tell(ask: Ask, numbers: number, repeated: boolean, started: number): void {
    const run = this.#means.ledger.departed(ask.run);
    this.#means.onEvent({
      event: 'answered',
      run: ask.run,
      ask: ask.ask,
      asked: ask.work.map(workInWords),
      kinds: [...new Set(ask.work.flatMap(kindsOfWork))],
      numbers,
      curvature: curvatureTotal(curvatureOfWorks(ask.work)),
      runNumbers: run.numbers,
      runCurvature: curvatureTotal(run.curvature),
      repeated,
      tookMs: this.#means.nowMs() - started,
    });
  }
}
