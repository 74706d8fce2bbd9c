import { firstOf, lengthIs, problemIs, wantedOrNull, wrong } from './check-lengths.js';
import type { Failure } from './failure.js';
import type { MarginsAnswer, MarginsWork } from './messages/margins.js';
import type { QualityAnswer, QualityWork } from './messages/quality.js';
import type { Work, WorkAnswer } from './messages/round.js';
import type { ScoresAnswer, ScoresWork } from './messages/scores.js';
import type { SiteFitAnswer, SiteFitWork } from './messages/site-fit.js';
import { packedLength } from './messages/vector.js';

/** The check of answers about a point that a run has found: scores, a site's own fit, margins and fit quality. */
export function checkInference(work: Work, answer: WorkAnswer, p: number, field: string): Failure | null {
  if (work.work === 'scores' && answer.work === 'scores') return checkScores(work, answer, p, field);
  if (work.work === 'site-fit' && answer.work === 'site-fit') return checkSiteFit(work, answer, p, field);
  if (work.work === 'margins' && answer.work === 'margins') return checkMargins(work, answer, p, field);
  if (work.work === 'quality' && answer.work === 'quality') return checkQuality(work, answer, field);
  return null;
}

function checkScores(work: ScoresWork, answer: ScoresAnswer, p: number, field: string): Failure | null {
  return (
    problemIs(answer.problem, work.problem, `${field}.problem`) ??
    lengthIs(answer.gradient, p, `${field}.gradient`) ??
    wantedOrNull(answer.meat, work.meat, packedLength(p), `${field}.meat`) ??
    wantedOrNull(answer.clustered, work.clustered, packedLength(p), `${field}.clustered`)
  );
}

function checkSiteFit(work: SiteFitWork, answer: SiteFitAnswer, p: number, field: string): Failure | null {
  const { fit, reason } = answer;
  if ((fit === null) !== (reason !== null)) {
    return wrong('answer-unasked', `${field}.reason`, 'An answer has either a fit or a reason.');
  }
  const other = problemIs(answer.problem, work.problem, `${field}.problem`);
  if (other !== null || fit === null) return other;
  const { undetermined } = fit;
  const odd = undetermined.findIndex((j, at) => j >= p || (at > 0 && j <= undetermined[at - 1]));
  if (odd >= 0) {
    const message = `Found ${undetermined[odd]}; allowed: ascending numbers of solver columns below ${p}.`;
    return wrong('dimension-wrong', `${field}.fit.undetermined[${odd}]`, message);
  }
  return (
    lengthIs(fit.point, p, `${field}.fit.point`) ??
    lengthIs(fit.curvature, packedLength(p), `${field}.fit.curvature`)
  );
}

function checkMargins(work: MarginsWork, answer: MarginsAnswer, p: number, field: string): Failure | null {
  if (answer.settings.length !== work.settings.length) {
    return wrong('answer-unasked', `${field}.settings`, 'The number of settings is not the one asked.');
  }
  return (
    problemIs(answer.problem, work.problem, `${field}.problem`) ??
    firstOf(answer.settings, ({ gradient }, k) => lengthIs(gradient, p, `${field}.settings[${k}].gradient`))
  );
}

function checkQuality(work: QualityWork, answer: QualityAnswer, field: string): Failure | null {
  if ((answer.leverage === null) !== (work.inverse === null)) {
    const message = answer.leverage === null ? 'Asked for, but null.' : 'Not asked for, but there.';
    return wrong('answer-unasked', `${field}.leverage`, message);
  }
  const bins = work.edges.length + 1;
  return (
    problemIs(answer.problem, work.problem, `${field}.problem`) ??
    lengthIs(answer.binRows, bins, `${field}.binRows`) ??
    lengthIs(answer.binPredicted, bins, `${field}.binPredicted`) ??
    lengthIs(answer.binObserved, bins, `${field}.binObserved`)
  );
}
