import { type Checked, describeFailure, type Failure, fail, succeed } from '../../protocol/failure.js';
import type { Answer, Refusal } from '../../protocol/messages/round.js';
import { SOFTWARE } from '../../protocol/version.js';
import { type EndedRecord, encodeReply, type Measured, type OpenedRecord } from '../journal/records.js';
import type { Batch, Member, RunAsk, RunEnd, RunOutcome } from '../run/run.js';
import { AskDesk } from './ask-desk.js';
import { Drive, type Turn } from './drive.js';
import type { HostParts, HostState, LinkedMember } from './host-parts.js';
import { type Replayed, replay } from './replay.js';
import { forcedEnd } from './round-events.js';
import { RunTeller } from './run-teller.js';
import { TaskLine } from './task-line.js';
import { WaitingRoom } from './waiting-room.js';

type Ending = { readonly outcome: RunOutcome; readonly reason: string };

/**
 * Drives one run from its acceptance (or its journal) to its outcome. An answer reaches the generator only after the
 * journal holds it, and an outcome is told only after the journal and the result folder hold it. Everything with a
 * socket, clock or file comes in through `parts`.
 */
export class RunHost {
  private phase: 'idle' | 'waiting' | 'starting' | 'running' | 'ending' | 'ended' | 'halted' | 'stopped' =
    'idle';
  private room: WaitingRoom | null = null;
  private drive: Drive | null = null;
  private desk: AskDesk | null = null;
  /** What writes the journal goes through here: nothing else may move the run meanwhile. */
  private readonly line = new TaskLine((error) => this.haltOnDefect(error));
  private readonly tell: RunTeller;
  private cancelled = false;
  private end: RunEnd | null = null;
  private haltReason = '';

  /** `onChange` is called when the run starts, ends or halts. */
  constructor(
    private readonly parts: HostParts,
    private readonly onChange: () => void = () => {},
  ) {
    this.tell = new RunTeller(parts);
  }

  /** Reads the journal and takes the run up where it stands. To be called once. */
  open(): Promise<void> {
    return this.line.add(async () => {
      const { accepted, journal } = this.parts;
      const replayed = await replay(journal, accepted.run, (opened) => this.openDrive(opened));
      if (journal.tornBytes > 0) {
        const message = `The last record of the journal was cut off; ${journal.tornBytes} bytes of it were removed.`;
        this.parts.notice({ level: 'warn', message });
      }
      if (!replayed.ok) return this.stopOnBrokenJournal(replayed.failure);
      return this.resume(replayed.value);
    });
  }

  get state(): HostState {
    const round = this.drive?.round ?? 0;
    if (this.end !== null && this.phase === 'ended') return { state: 'ended', end: this.end };
    if (this.phase === 'halted') return { state: 'halted', reason: this.haltReason, round };
    return this.phase === 'starting' || this.drive !== null
      ? { state: 'running', round }
      : { state: 'waiting' };
  }

  connected(linked: LinkedMember): void {
    const ours = this.desk?.connected(linked) ?? (this.phase === 'waiting' && this.isExpected(linked.member));
    if (ours) this.tell.site(linked.member, 'connected');
    this.poke();
  }

  lost(linked: LinkedMember): void {
    const ours = this.desk?.lost(linked) ?? (this.phase === 'waiting' && this.isExpected(linked.member));
    if (ours) this.tell.site(linked.member, 'lost');
    this.poke();
  }

  receive(linked: LinkedMember, message: Answer | Refusal): void {
    this.desk?.receive(linked, message);
  }

  /** Looks again whether the run may leave the waiting state. */
  poke(): void {
    if (this.phase === 'waiting') this.room?.check();
  }

  /** Ends the run as `cancelled`, now or as soon as the journal is free. False when it has ended already. */
  cancel(): boolean {
    if (this.phase === 'ended' || this.phase === 'halted' || this.end !== null) return false;
    this.cancelled = true;
    if (!this.line.busy && this.phase !== 'idle') void this.line.add(() => this.endCancelled());
    return true;
  }

