/**
 * What a schema cannot see: whether lengths fit the number of solver columns p (intercept included), whether an answer
 * is one to this ask, item by item. A worker checks every ask, a coordinator every answer, before a number is used.
 */
import { type Failure, type FailureCode, fail } from './failure.js';
import type { EvaluateAnswer, EvaluateWork, Want } from './messages/evaluate.js';
import type { JointAnswer, JointWork } from './messages/joint.js';
import type { ProximalAnswer, ProximalWork } from './messages/proximal.js';
import type { Answer, Ask, Work, WorkAnswer } from './messages/round.js';
import type { SurveyAnswer } from './messages/survey.js';
import { packedLength } from './messages/vector.js';

const wrong = (code: FailureCode, field: string, message: string): Failure =>
  fail(code, message, { where: { field } }).failure;

function lengthIs(vector: Float64Array, length: number, field: string): Failure | null {
  if (vector.length === length) return null;
  return wrong('dimension-wrong', field, `The vector has ${vector.length} numbers; ${length} are expected.`);
}

/** The first failure of a list of checks, none of which is run after it. */
function firstOf<T>(items: readonly T[], check: (item: T, index: number) => Failure | null): Failure | null {
  for (let i = 0; i < items.length; i++) {
    const failure = check(items[i], i);
    if (failure !== null) return failure;
  }
  return null;
}

/**
 * Null where a worker may compute this ask; p is null until the scaling is known. Codes: `dimension-wrong` (a length,
 * a repeated problem, an index, a negative weight of a penalty, work that needs the scaling), `memory-missing` (a
 * diagonal or start left out without an ask to take it from).
 */
export function checkAsk(ask: Ask, p: number | null): Failure | null {
  const seen = new Set<number>();
  return firstOf(ask.work, (work, index) => {
    const field = `work[${index}]`;
    if (work.work === 'survey') return null;
    if (p === null) {
      return wrong('dimension-wrong', field, `Work "${work.work}" before the scaling of the run is known.`);
    }
    if (work.work === 'proximal') return checkProximalWork(work, ask.ask, p, field, seen);
    if (work.work === 'evaluate') return checkEvaluateWork(work, p, field);
    return work.work === 'joint' ? checkJointWork(work, p, field) : null;
  });
}

function checkProximalWork(
  work: ProximalWork,
  askNumber: number,
  p: number,
  field: string,
  seen: Set<number>,
): Failure | null {
  return firstOf(work.problems, (problem, index) => {
    const at = `${field}.problems[${index}]`;
    if (seen.has(problem.problem)) {
      return wrong('dimension-wrong', `${at}.problem`, `Problem ${problem.problem} occurs twice in one ask.`);
    }
    seen.add(problem.problem);
    return (
      lengthIs(problem.center, p, `${at}.center`) ??
      // An ask sent again may leave out the diagonal it first came with; its start is never its own answer.
      lengthOrMemory(problem.diagonal, problem.diagonalAsk, askNumber, p, `${at}.diagonal`) ??
      lengthOrMemory(problem.start, problem.startAsk, askNumber - 1, p, `${at}.start`)
    );
  });
}

function lengthOrMemory(
  vector: Float64Array | null,
  fromAsk: number,
  askMost: number,
  p: number,
  field: string,
): Failure | null {
  if (vector !== null) return lengthIs(vector, p, field);
  if (fromAsk >= 1 && fromAsk <= askMost) return null;
  return wrong('memory-missing', field, `Left out, but ask ${fromAsk} cannot have brought it.`);
}

function checkEvaluateWork(work: EvaluateWork, p: number, field: string): Failure | null {
  const { points, ownFit, sketch } = work;
  return (
    pointIs(ownFit?.at ?? 0, points.length, `${field}.ownFit.at`) ??
    pointIs(sketch?.at ?? 0, points.length, `${field}.sketch.at`) ??
    (sketch === null
      ? null
      : lengthIs(sketch.directions, sketch.columns * p, `${field}.sketch.directions`)) ??
    firstOf(points, ({ point }, index) => lengthIs(point, p, `${field}.points[${index}].point`))
  );
}

function pointIs(at: number, points: number, field: string): Failure | null {
  if (at < points) return null;
  return wrong('dimension-wrong', field, `Point ${at} of ${points} (counted from 0).`);
}

function checkJointWork(work: JointWork, p: number, field: string): Failure | null {
  return (
    lengthIs(work.start, p, `${field}.start`) ??
    lengthIs(work.curvature, packedLength(p), `${field}.curvature`) ??
    lengthIs(work.linear, p, `${field}.linear`) ??
    weightsAre(work.l1, p, `${field}.l1`) ??
    weightsAre(work.l2, p, `${field}.l2`)
  );
}

function weightsAre(weights: Float64Array, p: number, field: string): Failure | null {
  const negative = weights.findIndex((weight) => weight < 0);
  if (negative < 0) return lengthIs(weights, p, field);
  return wrong('dimension-wrong', field, `Weight ${negative} (counted from 0) of the penalty is negative.`);
}

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
  if (answer.work === 'factor') return lengthIs(answer.factor, packedLength(p + 1), `${field}.factor`);
  return null;
}

function checkSurvey(answer: SurveyAnswer, field: string): Failure | null {
  const columns = answer.columns.length;
  return (
    lengthIs(answer.mean, columns, `${field}.mean`) ??
    lengthIs(answer.centredSquares, columns, `${field}.centredSquares`)
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

function problemIs(given: number, asked: number, field: string): Failure | null {
  if (given === asked) return null;
  return wrong('answer-unasked', field, `Problem ${given}; ${asked} was asked.`);
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

function wantedOrNull(
  vector: Float64Array | null,
  wanted: boolean,
  length: number,
  field: string,
): Failure | null {
  if ((vector !== null) !== wanted) {
    return wrong('answer-unasked', field, wanted ? 'Asked for, but null.' : 'Not asked for, but there.');
  }
  return vector === null ? null : lengthIs(vector, length, field);
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
