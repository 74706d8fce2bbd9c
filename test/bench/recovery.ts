import { mkdtempSync, rmSync } from 'node:fs';
import { tmpdir } from 'node:os';
import { join } from 'node:path';
import { curvatureRung } from '../../coordinator/consensus/curvature-rung.js';
import type { Method } from '../../coordinator/consensus/method.js';
import type { ConsensusProblem } from '../../coordinator/consensus/problem.js';
import { proximalRung } from '../../coordinator/consensus/proximal-rung.js';
import { fileStore } from '../../coordinator/journal/file-store.js';
import { type Journal, openJournal } from '../../coordinator/journal/journal.js';
import { decodeReply, digestOfAsk, encodeReply } from '../../coordinator/journal/records.js';
import { isRefusal, type Reply } from '../../coordinator/panel/panel-state.js';
import { Lockstep } from '../../coordinator/run/lockstep.js';
import { numbersOfAnswer } from '../../protocol/numbers.js';
import { localSolver } from '../../worker/local/local-solver.js';
import { answerLocally, must } from '../support/method-driver.js';
import { type Hardship, makeHardProblem } from './hard-problem.js';
import { benchLoss, consensusProblem } from './measure.js';
import { writeResults } from './results-file.js';

/** What a journal costs: its bytes, and the processor time of its replay against that of the run. */
interface Case {
  readonly name: string;
  readonly hardship: Hardship;
  readonly method: (problem: ConsensusProblem) => Method;
  readonly budget: number;
  readonly roundsMost: number;
}

/** Processor time of this process: what else the machine does changes it little. */
const cpuMs = (): number => {
  const { user, system } = process.cpuUsage();
  return (user + system) / 1000;
};

const RUN = '20260301-093015-1f2e3d4c';
const correlated = { loss: 'logistic', sites: 8, correlation: 0.95, split: 'by-covariate' } as const;
const proximalOnly = { method: proximalRung, budget: 0 } as const;
const CASES: readonly Case[] = [
  {
    name: 'proximal, p = 50',
    hardship: { ...correlated, rows: 3000, columns: 49, penalty: { l1: 1e-4 } },
    ...proximalOnly,
    roundsMost: 200,
  },
  {
    name: 'proximal, p = 500',
    hardship: { ...correlated, rows: 800, columns: 499, penalty: { l1: 1e-4 } },
    ...proximalOnly,
    roundsMost: 100,
  },
  {
    name: 'proximal, p = 2000',
    hardship: { ...correlated, rows: 800, columns: 1999, penalty: { l1: 1e-4, l2: 1e-4 } },
    ...proximalOnly,
    roundsMost: 100,
  },
  {
    name: 'curvature, p = 500',
    hardship: { ...correlated, rows: 800, columns: 499, penalty: { l1: 1e-4 } },
    method: curvatureRung,
    budget: Number.POSITIVE_INFINITY,
    roundsMost: 100,
  },
];

interface Measured {
  readonly name: string;
  readonly rounds: number;
  readonly outcome: string;
  readonly journalBytes: number;
  readonly bytesPerRound: number;
  /** Journal bytes over 8 bytes for each number that the sites sent. */
  readonly bytesOverPayload: number;
  /** The run without a network: the coordinator, its journal, and in each round the slowest site. Processor seconds. */
  readonly runSeconds: number;
  readonly coordinatorSeconds: number;
  readonly journalSeconds: number;
  readonly replaySeconds: number;
  readonly replayOverRun: number;
}

