import type { Checked, FailureCode } from '../../protocol/failure.js';
import type { ToWorker } from '../../protocol/messages/to-worker.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { Journal } from '../journal/journal.js';
import type { LogEvent } from '../run/log-event.js';
import type { Member, Run, RunEnd } from '../run/run.js';
import type { StartFrom } from '../run/start-from.js';

/** A run as it was accepted: what is fitted, and the bytes its digest is of. */
export interface AcceptedRun {
  readonly run: string;
  readonly specification: FitSpecification;
  readonly canonical: string;
  readonly digest: string;
  readonly startFrom: StartFrom | null;
}

/** A member's present connection. The object is the connection's identity. */
export interface LinkedMember {
  readonly member: Member;
  /** False when the connection is closed or its buffer full; the panel asks again. */
  send(message: ToWorker): boolean;
  close(code: number, reason: string): void;
}

export interface HostTime {
  /** Milliseconds since 1970, for people. */
  wallMs(): number;
  /** Milliseconds on a clock that does not go back, for durations. */
  steadyMs(): number;
  /** Calls once after `delayMs`, unless the returned function is called before. */
  after(delayMs: number, call: () => void): () => void;
}

/** For the operational log; never the round log. */
export interface Notice {
  readonly level: 'debug' | 'info' | 'warn' | 'error';
  readonly message: string;
  readonly code?: FailureCode;
  readonly run?: string;
  readonly site?: string;
  readonly detail?: unknown;
}

/** Told of what happens in a run, for the metrics and the operational log. It changes nothing. */
export interface Onlooker {
  /** An event of the round log, once. */
  event(run: string, event: LogEvent): void;
  /** A member answered its newest ask, so long after it was sent. Milliseconds. */
  answered(site: string, tookMs: number): void;
}

/** Everything a run host is given; the service gives sockets and files, the simulator virtual time and memory. */
export interface HostParts {
  readonly accepted: AcceptedRun;
  /** The run's generator for a roster and what the journal holds to start from. */
  start(roster: readonly Member[], startFrom: StartFrom | null): Run;
  readonly journal: Journal;
  readonly time: HostTime;
  /** All connections there are now, in any order. */
  connected(): readonly LinkedMember[];
  /** Whether one more run may leave the waiting state; when one may again, `poke` is called. */
  mayStart(): boolean;
  log(event: LogEvent): void;
  notice(notice: Notice): void;
  readonly answered?: Onlooker['answered'];
  /** Writes the result folder, durably; returns its path. */
  keepResult(end: RunEnd): Promise<Checked<string>>;
  readonly logged: Logged;
  /** Node's version, for the journal. */
  readonly node: string;
}

/** What the round log of a run taken up again holds already, and is not to hold twice. */
export interface Logged {
  readonly surveys: number;
  /** Times that the run went on without a site. */
  readonly withouts: number;
  /** The last round. */
  readonly round: number;
}

export type HostState =
  /** For members, or for its turn. */
  | { readonly state: 'waiting' }
  | { readonly state: 'running'; readonly round: number }
  | { readonly state: 'ended'; readonly end: RunEnd }
  /** The state folder cannot be written: nothing more happens until the coordinator is started again. */
  | { readonly state: 'halted'; readonly reason: string; readonly round: number };
