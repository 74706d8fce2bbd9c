import { type ChildProcess, fork } from 'node:child_process';
import { once } from 'node:events';
import { mkdtemp, readFile, rm, stat } from 'node:fs/promises';
import { createServer } from 'node:http';
import type { AddressInfo } from 'node:net';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { type WebSocket, WebSocketServer } from 'ws';
import { fit as runOf } from '../../coordinator/run/fit.js';
import type { Batch, Run, RunAsk } from '../../coordinator/run/run.js';
import { type Service, startService } from '../../coordinator/service/service.js';
import { openTokens } from '../../coordinator/service/tokens.js';
import { LIMITS } from '../../protocol/limits.js';
import { must } from '../support/method-driver.js';
import { until } from '../support/processes.js';
import { programs } from '../support/programs.js';
import { cpuMs } from './results-file.js';
import { type ScaleSpecification, SITE, scaleSpecification } from './scale-specification.js';
import type { WorkersOrder } from './scale-workers.js';

export interface ScaleCase extends ScaleSpecification {
  readonly siteCount: number;
  /** Fits, each between two stretches of echoed frames. */
  readonly repeats: number;
  /** Frames echoed by each site in a stretch; none where it is 0. */
  readonly echoRounds: number;
}

export interface ScaleFigures {
  readonly p: number;
  readonly siteCount: number;
  readonly rung: string;
  readonly outcome: string;
  readonly relativeGap: number | null;
  readonly rounds: number;
  /** Processor time of the coordinator a round, by what was asked in it: the quickest fit's mean. Milliseconds. */
  readonly cpuMs: Readonly<Partial<Record<string, number>>>;
  /** Of echoing a frame of 8 p bytes to and from every site: the quickest stretch's mean. Milliseconds; null: not done. */
  readonly echoCpuMs: number | null;
  /** Proximal rounds (on the sketched rung: evaluations) over echoes. */
  readonly ratio: number | null;
  /** From the end of the iteration to the result folder. Milliseconds of processor time. */
  readonly endingCpuMs: number;
  readonly journalBytesPerRound: number;
  readonly residentMostMiB: number;
}

/** Rounds left out at the beginning of a fit: code is not compiled yet, and the first ask brings what later ones leave out. */
const WARM_UP_ROUNDS = 3;
const PATIENCE_MS = 30 * 60_000;

/** One coordinator with so many light workers over WebSockets; it is this process, they are another. */
export async function measureScale(one: ScaleCase): Promise<ScaleFigures> {
  const state = await mkdtemp(join(tmpdir(), 'commonfit-scale-'));
  const meter = new RoundMeter();
  const service = must(await startService(settingsFor(state), { fit: meter.measured }));
  const workers = fork(programs.lightWorkers);
  try {
    const specification = scaleSpecification(one);
    const token = must(await openTokens(state).issue({ kind: 'site', name: SITE }));
    const { siteCount } = one;
    await told(workers, { do: 'link', address: service.address, token, siteCount, specification });
    const echo = one.echoRounds === 0 ? null : await Echo.open(workers, one);
    const fits: FitFigures[] = [];
    const echoes: number[] = [];
    for (let k = 0; k < one.repeats; k++) {
      if (echo !== null) echoes.push(await echo.stretch());
      fits.push(await fitOnce(service, state, specification, meter));
    }
    if (echo !== null) echoes.push(await echo.stretch());
    echo?.close();
    return figuresOf(one, fits, echoes);
  } finally {
    workers.disconnect();
    await service.close();
    await rm(state, { recursive: true });
  }
}

const settingsFor = (state: string) => ({
  state,
  port: 0,
  logLevel: 'silent' as const,
  linksMost: 2000,
  linksPerSiteMost: 2000,
  linksPerMinuteMost: 2000,
  connectionsPerAddressMost: 1000,
});

async function told(workers: ChildProcess, order: WorkersOrder): Promise<void> {
  workers.send(order);
  await once(workers, 'message');
}

/** The processor time between the asks of a run. */
class RoundMeter {
  private last: { readonly kind: string; readonly atMs: number } | null = null;
  rounds: { readonly kind: string; readonly ms: number }[] = [];
  ended = false;
  endedAtMs = 0;
  p = 0;

  measured = (...given: Parameters<typeof runOf>): Run => this.watch(runOf(...given));

  private *watch(run: Run): Run {
    this.rounds = [];
    this.ended = false;
    this.last = null;
    let step = run.next();
    while (!step.done) {
      this.mark(kindOf(step.value));
      this.p = (step.value.scaling?.kept.length ?? 0) || this.p;
      const batch: Batch = yield step.value;
      step = run.next(batch);
    }
    this.mark('end');
    this.endedAtMs = cpuMs();
    this.ended = true;
    return step.value;
  }

  private mark(kind: string): void {
    const atMs = cpuMs();
    if (this.last !== null) this.rounds.push({ kind: this.last.kind, ms: atMs - this.last.atMs });
    this.last = { kind, atMs };
  }
}

const kindOf = ({ works }: RunAsk): string => works[0]?.[0]?.work ?? 'nothing';

interface FitFigures {
  readonly p: number;
  readonly outcome: string;
  readonly relativeGap: number | null;
  readonly rounds: number;
  readonly cpuMs: ScaleFigures['cpuMs'];
  readonly endingCpuMs: number;
  readonly journalBytes: number;
}