async function measure(one: Case, folder: string): Promise<Measured> {
  const problem = makeHardProblem(one.name, one.hardship);
  const sites = problem.shards.map((shard) => localSolver(shard, benchLoss(problem.loss)));
  const posed = { ...consensusProblem(problem, 1e-12, one.budget), roundsMost: one.roundsMost };
  const path = join(folder, 'journal');
  const journal = await openedJournal(path);
  const started = cpuMs();
  let [sitesMs, slowestMs, journalMs, numbersUp] = [0, 0, 0, 0];
  const lockstep = new Lockstep(
    [{ method: one.method(posed), part: null, sites: [...sites.keys()] }],
    sites.length,
  );
  for (let ask = 1; lockstep.asks.length > 0; ask++) {
    const works = lockstep.works(ask);
    const tookMs: number[] = [];
    const answers = works.map((own, i) => {
      const from = cpuMs();
      const answer = own.map((work) => answerLocally(work, sites[i]));
      tookMs.push(cpuMs() - from);
      return answer;
    });
    sitesMs += tookMs.reduce((sum, ms) => sum + ms, 0);
    slowestMs += Math.max(...tookMs);
    numbersUp += answers.flat().reduce((sum, answer) => sum + numbersOfAnswer(answer), 0);
    const from = cpuMs();
    await keep(journal, ask, digestOfAsk(RUN, ask, works), answers);
    journalMs += cpuMs() - from;
    lockstep.receive(answers, ask);
  }
  const coordinatorMs = cpuMs() - started - sitesMs - journalMs;
  await journal.close();
  const [end] = lockstep.ends;
  const replayed = await replayFrom(path, one.method(posed), sites.length);
  if (JSON.stringify([...replayed.z]) !== JSON.stringify([...end.z]))
    throw new Error(`${one.name}: the replay came to another point`);
  const rounds = end.rounds;
  const runMs = coordinatorMs + journalMs + slowestMs;
  return {
    name: one.name,
    rounds,
    outcome: end.outcome,
    journalBytes: replayed.bytes,
    bytesPerRound: Math.round(replayed.bytes / rounds),
    bytesOverPayload: replayed.bytes / (8 * numbersUp),
    runSeconds: runMs / 1000,
    coordinatorSeconds: coordinatorMs / 1000,
    journalSeconds: journalMs / 1000,
    replaySeconds: replayed.tookMs / 1000,
    replayOverRun: replayed.tookMs / runMs,
  };
}

async function openedJournal(path: string): Promise<Journal> {
  const journal = openJournal(must(await fileStore(path)));
  must(await journal.next());
  return journal;
}

async function keep(journal: Journal, ask: number, asked: string, replies: readonly Reply[]): Promise<void> {
  const measured = { tookMs: 0, slowest: null, numbersUp: 0, numbersDown: 0, at: '2026-03-01T09:30:15Z' };
  const encoded = replies.map((reply) => encodeReply(RUN, ask, reply));
  const agesMs = replies.map(() => 0);
  must(
    await journal.append({ record: 'answered', ask, asked, replies: encoded, agesMs, gone: [], measured }),
  );
}

/** What a recovery does with the journal: reads, checks each ask's digest, decodes, and runs the method again. */
async function replayFrom(
  path: string,
  method: Method,
  siteCount: number,
): Promise<{ z: Float64Array; tookMs: number; bytes: number }> {
  const started = cpuMs();
  const store = must(await fileStore(path));
  const journal = openJournal(store);
  const lockstep = new Lockstep([{ method, part: null, sites: [...Array(siteCount).keys()] }], siteCount);
  for (let record = must(await journal.next()); record !== null; record = must(await journal.next())) {
    if (record.record !== 'answered') throw new Error(`a record of ${record.record}`);
    const { ask, asked, replies } = record;
    if (digestOfAsk(RUN, ask, lockstep.works(ask)) !== asked) throw new Error(`ask ${ask} is another one`);
    const answers = replies.map((bytes) => {
      if (bytes === null) throw new Error(`no reply to ask ${ask}`);
      const reply = must(decodeReply(RUN, ask, bytes));
      if (isRefusal(reply)) throw new Error(`a refusal of ask ${ask}`);
      return reply;
    });
    lockstep.receive(answers, ask);
  }
  const bytes = must(await store.size());
  await journal.close();
  return { z: lockstep.ends[0].z, tookMs: cpuMs() - started, bytes };
}

async function main(): Promise<void> {
  const only = process.argv[2];
  const results: Measured[] = [];
  for (const one of CASES.filter(({ name }) => only === undefined || name.includes(only))) {
    const folder = mkdtempSync(join(tmpdir(), 'commonfit-recovery-'));
    try {
      const found = await measure(one, folder);
      results.push(found);
      console.log(
        `${found.name}: ${found.rounds} rounds (${found.outcome}), ${(found.journalBytes / 2 ** 20).toFixed(1)} MiB, ` +
          `${found.bytesPerRound} bytes a round, ${found.bytesOverPayload.toFixed(3)} times the numbers; ` +
          `run ${found.runSeconds.toFixed(2)} s (coordinator ${found.coordinatorSeconds.toFixed(2)}, journal ${found.journalSeconds.toFixed(2)}), ` +
          `replay ${found.replaySeconds.toFixed(2)} s = ${found.replayOverRun.toFixed(3)} of it`,
      );
    } finally {
      rmSync(folder, { recursive: true });
    }
  }
  if (only !== undefined) return;
  writeResults('recovery', results);
}

await main();
