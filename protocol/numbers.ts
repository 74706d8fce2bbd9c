/** Counting numbers, for policies (`numbers-most`, `curvature-most`) and for the traffic figures in the result. */
import type { Work, WorkAnswer } from './messages/round.js';
import type { SurveyAnswer } from './messages/survey.js';

const lengthOf = (vector: Float64Array | null): number => vector?.length ?? 0;

const sum = <T>(items: readonly T[], numbersOf: (item: T) => number): number =>
  items.reduce((total, item) => total + numbersOf(item), 0);

/** Real numbers a work item carries to a site. Problem numbers, ask numbers and labels of folds and levels are names and do not count. */
export function numbersOfWork(work: Work): number {
  switch (work.work) {
    case 'survey':
    case 'factor':
      return 0;
    case 'proximal':
      return sum(
        work.problems,
        (problem) => 1 + problem.center.length + lengthOf(problem.diagonal) + lengthOf(problem.start),
      );
    case 'evaluate':
      return (
        sum(work.points, ({ point }) => point.length) +
        (work.ownFit === null ? 0 : 1) +
        (work.sketch?.directions.length ?? 0)
      );
    case 'joint':
      return sum([work.start, work.curvature, work.linear, work.l1, work.l2], lengthOf);
    case 'scores':
    case 'margins':
      return work.point.length;
    case 'site-fit':
      return work.start.length;
    case 'quality':
      return sum([work.point, work.edges, work.inverse], lengthOf) + 1;
  }
}

/** Numbers in an answer that depend on the site's rows, `newtonSteps` and row counts among them. */
export function numbersOfAnswer(answer: WorkAnswer): number {
  switch (answer.work) {
    case 'survey':
      return 1 + numbersOfMoments(answer) + sum(answer.folds, numbersOfMoments);
    case 'proximal':
      return sum(answer.problems, ({ point }) => point.length + 1);
    case 'evaluate': {
      const atPoints = sum(
        answer.points,
        ({ gradient, diagonal, curvature }) =>
          1 + lengthOf(gradient) + lengthOf(diagonal) + lengthOf(curvature),
      );
      const { ownFit, sketch } = answer;
      const fit = ownFit === null ? 0 : ownFit.curvature.length + ownFit.linear.length;
      return atPoints + fit + lengthOf(sketch);
    }
    case 'joint': {
      const ends = sum([answer.start, answer.end], (at) => 1 + at.gradient.length + at.curvature.length);
      return ends + answer.point.length + 1;
    }
    case 'factor':
      return sum(answer.factors, lengthOf);
    case 'scores':
      return sum([answer.gradient, answer.meat, answer.clustered], lengthOf) + 2;
    case 'site-fit': {
      const { fit } = answer;
      return fit === null ? 0 : fit.point.length + fit.curvature.length + fit.undetermined.length + 2;
    }
    case 'margins':
      return 1 + sum(answer.settings, ({ gradient }) => 1 + gradient.length);
    case 'quality': {
      const bins = sum([answer.binRows, answer.binPredicted, answer.binObserved], lengthOf);
      return bins + 4 + (answer.leverage === null ? 0 : 3) + (answer.zeros === null ? 0 : 2);
    }
  }
}

/** Of a table's rows, or of those in a fold. */
const numbersOfMoments = ({
  mean,
  centredSquares,
  response,
}: Pick<SurveyAnswer, 'mean' | 'centredSquares' | 'response'>): number =>
  1 + mean.length + centredSquares.length + Object.keys(response).length;

/** Full p × p matrices that the answer to this work holds: what `curvature-most` of a policy counts. */
export function curvatureMatricesOf(work: Work): number {
  switch (work.work) {
    case 'survey':
    case 'proximal':
    case 'margins':
    case 'quality':
      return 0;
    case 'evaluate':
      return work.points.filter(({ want }) => want === 'curvature').length + (work.ownFit === null ? 0 : 1);
    case 'joint':
      return 2;
    case 'factor':
      return Math.max(1, work.folds.length);
    case 'scores':
      return (work.meat ? 1 : 0) + (work.clustered ? 1 : 0);
    case 'site-fit':
      return 1;
  }
}

/** Columns of curvature that the answer to this work holds as products: p of them tell as much as one matrix. */
export const sketchColumnsOf = (work: Work): number =>
  work.work === 'evaluate' ? (work.sketch?.columns ?? 0) : 0;
