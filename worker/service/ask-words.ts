import type { Work } from '../../protocol/messages/round.js';

const several = (count: number, one: string, many: string): string =>
  count === 1 ? one : `${count} ${many}`;

/** What a work item asks for, in the words of the log. */
export function workInWords(work: Work): string {
  switch (work.work) {
    case 'survey':
      return 'the survey';
    case 'factor':
      return several(Math.max(1, work.folds.length), 'the triangular factor', 'triangular factors');
    case 'scores':
      return work.meat || work.clustered ? 'scores and sums of their products' : 'scores';
    case 'site-fit':
      return 'its own fit, with its curvature';
    case 'margins':
      return several(work.settings.length, 'a mean prediction', 'mean predictions');
    case 'quality':
      return 'binned responses, sums of residuals and leverages';
    case 'proximal':
      return several(work.problems.length, 'a proximal point', 'proximal points');
    case 'joint':
      return 'curvature at a point and at a proximal point in the metric of the other sites';
    case 'evaluate': {
      const wants = [...new Set(work.points.map(({ want }) => want))].join(' and ');
      const points = `${wants} at ${several(work.points.length, 'a point', 'points')}`;
      const sketch =
        work.sketch === null
          ? ''
          : `, curvature along ${several(work.sketch.columns, 'a direction', 'directions')}`;
      return `${points}${sketch}${work.ownFit === null ? '' : ', and its own fit'}`;
    }
  }
}