  /** Stops without an outcome where a file of the run cannot be written; the next start takes it up. */
  halt(failure: Failure): void {
    if (this.phase === 'ended' || this.phase === 'halted' || this.phase === 'stopped') return;
    this.phase = 'halted';
    this.haltReason = describeFailure(failure);
    this.room?.close();
    this.desk?.stop(null);
    this.parts.notice({ level: 'error', code: failure.code, message: this.haltReason });
    this.onChange();
  }

  /** Stops without an outcome, as a crash would, but after the write in progress. */
  async close(): Promise<void> {
    if (this.phase !== 'ended') this.phase = 'stopped';
    this.room?.close();
    this.desk?.stop(null);
    await this.line.drained();
    await this.parts.journal.close();
  }

  private async resume(replayed: Replayed): Promise<void> {
    if (replayed.kind === 'ended') return this.endAgain(replayed);
    if (replayed.kind === 'open') {
      this.tell.resumed(replayed.drive.round);
      return this.run(replayed.drive, replayed.turn);
    }
    if (this.phase === 'stopped') return;
    this.phase = 'waiting';
    if (this.cancelled) return this.endCancelled();
    this.room = new WaitingRoom(this.parts, {
      waiting: (sites) => this.tell.waiting(sites),
      ready: (roster) => {
        this.phase = 'starting';
        void this.line.add(() => this.begin(roster));
      },
      giveUp: (missing) => void this.line.add(() => this.endForced(siteMissing(missing))),
    });
    this.room.check();
  }

  private async begin(roster: readonly Member[]): Promise<void> {
    const { accepted, journal, node } = this.parts;
    const { run, canonical, digest, startFrom } = accepted;
    const opened: OpenedRecord = {
      record: 'opened',
      format: 1,
      run,
      specification: canonical,
      digest,
      roster: roster.map((member) => ({ ...member })),
      startFrom,
      software: SOFTWARE,
      node,
    };
    const kept = await journal.append(opened);
    if (!kept.ok) return this.halt(kept.failure);
    const drive = this.openDrive(opened);
    if (!drive.ok) return this.halt(drive.failure);
    return this.run(drive.value, drive.value.begin());
  }

  private openDrive({ run, digest, roster, startFrom }: OpenedRecord): Checked<Drive> {
    const { accepted } = this.parts;
    if (run !== accepted.run || digest !== accepted.digest) {
      return fail('journal-broken', `The journal is of run ${run} with specification ${digest}.`);
    }
    this.drive = new Drive(
      run,
      roster,
      (members) => this.parts.start(members, startFrom),
      (shown, measured) => this.tell.shown(shown, measured, roster),
    );
    return succeed(this.drive);
  }

  private async run(drive: Drive, turn: Turn): Promise<void> {
    if (this.phase === 'stopped' || this.phase === 'halted') return;
    this.phase = 'running';
    this.desk = new AskDesk(this.parts, drive.roster, {
      pass: (asked, ask, batch, measured) => void this.line.add(() => this.take(asked, ask, batch, measured)),
      giveUp: (names) => void this.line.add(() => this.endForced(siteMissing(names))),
      late: (sites, waitedMs, patienceLeftMs) =>
        this.tell.late(drive.survey === null ? 0 : drive.round + 1, sites, waitedMs, patienceLeftMs),
    });
    this.desk.resume(drive.owedBefore(turn), drive.gone);
    for (const linked of this.parts.connected()) this.desk.connected(linked);
    this.onChange();
    return this.go(turn);
  }

