import type {
  LateAnswers,
  LateAsk,
  LateMethod,
  SitePost,
  SiteReply,
} from '../../coordinator/consensus/late-method.js';
import type { MethodEnd } from '../../coordinator/consensus/method.js';
import { opensAtMs } from '../../coordinator/panel/barrier.js';
import type { Penalty } from '../../numerics/penalty.js';
import type { LocalSolver } from '../../worker/local/local-solver.js';
import { must } from '../support/method-driver.js';

/** How long the answer of a site to an ask made at `nowMs` takes. */
export type Latency = (site: number, nowMs: number) => number;

export interface LateRun {
  readonly end: MethodEnd;
  readonly timeMs: number;
  /** Answers that arrived, per site. */
  readonly answers: readonly number[];
  readonly rounds: number;
  /** What the method was sent, round by round: enough to replay it. */
  readonly sent: readonly LateAnswers[];
  /** What it yielded. */
  readonly asked: readonly LateAsk[];
}

/** One site's reply to one post, by the real local solver. */
export function replyLocally(post: SitePost, site: LocalSolver, { l1, l2 }: Penalty): SiteReply {
  switch (post.kind) {
    case 'evaluate':
      return { kind: 'evaluate', at: must(site.evaluate(post.point, post.want)) };
    case 'proximal': {
      const { center, scale, diagonal, start } = post;
      return { kind: 'proximal', point: must(site.proximal(center, scale, diagonal, start)).point };
    }
    case 'joint': {
      const { start, curvature, linear } = post;
      return { kind: 'joint', ...must(site.joint(start, { curvature, linear }, l1, l2)) };
    }
  }
}

/** An ask a site has not answered. */
interface Open {
  readonly post: SitePost;
  /** When its answer comes; drawn anew when a newer ask takes its place. */
  readonly dueMs: number;
  /** When the first ask it has not answered was made. */
  readonly sinceMs: number;
}

/**
 * Drives a late method with real local solvers on a clock of its own: each answer comes after a drawn time, the newest
 * ask of a site counts, and the barrier is the panel's.
 */
export function simulateLate(
  method: LateMethod,
  sites: readonly LocalSolver[],
  penalty: Penalty,
  latency: Latency,
): LateRun {
  const open: (Open | null)[] = sites.map(() => null);
  const answers = sites.map(() => 0);
  const sent: LateAnswers[] = [];
  const asked: LateAsk[] = [];
  let nowMs = 0;
  for (let step = method.next(); ; ) {
    if (step.done) return { end: step.value, timeMs: nowMs, answers, rounds: asked.length, sent, asked };
    const ask = step.value;
    asked.push(ask);
    const openedAtMs = nowMs;
    ask.posts.forEach((post, i) => {
      if (post === null) return;
      const sinceMs = open[i]?.sinceMs ?? nowMs;
      open[i] = { post, dueMs: nowMs + latency(i, nowMs), sinceMs };
    });
    nowMs = barrierTime(ask, open, openedAtMs);
    const agesMs = open.map((own) =>
      own === null ? 0 : Math.round(Math.min(own.dueMs, nowMs) - own.sinceMs),
    );
    const replies = open.map((own, i): SiteReply | null => {
      if (own === null || own.dueMs > nowMs) return null;
      open[i] = null;
      answers[i]++;
      return replyLocally(own.post, sites[i], penalty);
    });
    const batch = { replies, agesMs };
    sent.push(batch);
    step = method.next(batch);
  }
}

function barrierTime(
  { posts, waitFor, quorum }: LateAsk,
  open: readonly (Open | null)[],
  openedAtMs: number,
): number {
  const asked = [...posts.keys()].filter((i) => posts[i] !== null);
  for (const i of waitFor) if (open[i] === null) throw new Error(`site ${i} is waited for and owes nothing`);
  const repliedAtMs: (number | null)[] = open.map(() => null);
  const coming = [...open.keys()].filter((i) => open[i] !== null);
  coming.sort((a, b) => (open[a]?.dueMs ?? 0) - (open[b]?.dueMs ?? 0));
  for (const i of coming) {
    const opens = opensAtMs({ waitFor, quorum, asked, openedAtMs }, repliedAtMs);
    const dueMs = open[i]?.dueMs ?? 0;
    if (opens !== null && opens <= dueMs) return opens;
    repliedAtMs[i] = dueMs;
  }
  const opens = opensAtMs({ waitFor, quorum, asked, openedAtMs }, repliedAtMs);
  if (opens === null) throw new Error('the barrier never opens');
  return opens;
}
