import { mkdtemp, readFile, rm, writeFile } from 'node:fs/promises';
import { tmpdir } from 'node:os';
import { join, resolve } from 'node:path';
import type { LogEvent } from '../../coordinator/run/log-event.js';
import { type Ended, Program, until } from './processes.js';
import { programs } from './programs.js';

/** For tests that start several processes, on a machine that is busy with other tests. */
export const PATIENT = { timeout: 90_000 } as const;

/**
 * A temporary folder and the processes that work in it: one coordinator, the workers, the analyst's commands. What
 * users do in several terminals. `close` ends every process that was started here.
 */
export class Stage {
  readonly #started: Program[] = [];
  readonly #workers = new Map<string, Program>();
  coordinator: Program | null = null;
  /** The coordinator's folder, in that of the stage unless it is absolute. */
  state = 'state';
  /** `http://127.0.0.1:PORT`; the port stays over restarts. */
  address = '';

  private constructor(
    readonly folder: string,
    private readonly launcher: readonly string[],
  ) {
    // a test runner that is stopped leaves no process behind
    process.once('exit', this.#killAll);
  }

  static async open(name: string, launcher: readonly string[] = []): Promise<Stage> {
    return new Stage(await mkdtemp(join(tmpdir(), `commonfit-${name}-`)), launcher);
  }

  readonly #killAll = (): void => {
    for (const program of this.#started) program.signal('SIGKILL');
  };

  async close(): Promise<void> {
    process.removeListener('exit', this.#killAll);
    await Promise.all(this.#started.map((program) => program.kill()));
    await rm(this.folder, { recursive: true, force: true });
  }

  /** Starts a program in the folder. */
  start(program: string, ...args: readonly string[]): Program {
    const started = new Program(program, args, this.folder, this.launcher);
    this.#started.push(started);
    return started;
  }

  /** Runs a command of the analyst's program to its end. */
  commonfit(...args: readonly string[]): Promise<Ended> {
    return this.start(programs.commonfit, ...args).end();
  }

  /** The same with the coordinator and the token of this stage. */
  analyst(...args: readonly string[]): Promise<Ended> {
    return this.startAnalyst(...args).end();
  }

  startAnalyst(...args: readonly string[]): Program {
    const token = join(this.state, 'analyst.token');
    return this.start(programs.commonfit, ...args, '--url', this.address, '--token-file', token);
  }

  worker(...args: readonly string[]): Promise<Ended> {
    return this.start(programs.worker, ...args).end();
  }

  /** Starts the coordinator: on a free port the first time, on the same port later. */
  async serve(): Promise<void> {
    const port = this.address === '' ? '0' : new URL(this.address).port;
    this.coordinator = this.start(
      programs.commonfit,
      ...['serve', '--listen', `127.0.0.1:${port}`, '--state', this.state],
    );
    const said = await this.coordinator.says(/coordinator is at \S+,/);
    this.address = /coordinator is at (\S+),/.exec(said)?.[1] ?? '';
  }

  async killCoordinator(): Promise<void> {
    await this.coordinator?.kill();
  }

  /** Writes a token for a site beside its site file. */
  async admit(site: string): Promise<void> {
    const { code, stderr } = await this.commonfit(
      'admit',
      site,
      '--state',
      this.state,
      '--out',
      `${site}.token`,
    );
    if (code !== 0) throw new Error(stderr);
  }

  /** Starts the worker of `SITE.site.yaml`. */
  join(site: string): Program {
    return this.joinFile(site, `${site}.site.yaml`);
  }

  /** The same with the site file given. */
  joinFile(site: string, siteFile: string): Program {
    const worker = this.start(programs.worker, 'join', siteFile, '--json');
    this.#workers.set(site, worker);
    return worker;
  }

  workerOf(site: string): Program {
    const worker = this.#workers.get(site);
    if (worker === undefined) throw new Error(`no worker of ${site} was started`);
    return worker;
  }

  /** Holds a site back in the middle of a run, so that an ask to it is open for certain. */
  async holdAt(following: Following, round: number, site: string): Promise<void> {
    await following.round(round);
    this.workerOf(site).signal('SIGSTOP');
    if (following.has('outcome')) throw new Error(`the run ended before ${site} was held back`);
  }

  async write(file: string, text: string): Promise<string> {
    await writeFile(join(this.folder, file), text);
    return file;
  }

  read(file: string): Promise<string> {
    return readFile(resolve(this.folder, file), 'utf8');
  }

  /** Submits a specification and follows it in a process of its own. */
  submit(file: string): Following {
    return new Following(this, this.startAnalyst('submit', file, '--watch', '--json'));
  }

  /** The bytes of a file of a run, where the coordinator keeps them. */
  resultOf(run: string, file = 'result.json'): Promise<string> {
    return this.read(join(this.state, 'runs', run, file));
  }
}

type EventOf<Kind extends LogEvent['event']> = Extract<LogEvent, { event: Kind }>;

/** What the round log says of the fit itself: all but times and traffic. */
export const roundsOf = (events: readonly LogEvent[]): unknown[] =>
  events
    .filter((event) => event.event === 'round')
    .map(({ round, rung, purpose, relativeGap, primalResidual, dualResidual, objective }) => ({
      ...{ round, rung, purpose, relativeGap, primalResidual, dualResidual, objective },
    }));

/** A run and its round log as `submit --watch --json` prints it. */
export class Following {
  constructor(
    private readonly stage: Stage,
    readonly program: Program,
  ) {}

  events(): LogEvent[] {
    return this.program.jsonLines<LogEvent>();
  }

  has<Kind extends LogEvent['event']>(
    kind: Kind,
    which: (event: EventOf<Kind>) => boolean = () => true,
  ): EventOf<Kind> | undefined {
    return this.events().find(
      (event): event is EventOf<Kind> => event.event === kind && which(event as EventOf<Kind>),
    );
  }

  /** Waits for an event; fails where the run ends before it. */
  event<Kind extends LogEvent['event']>(
    kind: Kind,
    which: (event: EventOf<Kind>) => boolean = () => true,
  ): Promise<EventOf<Kind>> {
    return until(
      `the event ${kind}`,
      () => {
        const { running } = this.program;
        const found = this.has(kind, which);
        if (found === undefined && !running)
          throw new Error(`The run ended before the event ${kind}. ${this.seen()}`);
        return found;
      },
      () => this.seen(),
    );
  }

  round(least: number): Promise<EventOf<'round'>> {
    return this.event('round', ({ round }) => round >= least);
  }

  async run(): Promise<string> {
    return (await this.event('accepted')).run;
  }

  /** Waits for the outcome: the exit code, the outcome event and the bytes of result.json. */
  async outcome(
    patienceMs?: number,
  ): Promise<{ code: number | null; event: EventOf<'outcome'>; result: string }> {
    const { code } = await this.program.end(patienceMs);
    const event = this.has('outcome');
    if (event === undefined) throw new Error(`no outcome. ${this.seen()}`);
    return { code, event, result: await this.stage.resultOf(await this.run()) };
  }

  private seen(): string {
    return `${this.program.stdout.slice(-3000)}${this.program.stderr}${this.stage.coordinator?.stderr.slice(-2000)}`;
  }
}
