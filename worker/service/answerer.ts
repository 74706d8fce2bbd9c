import { type Checked, type Failure, fail } from '../../protocol/failure.js';
import type { Answer, Ask, Refusal } from '../../protocol/messages/round.js';
import type { Prepare } from '../../protocol/messages/run.js';
import { messageDigest } from '../custody/content.js';
import type { Departed } from '../custody/policy.js';
import { AnswerMaker, type AnswerMeans } from './answer-maker.js';
import { shardsInMemory } from './built-shard.js';
import { type LiveRun, RawShards, sameScaling } from './live-run.js';
import { VectorMemory } from './memory.js';
import { NewestAsks } from './newest-asks.js';
import { refusalOf } from './refusal.js';

export interface AnswererDeps extends AnswerMeans {
  readonly bounds?: Partial<AnswererBounds>;
}

export interface AnswererBounds {
  /** Runs kept; the one longest unused goes first and has to be prepared again. */
  readonly runsMost: number;
  /** Asks that may wait. */
  readonly asksMost: number;
  /** Numbers of remembered vectors in one run. */
  readonly memoryNumbersMost: number;
}

const BOUNDS: AnswererBounds = { runsMost: 16, asksMost: 64, memoryNumbersMost: 8_000_000 };

export interface Answerer {
  prepare(message: Prepare): void;
  /**
   * Never rejects. Asks are answered in the order they came; a repeated ask shares the answer in the making. Null:
   * skipped for a newer ask of the same run, and nothing has left.
   */
  answer(ask: Ask): Promise<Reply>;
  forget(run: string): void;
  departed(run: string): Departed;
  /** Asks not yet answered. */
  readonly open: number;
}

/** Null: skipped. */
export type Reply = Answer | Refusal | null;

/** An ask that has not begun. */
interface Waiting {
  readonly ask: Ask;
  readonly begin: () => Promise<void>;
  readonly settle: (reply: Reply) => void;
}

export function createAnswerer(deps: AnswererDeps): Answerer {
  return new OrderedAnswerer(deps);
}

class OrderedAnswerer implements Answerer {
  readonly #deps: AnswererDeps;
  readonly #bounds: AnswererBounds;
  /** Longest unused first. */
  readonly #runs = new Map<string, LiveRun>();
  readonly #shards: RawShards;
  readonly #maker: AnswerMaker;
  /** Asks not yet answered, by run, number and content. */
  readonly #making = new Map<string, Promise<Reply>>();
  readonly #newest: NewestAsks;
  readonly #queue: (Waiting | (() => void))[] = [];
  #busy = false;

  constructor(deps: AnswererDeps) {
    this.#deps = deps;
    this.#bounds = { ...BOUNDS, ...deps.bounds };
    this.#newest = new NewestAsks(this.#bounds.runsMost);
    this.#shards = new RawShards(deps.buildShard ?? shardsInMemory(deps.readTable), deps.shard);
    this.#maker = new AnswerMaker(deps, this.#shards);
  }

  get open(): number {
    return this.#making.size;
  }

  departed(run: string): Departed {
    return this.#deps.ledger.departed(run);
  }

  prepare(message: Prepare): void {
    this.#newest.forget(message.run);
    this.#enqueue(() => this.#prepare(message));
  }

  forget(run: string): void {
    const live = this.#runs.get(run);
    if (live !== undefined) live.ended = true;
    this.#newest.forget(run);
    this.#enqueue(() => this.#drop(run));
  }

  answer(ask: Ask): Promise<Reply> {
    const key = `${ask.run} ${ask.ask} ${messageDigest(ask.work)}`;
    const making = this.#making.get(key);
    if (making !== undefined) return making;
    this.#newest.arrived(ask);
    this.#skipWaiting(ask.run);
    if (this.#isOld(ask)) return Promise.resolve(this.#skipped(ask));
    if (this.#making.size >= this.#bounds.asksMost) {
      const message = `${this.#making.size} asks wait at this worker already.`;
      const { failure } = fail('internal', message, { remedy: 'Ask again when they are answered.' });
      return Promise.resolve(refusalOf(ask, failure));
    }
    const made = new Promise<Reply>((resolve) => {
      const settle = (reply: Reply): void => {
        this.#making.delete(key);
        resolve(reply);
      };
      this.#enqueue({ ask, settle, begin: async () => settle(await this.#answerOrRefuse(ask)) });
    });
    this.#making.set(key, made);
    return made;
  }

  #isOld(ask: Ask): boolean {
    return this.#newest.of(ask.run) > ask.ask;
  }

  #skipped({ run, ask }: Ask): null {
    this.#deps.onEvent({ event: 'skipped', run, ask, newest: this.#newest.of(run) });
    return null;
  }

  /** Takes asks of the run that have not begun and have a newer one out of the queue. */
  #skipWaiting(run: string): void {
    for (let at = this.#queue.length - 1; at >= 0; at--) {
      const task = this.#queue[at];
      if (!('ask' in task) || task.ask.run !== run || !this.#isOld(task.ask)) continue;
      this.#queue.splice(at, 1);
      task.settle(this.#skipped(task.ask));
    }
  }

  /** One thing at a time, in order. */
  #enqueue(task: Waiting | (() => void)): void {
    this.#queue.push(task);
    if (this.#busy) return;
    this.#busy = true;
    void Promise.resolve().then(() => this.#work());
  }

  async #work(): Promise<void> {
    for (let task = this.#queue.shift(); task !== undefined; task = this.#queue.shift()) {
      if ('ask' in task) await task.begin();
      else task();
    }
    this.#busy = false;
  }

  #prepare(message: Prepare): void {
    const live = this.#runs.get(message.run);
    this.#runs.delete(message.run);
    const before = live?.message;
    if (
      live !== undefined &&
      !live.ended &&
      before?.digest === message.digest &&
      before.specification === message.specification
    ) {
      if (!sameScaling(before.scaling, message.scaling)) {
        live.solvers = null;
        live.last = null;
        live.memory.clear();
      }
      live.message = message;
      this.#runs.set(message.run, live);
      return;
    }
    for (const run of this.#runs.keys()) if (this.#runs.size >= this.#bounds.runsMost) this.#drop(run);
    this.#runs.set(message.run, {
      message,
      memory: new VectorMemory(this.#bounds.memoryNumbersMost),
      specification: null,
      solvers: null,
      last: null,
      announced: false,
      ended: false,
    });
  }

  #drop(run: string): void {
    this.#runs.delete(run);
    this.#shards.release(run);
  }

  async #answerOrRefuse(ask: Ask): Promise<Reply> {
    const failure = (at: Failure): Refusal => {
      this.#deps.onEvent({ event: 'refused', run: ask.run, ask: ask.ask, failure: at });
      return refusalOf(ask, at);
    };
    try {
      const answered = await this.#answer(ask);
      if (answered === null) return this.#skipped(ask);
      return answered.ok ? answered.value : failure(answered.failure);
    } catch (error) {
      // a defect of this program: named in the site's log, kept from the wire
      const message = error instanceof Error ? (error.stack ?? error.message) : String(error);
      return failure({ code: 'internal', message, remedy: 'Please report this.' });
    }
  }

  async #answer(ask: Ask): Promise<Checked<Answer> | null> {
    const live = this.#runs.get(ask.run);
    if (live === undefined || live.ended)
      return fail('run-unknown', `Run ${ask.run} is not known here.`, {
        remedy: 'Send "prepare" for it before the ask.',
      });
    this.#runs.delete(ask.run);
    this.#runs.set(ask.run, live);
    return this.#maker.make(ask, live, () => !this.#isOld(ask));
  }
}
