import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { type Failure, fail } from '../../protocol/failure.js';
import { LIMITS } from '../../protocol/limits.js';
import type { Answer, Ask, Refusal } from '../../protocol/messages/round.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import { numbersOfAnswer } from '../../protocol/numbers.js';
import { curvatureTotal } from '../custody/policy.js';
import { BACKOFF } from './backoff.js';
import type { ConnectionDeps, CoordinatorLink } from './connection.js';
import { LinkUse } from './link-use.js';
import { refusalOf } from './refusal.js';

export type SessionEnd =
  | { readonly kind: 'stopped' }
  | { readonly kind: 'final'; readonly failure: Failure }
  | {
      readonly kind: 'lost';
      readonly closeCode: number | null;
      readonly reason: string;
      /** The coordinator had said welcome. */
      readonly welcomed: boolean;
      /** The link did what it is for (`LinkUse`), or was up for long. */
      readonly worked: boolean;
    };

/** Room for what an answer holds beside its numbers. Bytes. */
const ENVELOPE_BYTES = 65_536;

/** Says hello and answers on one link until it closes or the worker is told to stop. */
export function serveLink(link: CoordinatorLink, deps: ConnectionDeps): Promise<SessionEnd> {
  return new Session(link, deps).end;
}

class Session {
  readonly end: Promise<SessionEnd>;
  readonly #link: CoordinatorLink;
  readonly #deps: ConnectionDeps;
  readonly #over = new AbortController();
  readonly #use = new LinkUse();
  /** Answers being made for this link, by (run, ask): a repeat needs no second one. */
  readonly #making = new Map<string, Promise<void>>();
  #finish: (end: SessionEnd) => void = () => undefined;
  #frameBytesMost: number | null = null;
  #stopping = false;

  constructor(link: CoordinatorLink, deps: ConnectionDeps) {
    this.#link = link;
    this.#deps = deps;
    this.end = new Promise((resolve) => {
      this.#finish = (end) => {
        this.#over.abort();
        deps.stop.removeEventListener('abort', this.#stop);
        resolve(end);
      };
    });
    link.onClose((code, reason) => {
      if (this.#stopping) this.#finish({ kind: 'stopped' });
      else this.#finish(this.#lost(code, reason));
    });
    link.onMessage((message) => this.#receive(message));
    deps.stop.addEventListener('abort', this.#stop, { once: true });
    link.send(deps.hello);
    if (deps.stop.aborted) this.#stop();
    else void this.#awaitWelcome();
  }

  #lost(closeCode: number, reason: string): SessionEnd {
    const welcomed = this.#frameBytesMost !== null;
    return { kind: 'lost', closeCode, reason, welcomed, worked: this.#use.worked(closeCode) };
  }

  async #awaitWelcome(): Promise<void> {
    await this.#deps.timers.wait(LIMITS.helloDeadlineMs, this.#over.signal);
    if (this.#frameBytesMost === null) this.#link.close(CLOSE_CODES.helloLate, 'no welcome in time');
  }

  async #awaitSteady(): Promise<void> {
    const { signal } = this.#over;
    await this.#deps.timers.wait(BACKOFF.steadyMs, signal);
    if (!signal.aborted) this.#use.stayedUp();
  }

  #receive(message: ToWorker): void {
    this.#use.received(message);
    if (message.kind === 'welcome') {
      if (this.#frameBytesMost !== null) this.#unexpected('a second welcome');
      else this.#welcome(message.software, message.frameBytesMost);
    } else if (this.#frameBytesMost === null) this.#unexpected(`${message.kind} before welcome`);
    else if (message.kind === 'prepare') this.#deps.answerer.prepare(message);
    else if (message.kind === 'ask') this.#take(message);
    else this.#runEnd(message.run, message.outcome);
  }

  #welcome(coordinator: string, frameBytesMost: number): void {
    this.#frameBytesMost = frameBytesMost;
    void this.#awaitSteady();
    const { url, hello } = this.#deps;
    const { site, shard, kernel } = hello;
    this.#deps.onEvent({ event: 'connected', url, site, shard, kernel, coordinator });
  }

  #unexpected(what: string): void {
    this.#link.close(CLOSE_CODES.messageUnexpected, what);
  }

  #take(ask: Ask): void {
    const key = `${ask.run} ${ask.ask}`;
    if (this.#stopping || this.#making.has(key)) return;
    this.#making.set(
      key,
      this.#answer(ask).finally(() => this.#making.delete(key)),
    );
  }

  async #answer(ask: Ask): Promise<void> {
    const reply = await this.#deps.answerer.answer(ask);
    if (reply === null) return;
    const answer = this.#fitting(reply);
    // a closed link needs nothing: the coordinator asks again on the next one
    if (this.#link.send(answer)) this.#use.sent(answer);
    else if (this.#link.open) this.#link.close(CLOSE_CODES.tooSlow, 'answers wait faster than they are read');
  }

  /** The answer, or a refusal where the coordinator does not take a frame of its size. */
  #fitting(answer: Answer | Refusal): Answer | Refusal {
    if (answer.kind === 'refusal') return answer;
    const most = Math.min(this.#frameBytesMost ?? 0, LIMITS.frameBytesMost);
    const bytes = 8 * answer.work.reduce((sum, item) => sum + numbersOfAnswer(item), 0) + ENVELOPE_BYTES;
    if (bytes <= most) return answer;
    const { failure } = fail(
      'frame-too-large',
      `The answer needs ${bytes} bytes; a frame may have ${most}.`,
      {
        remedy: 'Choose a lower rung (rounds.rung) or fewer terms.',
      },
    );
    this.#deps.onEvent({ event: 'refused', run: answer.run, ask: answer.ask, failure });
    return refusalOf(answer, failure);
  }

  #runEnd(run: string, outcome: string): void {
    const { answerer, onEvent, once } = this.#deps;
    answerer.forget(run);
    const { asks, numbers, curvature } = answerer.departed(run);
    onEvent({ event: 'run-ended', run, outcome, asks, numbers, curvature: curvatureTotal(curvature) });
    if (once) this.#stop();
  }

  /** Takes no further ask, finishes the answers in the making within the grace time, and closes. */
  readonly #stop = (): void => {
    if (this.#stopping) return;
    this.#stopping = true;
    void this.#windDown();
  };

  async #windDown(): Promise<void> {
    const { graceMs, onEvent, timers } = this.#deps;
    if (this.#making.size > 0) {
      onEvent({ event: 'stopping', answersOpen: this.#making.size, graceMs });
      await Promise.race([
        Promise.allSettled(this.#making.values()),
        timers.wait(graceMs, this.#over.signal),
      ]);
    }
    this.#link.close(CLOSE_CODES.goingAway, 'the worker is stopping');
    this.#finish({ kind: 'stopped' });
  }
}