  /** Records the replies, then feeds them to the generator. */
  private async take(asked: RunAsk, ask: number, batch: Batch, measured: Measured): Promise<void> {
    const { drive } = this;
    // What was in the line before it may have ended the run.
    if (drive === null || this.phase !== 'running') return;
    const { run } = this.parts.accepted;
    const owed = drive.owedAsks();
    const kept = await this.parts.journal.append({
      record: 'answered',
      ask,
      asked: drive.digestOf(asked),
      replies: batch.replies.map((reply, member) =>
        reply === null ? null : encodeReply(run, owed[member] ?? ask, reply),
      ),
      agesMs: [...batch.agesMs],
      gone: [...batch.gone],
      measured,
    });
    if (!kept.ok) return this.halt(kept.failure);
    if (this.phase !== 'running') return;
    // What the journal holds counts, so that it leads to the same result document when it is replayed.
    const turn = drive.feed(asked, batch, measured);
    return this.cancelled ? this.endCancelled() : this.go(turn);
  }

  private go(turn: Turn): Promise<void> | void {
    if (turn.kind === 'end') return this.finish(turn.end, false);
    if (turn.kind === 'defect') {
      this.parts.notice({ level: 'error', code: 'internal', message: 'The run failed.', detail: turn.error });
      return this.endForced({ outcome: 'broken', reason: `A defect of commonfit: ${String(turn.error)}` });
    }
    if (this.cancelled) return this.endCancelled();
    this.desk?.open(turn.ask, turn.asked);
  }

  private endCancelled(): Promise<void> {
    return this.endForced({ outcome: 'cancelled', reason: 'Cancelled by the analyst.' });
  }

  private endForced(ending: Ending): Promise<void> {
    return this.finish(this.forced(ending), true);
  }

  private forced(ending: Ending): RunEnd {
    return forcedEnd(ending, this.parts.accepted, this.drive);
  }

  private async finish(end: RunEnd, forced: boolean): Promise<void> {
    if (this.phase !== 'running' && this.phase !== 'waiting') return;
    this.phase = 'ending';
    this.room?.close();
    this.desk?.stop(end.outcome);
    const { outcome, reason } = end;
    const kept = await this.parts.journal.append({ record: 'ended', outcome, reason, forced });
    return kept.ok ? this.publish(end) : this.halt(kept.failure);
  }

  /** The journal holds the end, but the coordinator stopped before the result folder and the round log did. */
  private endAgain({ turn, ended }: Extract<Replayed, { kind: 'ended' }>): Promise<void> | void {
    if (ended.forced) return this.publish(this.forced(endingOf(ended)));
    if (turn?.kind === 'end') return this.publish(turn.end);
    return this.stopOnBrokenJournal(
      fail('journal-broken', 'The journal says that the run has ended; the run itself goes on.').failure,
    );
  }

  private async publish(end: RunEnd): Promise<void> {
    const folder = await this.parts.keepResult(end);
    if (!folder.ok) return this.halt(folder.failure);
    this.tell.outcome(end, folder.value);
    // Nobody has been told where the round log could not be written.
    if (this.phase === 'halted') return;
    this.end = end;
    this.phase = 'ended';
    this.onChange();
  }

  private stopOnBrokenJournal(failure: Failure): Promise<void> | void {
    this.parts.notice({ level: 'error', code: failure.code, message: describeFailure(failure) });
    if (failure.code !== 'journal-broken') return this.halt(failure);
    return this.publish(this.forced({ outcome: 'broken', reason: describeFailure(failure) }));
  }

  private isExpected({ site }: Member): boolean {
    const { sites } = this.parts.accepted.specification;
    return !('includes' in sites) || sites.includes(site);
  }

  private haltOnDefect(error: unknown): void {
    const reason = error instanceof Error ? error.message : String(error);
    this.parts.notice({ level: 'error', code: 'internal', message: 'The run host failed.', detail: error });
    this.halt(fail('internal', `A defect of commonfit: ${reason}.`).failure);
  }
}

const siteMissing = (names: readonly string[]): Ending => ({
  outcome: 'site-missing',
  reason: `No answer within the patience of the run from ${names.join(', ')}.`,
});

const endingOf = ({ outcome, reason }: EndedRecord): Ending => ({
  outcome: outcome as RunOutcome,
  reason: reason ?? '',
});
