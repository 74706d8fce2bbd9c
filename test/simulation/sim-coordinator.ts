import { openJournal } from '../../coordinator/journal/journal.js';
import { fit as fitRun } from '../../coordinator/run/fit.js';
import type { LogEvent } from '../../coordinator/run/log-event.js';
import type { RunEnd } from '../../coordinator/run/run.js';
import type { LinkedMember, Notice } from '../../coordinator/service/host-parts.js';
import { loggedIn } from '../../coordinator/service/run-entry.js';
import { RunHost } from '../../coordinator/service/run-host.js';
import { SiteHub } from '../../coordinator/service/site-hub.js';
import { type Checked, succeed } from '../../protocol/failure.js';
import type { Answer, Refusal } from '../../protocol/messages/round.js';
import type { Cluster } from './cluster.js';
import type { Model } from './models.js';
import { diskFull, journalStoreOn, type SimFile } from './sim-file.js';
import type { SimProcess } from './sim-process.js';

/** What the state folder holds of one run. */
export interface StoredRun {
  readonly run: string;
  readonly model: Model;
  readonly journal: SimFile;
  log: LogEvent[];
  result: string | null;
}

/** A coordinator process over the stored runs: the real hub and one real run host for every run without an outcome. */
export class SimCoordinator {
  private readonly hub: SiteHub;
  private readonly hosts = new Map<string, RunHost>();
  private stopping = false;

  constructor(
    private readonly cluster: Cluster,
    readonly process: SimProcess,
  ) {
    this.hub = new SiteHub(process, {
      connected: (linked) => this.each((host) => host.connected(linked)),
      lost: (linked) => this.each((host) => host.lost(linked)),
      message: (linked, message) => this.message(linked, message),
      notice: (notice) => this.notice(notice),
    });
  }

  get door(): SiteHub {
    return this.hub;
  }

  open(stored: StoredRun): void {
    if (stored.log.some(({ event }) => event === 'outcome')) return;
    const { run, model, log } = stored;
    const { specification, canonical, digest } = model;
    const weather = this.cluster.weatherOf('coordinator', () => this.cluster.crashCoordinator());
    const host: RunHost = new RunHost(
      {
        accepted: { run, specification, canonical, digest, startFrom: null },
        start: (roster) => fitRun(specification, digest, roster),
        journal: openJournal(journalStoreOn(stored.journal, this.process, weather)),
        time: this.process,
        connected: () => this.hub.connected(),
        mayStart: () => this.running < this.cluster.runningMost,
        log: (event) => this.log(stored, event),
        notice: (notice) => this.notice(notice),
        keepResult: (end) => this.keepResult(stored, end),
        logged: loggedIn(log),
        node: 'v20',
      },
      () => this.changed(stored, host),
    );
    this.hosts.set(run, host);
    void host.open();
  }

  cancel(run: string): boolean {
    return this.hosts.get(run)?.cancel() ?? false;
  }

  /** Stops in good order, as at a signal. */
  async stop(): Promise<void> {
    this.stopping = true;
    for (const host of this.hosts.values()) await host.close();
    this.hub.close();
  }

  private get running(): number {
    return [...this.hosts.values()].filter((host) => host.state.state === 'running').length;
  }

  private each(call: (host: RunHost) => void): void {
    for (const host of this.hosts.values()) call(host);
  }

  private message(linked: LinkedMember, message: Answer | Refusal): void {
    this.hosts.get(message.run)?.receive(linked, message);
  }

  private notice({ level, code, message, detail }: Notice): void {
    if (level === 'error' && code !== 'state-unwritable')
      this.cluster.violated(`the coordinator met an error: ${message} [${code}] ${detail ?? ''}`);
    this.cluster.noticed(code ?? level);
  }

  private log(stored: StoredRun, event: LogEvent): void {
    if (!this.process.alive) throw new Error('a dead process writes');
    stored.log.push(event);
    this.cluster.checkLog(stored, event);
  }

  private async keepResult(stored: StoredRun, end: RunEnd): Promise<Checked<string>> {
    const weather = this.cluster.weatherOf('coordinator', () => this.cluster.crashCoordinator());
    weather.reached('nothing');
    await this.process.sleep(weather.delayMs());
    if (weather.full()) return diskFull('The result');
    const text = JSON.stringify(end.result, null, 2);
    if (stored.result !== null && stored.result !== text)
      this.cluster.violated(`${stored.run}: a kept result was replaced by another one`);
    stored.result = text;
    weather.reached('unacknowledged');
    await this.process.sleep(weather.delayMs());
    return succeed('folder');
  }

  private changed(stored: StoredRun, host: RunHost): void {
    const { state } = host.state;
    if (state === 'halted') this.cluster.halted(stored.run);
    if (state === 'ended') {
      this.hosts.delete(stored.run);
      void host.close();
    }
    if (!this.stopping) this.each((other) => other.poke());
  }
}