async function fitOnce(
  service: Service,
  state: string,
  specification: string,
  meter: RoundMeter,
): Promise<FitFigures> {
  meter.ended = false;
  const analyst = (await readFile(join(state, 'analyst.token'), 'utf8')).trim();
  const headers = { authorization: `Bearer ${analyst}`, 'content-type': 'application/json' };
  const body = JSON.stringify({ specification, file: 'scale.fit.yaml' });
  const submitted = await fetch(`${service.address}/v1/runs`, { method: 'POST', headers, body });
  if (submitted.status !== 201) throw new Error(await submitted.text());
  const { run } = (await submitted.json()) as { run: string };
  // requests would count as work of the coordinator: there are none before the iteration is over
  await until(
    'the end of the iteration',
    () => meter.ended,
    () => JSON.stringify(meter.rounds),
    PATIENCE_MS,
  );
  await until('the end of the run', async () => {
    const summary = await fetch(`${service.address}/v1/runs/${run}`, { headers });
    return ((await summary.json()) as { state: string }).state === 'ended';
  });
  const endingCpuMs = cpuMs() - meter.endedAtMs;
  const folder = join(state, 'runs', run);
  const result = JSON.parse(await readFile(join(folder, 'result.json'), 'utf8'));
  const { size } = await stat(join(folder, 'journal'));
  return {
    p: meter.p,
    outcome: result.outcome,
    relativeGap: result.fits[0]?.certificate?.relativeGap ?? null,
    rounds: result.rounds,
    cpuMs: meansByKind(meter.rounds),
    endingCpuMs,
    journalBytes: size,
  };
}

function meansByKind(rounds: RoundMeter['rounds']): ScaleFigures['cpuMs'] {
  const kinds = [...new Set(rounds.map(({ kind }) => kind))];
  return Object.fromEntries(
    kinds.map((kind) => {
      const own = rounds.filter((round, at) => round.kind === kind && at >= warmUpOf(kind));
      return [kind, own.reduce((sum, { ms }) => sum + ms, 0) / Math.max(own.length, 1)];
    }),
  );
}

/** The survey comes but once. */
const warmUpOf = (kind: string): number => (kind === 'survey' ? 0 : WARM_UP_ROUNDS);

/** A plain server that sends every worker a frame and waits until each has come back, as often as is asked. */
class Echo {
  private readonly sockets: WebSocket[] = [];
  private back = 0;
  private whole: () => void = () => {};

  private constructor(
    private readonly one: ScaleCase,
    private readonly frame: Uint8Array,
  ) {}

  static async open(workers: ChildProcess, one: ScaleCase): Promise<Echo> {
    const echo = new Echo(one, new Uint8Array(8 * one.p));
    const http = createServer();
    const server = new WebSocketServer({
      server: http,
      perMessageDeflate: false,
      maxPayload: LIMITS.frameBytesMost,
    });
    server.on('connection', (socket) => echo.add(socket));
    http.listen(0, '127.0.0.1');
    await once(http, 'listening');
    const { port } = http.address() as AddressInfo;
    const { siteCount } = one;
    await told(workers, { do: 'echo', url: `ws://127.0.0.1:${port}`, siteCount });
    await until('every echo', () => echo.sockets.length === siteCount);
    http.unref();
    return echo;
  }

  private add(socket: WebSocket): void {
    this.sockets.push(socket);
    socket.on('message', () => {
      this.back += 1;
      if (this.back === this.sockets.length) this.whole();
    });
  }

  /** Processor time a round. Milliseconds. */
  async stretch(): Promise<number> {
    const { echoRounds } = this.one;
    const from = cpuMs();
    for (let round = 0; round < echoRounds; round++) {
      this.back = 0;
      await new Promise<void>((resolve) => {
        this.whole = resolve;
        for (const socket of this.sockets) socket.send(this.frame, { binary: true });
      });
    }
    return (cpuMs() - from) / echoRounds;
  }

  close(): void {
    for (const socket of this.sockets) socket.close();
  }
}

function figuresOf(one: ScaleCase, fits: readonly FitFigures[], echoes: readonly number[]): ScaleFigures {
  const [first] = fits;
  const kinds = Object.keys(first.cpuMs);
  const least = Object.fromEntries(
    kinds.map((kind) => [kind, Math.min(...fits.map((own) => own.cpuMs[kind] ?? Number.NaN))]),
  );
  const echoCpuMs = echoes.length === 0 ? null : Math.min(...echoes);
  const compared = least[one.rung === 'proximal' ? 'proximal' : 'evaluate'];
  return {
    p: first.p,
    siteCount: one.siteCount,
    rung: one.rung,
    outcome: first.outcome,
    relativeGap: first.relativeGap,
    rounds: first.rounds,
    cpuMs: least,
    echoCpuMs,
    ratio: echoCpuMs === null || compared === undefined ? null : compared / echoCpuMs,
    endingCpuMs: Math.min(...fits.map((own) => own.endingCpuMs)),
    journalBytesPerRound: Math.round(first.journalBytes / Math.max(first.rounds, 1)),
    residentMostMiB: process.resourceUsage().maxRSS / 1024,
  };
}
