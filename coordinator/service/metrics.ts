import { Counter, collectDefaultMetrics, Gauge, Histogram, Registry } from 'prom-client';
import type { LogEvent, RoundEvent } from '../run/log-event.js';
import type { Onlooker } from './host-parts.js';
import type { RunSummary } from './run-entry.js';
import type { SiteTraffic } from './site-hub.js';

/** What is looked at when somebody reads the metrics. */
export interface MetricSources {
  runs(): readonly RunSummary[];
  /** Why a run stands still; null where none does. */
  halted(): string | null;
  traffic(): ReadonlyMap<string, SiteTraffic>;
}

const ANSWER_SECONDS = [0.01, 0.03, 0.1, 0.3, 1, 3, 10, 30, 100, 300];
const ROUND_SECONDS = [0.03, 0.1, 0.3, 1, 3, 10, 30, 100, 300, 1000];

type Out = { readonly relativeGap: Gauge; readonly primalResidual: Gauge; readonly dualResidual: Gauge };

/**
 * Counts since the start of the process, for a monitoring system that reads the Prometheus text format. Labels are bounded:
 * sites are those that tokens were issued to, and a run has series only while it is under way.
 */
export class Metrics implements Onlooker {
  private readonly registry = new Registry();
  private readonly rounds = this.counter('rounds_total', 'Rounds that were counted, over all runs', ['rung']);
  private readonly outcomes = this.counter('runs_ended_total', 'Runs that ended, by outcome', ['outcome']);
  private readonly missed = this.counter(
    'deadlines_missed_total',
    'Deadlines that passed without the answer of a site',
    ['site'],
  );
  private readonly numbers = this.counter('numbers_total', 'Numbers in asks (down) and answers (up)', [
    'direction',
  ]);
  private readonly roundTime = this.histogram(
    'round_seconds',
    'From an ask to the last answer counted',
    ROUND_SECONDS,
    [],
  );
  private readonly answerTime = this.histogram(
    'answer_seconds',
    'From an ask to the answer of a site',
    ANSWER_SECONDS,
    ['site'],
  );
  private readonly round = this.gauge('run_round', 'The newest round of a run', ['run']);
  private readonly standing: Out = {
    relativeGap: this.gauge('run_relative_gap', 'Distance to the optimum, measured or estimated', ['run']),
    primalResidual: this.gauge('run_primal_residual', 'Primal residual, on the proximal rung', ['run']),
    dualResidual: this.gauge('run_dual_residual', 'Dual residual, on the proximal rung', ['run']),
  };

  constructor(sources: MetricSources) {
    this.readSources(sources);
    collectDefaultMetrics({ register: this.registry, prefix: 'commonfit_' });
  }

  get contentType(): string {
    return this.registry.contentType;
  }

  text(): Promise<string> {
    return this.registry.metrics();
  }

  readonly event = (run: string, event: LogEvent): void => {
    if (event.event === 'round') this.roundDone(run, event);
    else if (event.event === 'late') for (const site of event.sites) this.missed.inc({ site: siteOf(site) });
    else if (event.event === 'outcome') {
      this.outcomes.inc({ outcome: event.outcome });
      for (const gauge of [this.round, ...Object.values(this.standing)]) gauge.remove({ run });
    }
  };

  readonly answered = (site: string, tookMs: number): void => {
    this.answerTime.observe({ site }, tookMs / 1000);
  };

  private roundDone(run: string, event: RoundEvent): void {
    this.rounds.inc({ rung: event.rung });
    this.roundTime.observe(event.tookMs / 1000);
    this.numbers.inc({ direction: 'up' }, event.numbersUp);
    this.numbers.inc({ direction: 'down' }, event.numbersDown);
    this.round.set({ run }, event.round);
    for (const key of ['relativeGap', 'primalResidual', 'dualResidual'] as const) {
      const value = event[key];
      if (value === null) this.standing[key].remove({ run });
      else this.standing[key].set({ run }, value);
    }
  }

  /** What is counted elsewhere is read when somebody asks. */
  private readSources({ runs, halted, traffic }: MetricSources): void {
    this.gauge(
      'runs',
      'Runs that wait for their sites or their turn, and that are under way',
      ['state'],
      (gauge) => {
        const all = runs();
        for (const state of ['waiting', 'running'])
          gauge.set({ state }, all.filter((run) => run.state === state).length);
      },
    );
    this.gauge(
      'halted',
      '1 where a run stands still because the state folder cannot be written',
      [],
      (gauge) => gauge.set(halted() === null ? 0 : 1),
    );
    this.gauge('links', 'Links of the workers of a site', ['site'], (gauge) => {
      for (const [site, { links }] of traffic()) gauge.set({ site }, links);
    });
    this.gauge(
      'send_queue_bytes',
      'Bytes that wait to be sent to the workers of a site',
      ['site'],
      (gauge) => {
        for (const [site, { waiting }] of traffic()) gauge.set({ site }, waiting);
      },
    );
    this.counter(
      'bytes_total',
      'Payload bytes of messages to (down) and from (up) a site',
      ['site', 'direction'],
      (counter) => {
        counter.reset();
        for (const [site, { sent, received }] of traffic()) {
          counter.inc({ site, direction: 'down' }, sent);
          counter.inc({ site, direction: 'up' }, received);
        }
      },
    );
  }

  private counter<Label extends string>(
    name: string,
    help: string,
    labelNames: Label[],
    read?: (counter: Counter<Label>) => void,
  ): Counter<Label> {
    const collect = read === undefined ? {} : { collect: reading(read) };
    return new Counter({ ...named(name, help), labelNames, registers: [this.registry], ...collect });
  }

  private gauge<Label extends string>(
    name: string,
    help: string,
    labelNames: Label[],
    read?: (gauge: Gauge<Label>) => void,
  ): Gauge<Label> {
    const collect = read === undefined ? {} : { collect: reading(read) };
    return new Gauge({ ...named(name, help), labelNames, registers: [this.registry], ...collect });
  }

  private histogram<Label extends string>(
    name: string,
    help: string,
    buckets: number[],
    labelNames: Label[],
  ): Histogram<Label> {
    return new Histogram({ ...named(name, help), buckets, labelNames, registers: [this.registry] });
  }
}

const named = (name: string, help: string) => ({ name: `commonfit_${name}`, help: `${help}.` });

/** The library calls `collect` with the metric as `this`. */
const reading = <Metric>(read: (metric: Metric) => void) =>
  function collect(this: Metric): void {
    read(this);
  };

/** A member is its site's name, with its shard behind it where there are several. */
const siteOf = (member: string): string => member.split('#', 1)[0];
