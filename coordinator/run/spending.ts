import type { Work } from '../../protocol/messages/round.js';
import type { SurveyAnswer } from '../../protocol/messages/survey.js';
import { curvatureMatricesOf, numbersOfAnswer, sketchColumnsOf } from '../../protocol/numbers.js';
import { type Member, type MemberReply, memberName } from './run.js';
import type { PooledSurvey } from './survey.js';

/**
 * What one member has been asked for and has sent so far in a run that begins again: its custodian's limits hold for
 * the run, whatever became of the answers. An ask without an answer counts too, as the answer may have left.
 */
export class Spending {
  private matrices = 0;
  private numbers = 0;

  add(works: readonly Work[], reply: MemberReply | null): void {
    for (const work of works) {
      this.matrices += curvatureMatricesOf(work);
      // p sketched columns tell as much as a matrix
      if (work.work === 'evaluate') this.matrices += sketchColumnsOf(work) / work.points[0].point.length;
    }
    if (reply === null || 'code' in reply) return;
    for (const answer of reply) this.numbers += numbersOfAnswer(answer);
  }

  /** As it stands now. */
  spent(): Spent {
    return { matrices: this.matrices, numbers: this.numbers };
  }
}

export interface Spent {
  /** Curvature matrices of all fits together. */
  readonly matrices: number;
  readonly numbers: number;
}

/**
 * The survey of a run that begins again, with what each member's limits still leave. A limit on matrices is one for each
 * of the run's fits, and the site counts them together.
 */
export function lessSpent(
  survey: PooledSurvey,
  roster: readonly Member[],
  spent: readonly Spent[],
  fits: number,
): PooledSurvey {
  const notes = roster.flatMap((member, i) => {
    const most = survey.answers[i].allowance.curvatureMost;
    const matrices = Math.ceil(spent[i].matrices / fits);
    return most === null || matrices === 0
      ? []
      : [
          `${memberName(member)} lets ${most} curvature matrices a fit leave; up to ${matrices} of them had left before the fit began again`,
        ];
  });
  return {
    ...survey,
    answers: survey.answers.map((answer, i) => leftOf(answer, spent[i], fits)),
    notes: [...survey.notes, ...notes],
  };
}

function leftOf(answer: SurveyAnswer, { matrices, numbers }: Spent, fits: number): SurveyAnswer {
  const { curvatureMost, numbersMost } = answer.allowance;
  const left = (most: number | null, spent: number): number | null =>
    most === null ? null : Math.max(0, most - spent);
  const allowance = {
    ...answer.allowance,
    curvatureMost: left(curvatureMost, Math.ceil(matrices / fits)),
    numbersMost: left(numbersMost, numbers),
  };
  return { ...answer, allowance };
}
