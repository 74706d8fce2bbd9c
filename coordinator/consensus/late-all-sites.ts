import type { LateDesk } from './late-desk.js';
import type { LateAnswers, LateAsk, SitePost, SiteReply } from './late-method.js';
import type { MethodAsk, SiteAnswers, SiteEvaluation } from './method.js';

/**
 * Drives a method, or a part of one, that hears all sites in every round: everyone is asked, whatever it owes, and
 * waited for. A site of a late round is asked about one point at a time: of several points the first is asked, and the
 * values tried beside it count as unknown, larger than any.
 */
export function* withAllSites<Note, T>(
  desk: LateDesk<Note>,
  note: Note,
  method: Generator<MethodAsk, T, SiteAnswers>,
): Generator<LateAsk, T, LateAnswers> {
  let step = method.next();
  while (!step.done) {
    const ask = step.value;
    const everyone = desk.sites();
    const postings = everyone.map((site) => ({ site, post: postOf(ask, site), note }));
    const arrivals = yield* desk.ask(postings, { waitFor: everyone, late: [] }, ask.progress);
    const replies = arrivals.map(({ reply }) => reply);
    step = method.next(
      ask.kind === 'proximal'
        ? { kind: 'proximal', points: replies.map(pointOf) }
        : { kind: 'evaluate', sites: replies.map((reply) => evaluation(ask, reply)) },
    );
  }
  return step.value;
}

function postOf(ask: MethodAsk, site: number): SitePost {
  if (ask.kind === 'proximal') {
    const { centers, scales, diagonal, starts } = ask;
    return { kind: 'proximal', center: centers[site], scale: scales[site], diagonal, start: starts[site] };
  }
  if (ask.kind === 'factor' || ask.ownFit !== null || ask.sketch !== null)
    throw new TypeError('a late round has proximal points and plain evaluations only');
  const [{ point, want }] = ask.points;
  return { kind: 'evaluate', point, want };
}

function evaluation(ask: MethodAsk, reply: SiteReply): SiteEvaluation {
  if (reply.kind !== 'evaluate' || ask.kind !== 'evaluate')
    throw new TypeError(`an evaluation was answered with ${reply.kind}`);
  const unknown = ask.points.slice(1).map(() => ({
    value: Number.POSITIVE_INFINITY,
    gradient: null,
    diagonal: null,
    curvature: null,
  }));
  return { points: [reply.at, ...unknown], ownFit: null, sketch: null };
}

export function pointOf(reply: SiteReply): Float64Array {
  if (reply.kind !== 'proximal') throw new TypeError(`a proximal ask was answered with ${reply.kind}`);
  return reply.point;
}
