/**
 * What a schema cannot see of an answer: whether it is one to this ask, item by item, and whether lengths fit the number
 * of solver columns p (intercept included). A coordinator checks every answer before a number is used.
 */
import { checkInference } from './check-inference.js';
import { firstOf, lengthIs, problemIs, wantedOrNull, wrong } from './check-lengths.js';
import type { Failure } from './failure.js';
import type { EvaluateAnswer, EvaluateWork, Want } from './messages/evaluate.js';
import type { FactorAnswer, FactorWork } from './messages/factor.js';
import type { JointAnswer, JointWork } from './messages/joint.js';
import type { ProximalAnswer, ProximalWork } from './messages/proximal.js';
import type { Answer, Ask, Work, WorkAnswer } from './messages/round.js';
import type { SurveyAnswer } from './messages/survey.js';
import { packedLength } from './messages/vector.js';

/**
 * Null where the answer belongs to this ask and every vector has its length. Codes: `answer-unasked` (another run or
 * ask, other work, other problems, more or less than was wanted), `dimension-wrong`.
 */
export function checkAnswer(ask: Ask, answer: Answer, p: number | null): Failure | null {
  if (answer.run !== ask.run || answer.ask !== ask.ask) {
    return wrong('answer-unasked', 'ask', `Ask ${answer.ask} of run ${answer.run} is not the one asked.`);
  }
  if (answer.work.length !== ask.work.length) {
    return wrong(
      'answer-unasked',
      'work',
      `${answer.work.length} work items answered; ${ask.work.length} were asked.`,
    );
  }
  return firstOf(ask.work, (work, index) => checkItem(work, answer.work[index], p, `work[${index}]`));
}

function checkItem(work: Work, answer: WorkAnswer, p: number | null, field: string): Failure | null {
  if (answer.work === 'survey' && work.work === 'survey') return checkSurvey(answer, field);
  if (answer.work !== work.work) {
    return wrong('answer-unasked', field, `Work "${work.work}" was answered with "${answer.work}".`);
  }
  if (p === null) {
    return wrong('dimension-wrong', field, `Work "${work.work}" before the scaling of the run is known.`);
  }
  if (work.work === 'proximal' && answer.work === 'proximal') return checkProximal(work, answer, p, field);
  if (work.work === 'evaluate' && answer.work === 'evaluate') return checkEvaluate(work, answer, p, field);
  if (work.work === 'joint' && answer.work === 'joint') return checkJoint(work, answer, p, field);
  if (work.work === 'factor' && answer.work === 'factor') return checkFactor(work, answer, p, field);
  return checkInference(work, answer, p, field);
}

function checkSurvey(answer: SurveyAnswer, field: string): Failure | null {
  const columns = answer.columns.length;
  const moments = ({ mean, centredSquares }: Pick<SurveyAnswer, 'mean' | 'centredSquares'>, at: string) =>
    lengthIs(mean, columns, `${at}.mean`) ?? lengthIs(centredSquares, columns, `${at}.centredSquares`);
  return (
    moments(answer, field) ??
    firstOf(answer.folds, (fold, k) => moments(fold, `${field}.folds[${k}]`)) ??
    checkFolds(answer, `${field}.folds`)
  );
}

/** Folds are in order of their labels, by code unit, and hold every row used once. */
function checkFolds({ folds, rowsUsed }: SurveyAnswer, field: string): Failure | null {
  const unordered = folds.findIndex(({ fold }, k) => k > 0 && !(fold > folds[k - 1].fold));
  if (unordered >= 0) {
    return wrong('dimension-wrong', `${field}[${unordered}].fold`, 'The labels of folds do not ascend.');
  }
  const rows = folds.reduce((sum, fold) => sum + fold.rowsUsed, 0);
  if (folds.length === 0 || rows === rowsUsed) return null;
  return wrong('dimension-wrong', field, `The folds hold ${rows} rows; ${rowsUsed} are used.`);
}

function checkFactor(work: FactorWork, answer: FactorAnswer, p: number, field: string): Failure | null {
  const asked = Math.max(1, work.folds.length);
  if (answer.factors.length !== asked) {
    return wrong('answer-unasked', `${field}.factors`, 'The number of factors is not the one asked.');
  }
  return firstOf(answer.factors, (factor, k) =>
    lengthIs(factor, packedLength(p + 1), `${field}.factors[${k}]`),
  );
}

function checkProximal(work: ProximalWork, answer: ProximalAnswer, p: number, field: string): Failure | null {
  if (answer.problems.length !== work.problems.length) {
    return wrong('answer-unasked', `${field}.problems`, 'The number of problems is not the one asked.');
  }
  return firstOf(work.problems, ({ problem }, index) => {
    const at = `${field}.problems[${index}]`;
    const given = answer.problems[index];
    return problemIs(given.problem, problem, `${at}.problem`) ?? lengthIs(given.point, p, `${at}.point`);
  });
}

function checkEvaluate(work: EvaluateWork, answer: EvaluateAnswer, p: number, field: string): Failure | null {
  if (answer.points.length !== work.points.length) {
    return wrong('answer-unasked', `${field}.points`, 'The number of points is not the one asked.');
  }
  return (
    problemIs(answer.problem, work.problem, `${field}.problem`) ??
    firstOf(work.points, ({ want }, index) =>
      checkPoint(want, answer.points[index], p, `${field}.points[${index}]`),
    ) ??
    checkOwnFit(work, answer, p, `${field}.ownFit`) ??
    wantedOrNull(answer.sketch, work.sketch !== null, (work.sketch?.columns ?? 0) * p, `${field}.sketch`)
  );
}

const WANTS: readonly Want[] = ['value', 'gradient', 'diagonal', 'curvature'];

function checkPoint(
  want: Want,
  point: EvaluateAnswer['points'][number],
  p: number,
  field: string,
): Failure | null {
  const most = WANTS.indexOf(want);
  return (
    wantedOrNull(point.gradient, most >= 1, p, `${field}.gradient`) ??
    wantedOrNull(point.diagonal, most >= 2, p, `${field}.diagonal`) ??
    wantedOrNull(point.curvature, most >= 3, packedLength(p), `${field}.curvature`)
  );
}

function checkOwnFit(work: EvaluateWork, answer: EvaluateAnswer, p: number, field: string): Failure | null {
  if ((work.ownFit === null) !== (answer.ownFit === null)) {
    return wrong('answer-unasked', field, answer.ownFit === null ? 'Asked for, but null.' : 'Not asked for.');
  }
  if (answer.ownFit === null) return null;
  return (
    lengthIs(answer.ownFit.curvature, packedLength(p), `${field}.curvature`) ??
    lengthIs(answer.ownFit.linear, p, `${field}.linear`)
  );
}

function checkJoint(work: JointWork, answer: JointAnswer, p: number, field: string): Failure | null {
  const end = (at: JointAnswer['start'], name: string): Failure | null =>
    lengthIs(at.gradient, p, `${field}.${name}.gradient`) ??
    lengthIs(at.curvature, packedLength(p), `${field}.${name}.curvature`);
  return (
    problemIs(answer.problem, work.problem, `${field}.problem`) ??
    end(answer.start, 'start') ??
    lengthIs(answer.point, p, `${field}.point`) ??
    end(answer.end, 'end')
  );
}
