import type { Part } from '../../protocol/messages/part.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { MethodEnd } from '../consensus/method.js';
import { mergeMoments, spreadOf } from './moments.js';
import { type Frame, startOn } from './scale.js';
import type { PooledSurvey } from './survey.js';

/**
 * Some of the rows as the problems about them see them: all rows, or the training rows of a fold. Sites answer about any
 * of them on the solver columns of all rows and divide by N, so that only the coordinator knows of a fold's own scaling:
 * a problem about a share of the rows has its objective times that share.
 */
export interface PartFrame {
  readonly part: Part;
  readonly rows: number;
  /** rows / N. */
  readonly share: number;
  /** 1/rows standard deviations of the kept columns over these rows. */
  readonly sd: Float64Array;
  /** Per member: its share of these rows. */
  readonly siteWeights: readonly number[];
  /** The intercept-only fit of these rows, on solver columns. */
  readonly start: Float64Array;
}

/** All rows. */
export function wholeFrame(specification: FitSpecification, frame: Frame, survey: PooledSurvey): PartFrame {
  return {
    part: null,
    rows: survey.rowsTotal,
    share: 1,
    sd: frame.sd,
    siteWeights: survey.answers.map(({ rowsUsed }) => rowsUsed / survey.rowsTotal),
    start: startOn(specification, frame, survey.response),
  };
}

/** The rows outside each fold, in the order of the survey's folds. */
export function trainingFrames(
  specification: FitSpecification,
  frame: Frame,
  survey: PooledSurvey,
): PartFrame[] {
  return survey.folds.map((fold): PartFrame => {
    const moments = survey.answers.map(({ folds }) =>
      mergeMoments(folds.filter((own) => own.fold !== fold.fold)),
    );
    const training = mergeMoments(moments);
    const sd = spreadOf(training);
    return {
      part: { fold: fold.fold, side: 'training' },
      rows: training.rowsUsed,
      share: training.rowsUsed / survey.rowsTotal,
      sd: Float64Array.from(frame.scaling.kept, (j) => sd[j]),
      siteWeights: moments.map(({ rowsUsed }) => rowsUsed / training.rowsUsed),
      start: startOn(specification, frame, training.response),
    };
  });
}

/** The end of a problem about a share of the rows, with its values per row of those rows. */
export function perRowOf(end: MethodEnd, { share }: PartFrame): MethodEnd {
  if (share === 1) return end;
  const { certificate } = end;
  return {
    ...end,
    loss: end.loss / share,
    penalty: end.penalty / share,
    certificate:
      certificate === null
        ? null
        : { ...certificate, gap: certificate.gap / share, kkt: certificate.kkt / share },
  };
}
