/**
 * What a schema cannot see of an ask: whether lengths fit the number of solver columns p (intercept included). A worker
 * checks every ask before a number is used.
 */
import { firstOf, lengthIs, wrong } from './check-lengths.js';
import type { Failure } from './failure.js';
import type { EvaluateWork } from './messages/evaluate.js';
import type { JointWork } from './messages/joint.js';
import type { ProximalWork } from './messages/proximal.js';
import type { QualityWork } from './messages/quality.js';
import type { Ask } from './messages/round.js';
import { packedLength } from './messages/vector.js';

/**
 * Null where a worker may compute this ask; p is null until the scaling is known. Codes: `dimension-wrong` (a length,
 * a repeated problem or fold, an index, a negative weight of a penalty, work that needs the scaling), `memory-missing` (a
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
    switch (work.work) {
      case 'proximal':
        return checkProximalWork(work, ask.ask, p, field, seen);
      case 'evaluate':
        return checkEvaluateWork(work, p, field);
      case 'joint':
        return checkJointWork(work, p, field);
      case 'factor':
        return firstOf(work.folds, (fold, at) => newFold(work.folds, fold, at, `${field}.folds[${at}]`));
      case 'site-fit':
        return lengthIs(work.start, p, `${field}.start`);
      case 'quality':
        return checkQualityWork(work, p, field);
      case 'scores':
      case 'margins':
        return lengthIs(work.point, p, `${field}.point`);
    }
  });
}

function newFold(folds: readonly string[], fold: string, at: number, field: string): Failure | null {
  if (folds.indexOf(fold) === at) return null;
  return wrong('dimension-wrong', field, 'The fold occurs twice in one work item.');
}

function checkQualityWork(work: QualityWork, p: number, field: string): Failure | null {
  const { edges, inverse } = work;
  const unordered = edges.findIndex((edge, at) => at > 0 && !(edge > edges[at - 1]));
  if (unordered >= 0) {
    return wrong('dimension-wrong', `${field}.edges`, `Edge ${unordered} (counted from 0) does not ascend.`);
  }
  return (
    lengthIs(work.point, p, `${field}.point`) ??
    (inverse === null ? null : lengthIs(inverse, packedLength(p), `${field}.inverse`))
  );
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
