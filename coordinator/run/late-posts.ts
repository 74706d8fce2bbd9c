import type { EvaluateAnswer } from '../../protocol/messages/evaluate.js';
import type { JointAnswer } from '../../protocol/messages/joint.js';
import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import type { LateAnswers, SitePost, SiteReply } from '../consensus/late-method.js';
import type { ConsensusProblem } from '../consensus/problem.js';
import type { Batch, MemberReply } from './run.js';

/**
 * The posts of one late method as work for the members, and their replies as the method's. Names the vectors that a
 * member has already (`diagonalAsk`, `startAsk`).
 */
export class LatePosts {
  private readonly known: Known[];

  constructor(
    private readonly number: number,
    private readonly problem: ConsensusProblem,
  ) {
    this.known = problem.siteWeights.map(() => ({ diagonal: null, point: null }));
  }

  /** What each member is asked in ask number `ask`, in roster order. */
  works(posts: readonly (SitePost | null)[], ask: number): (readonly Work[] | null)[] {
    return posts.map((post, i) => (post === null ? null : [this.work(post, this.known[i], ask)]));
  }

  /** None of the replies is a refusal. `asked`: the newest ask of each member. */
  answers({ replies, agesMs }: Batch, asked: readonly number[]): LateAnswers {
    return {
      replies: replies.map((reply, i) =>
        reply === null ? null : this.reply(reply, this.known[i], asked[i]),
      ),
      agesMs,
    };
  }

  private work(post: SitePost, known: Known, ask: number): Work {
    const problem = this.number;
    switch (post.kind) {
      case 'evaluate': {
        const points = [{ point: post.point, want: post.want }];
        return { work: 'evaluate', problem, part: null, points, ownFit: null, sketch: null };
      }
      case 'joint': {
        const { start, curvature, linear } = post;
        const { l1, l2 } = this.problem.penalty;
        return { work: 'joint', problem, start, curvature, linear, l1, l2 };
      }
      case 'proximal': {
        const { center, scale, diagonal, start } = post;
        if (known.diagonal?.vector !== diagonal) known.diagonal = { vector: diagonal, ask };
        const startAsk = known.point?.vector === start ? known.point.ask : ask;
        const one = {
          problem,
          part: null,
          center,
          scale,
          diagonal,
          diagonalAsk: known.diagonal.ask,
          start,
          startAsk,
        };
        return { work: 'proximal', problems: [one] };
      }
    }
  }

  private reply(reply: MemberReply, known: Known, ask: number): SiteReply {
    const [answer] = reply as readonly WorkAnswer[];
    switch (answer.work) {
      case 'evaluate':
        return { kind: 'evaluate', at: evaluated(answer) };
      case 'joint':
        return joint(answer);
      case 'proximal': {
        const { point } = answer.problems[0];
        known.point = { vector: point, ask };
        return { kind: 'proximal', point };
      }
      default:
        throw new TypeError(`an answer to ${answer.work} where none was asked`);
    }
  }
}

interface Known {
  diagonal: { readonly vector: Float64Array; readonly ask: number } | null;
  point: { readonly vector: Float64Array; readonly ask: number } | null;
}

const evaluated = ({ points }: EvaluateAnswer) => points[0];

const joint = ({ start, point, end }: JointAnswer): SiteReply => ({ kind: 'joint', start, point, end });
