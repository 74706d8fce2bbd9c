import type { Work, WorkAnswer } from '../../protocol/messages/round.js';
import type { SurveyAnswer } from '../../protocol/messages/survey.js';
import type { SiteEvaluation } from '../consensus/method.js';
import type { MemberReply, Stage } from './run.js';

/** What one ask of a run brought: per member, the work that it answered, or null. */
export interface Heard {
  readonly ask: number;
  readonly stage: Stage;
  readonly answers: readonly ({ readonly works: readonly Work[]; readonly reply: MemberReply } | null)[];
}

type Evaluation = SiteEvaluation['points'][number];

/** All members' answers at one point. */
export interface PointAnswers {
  readonly point: Float64Array;
  /** In roster order. */
  readonly answers: readonly Evaluation[];
  /** The last ask that brought one of them. */
  readonly ask: number;
}

/**
 * The answers that a run was given, sorted by the point they are about and not by the iteration that asked: what every
 * member said of all rows at one point, and their triangular factors. A run that begins again without some members asks
 * for a survey again, and what was said before counts no more: it was divided by other rows.
 */
export class AnswerBook {
  /** Members present since the last survey, by index. */
  present: readonly number[] = [];
  surveys: readonly SurveyAnswer[] = [];
  private readonly points = new Map<string, { point: Float64Array; said: Said[] }>();
  private readonly factors = new Map<number, readonly Float64Array[]>();
  private factorAsk = 0;

  hear({ ask, stage, answers }: Heard): void {
    if (stage === 'survey') this.begin(answers);
    for (const [member, own] of answers.entries()) {
      if (own === null || 'code' in own.reply) continue;
      for (const [k, answer] of own.reply.entries()) this.note(ask, member, own.works[k], answer);
    }
  }

  /** Points at which every member has given what `has` looks for, in the order in which the first was asked. */
  complete(has: (answer: Evaluation) => boolean): PointAnswers[] {
    return [...this.points.values()].flatMap(({ point, said }) => {
      const answers: Evaluation[] = [];
      let last = 0;
      for (const member of this.present) {
        const found = said.find((one) => one.member === member && has(one.answer));
        if (found === undefined) return [];
        answers.push(found.answer);
        last = Math.max(last, found.ask);
      }
      return [{ point, answers, ask: last }];
    });
  }

  /** Every member's triangular factors, one after the other in roster order; null where one has given none. */
  allFactors(): { readonly factors: readonly Float64Array[]; readonly ask: number } | null {
    const each = this.present.map((member) => this.factors.get(member));
    const given = each.filter((own) => own !== undefined);
    return given.length < each.length || given.length === 0
      ? null
      : { factors: given.flat(), ask: this.factorAsk };
  }

  private begin(answers: Heard['answers']): void {
    this.points.clear();
    this.factors.clear();
    this.present = [...answers.keys()].filter((member) => answers[member] !== null);
    this.surveys = answers.flatMap((own) =>
      own === null || 'code' in own.reply
        ? []
        : own.reply.filter((one): one is SurveyAnswer => one.work === 'survey'),
    );
  }

  private note(ask: number, member: number, work: Work, answer: WorkAnswer): void {
    if (work.work === 'evaluate' && answer.work === 'evaluate' && work.part === null)
      for (const [k, { point }] of work.points.entries()) this.say(ask, member, point, answer.points[k]);
    if (work.work === 'joint' && answer.work === 'joint') {
      this.say(ask, member, work.start, { ...answer.start, diagonal: null });
      this.say(ask, member, answer.point, { ...answer.end, diagonal: null });
    }
    if (answer.work === 'factor' && !this.factors.has(member)) {
      this.factors.set(member, answer.factors);
      this.factorAsk = ask;
    }
  }

  private say(ask: number, member: number, point: Float64Array, answer: Evaluation): void {
    const key = point.join(',');
    const at = this.points.get(key) ?? { point, said: [] };
    this.points.set(key, at);
    at.said.push({ ask, member, answer });
  }
}

interface Said {
  readonly ask: number;
  readonly member: number;
  readonly answer: Evaluation;
}
