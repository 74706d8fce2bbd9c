import type { Arrival } from './late-desk.js';
import { type LateModels, type SiteModel, siteModel } from './late-models.js';
import type { LatePoint } from './late-points.js';
import { required } from './pooled.js';

/** A site's newest quadratic, and the point it was asked about. */
export interface Taken {
  readonly site: number;
  readonly about: LatePoint;
  /** At the point it was asked about, or, of a joint problem, at its solution. */
  readonly model: SiteModel;
  readonly joint: boolean;
}

/** Notes every answer at the point it was asked about, and returns the sites' new quadratics in roster order. */
export function takeAnswers(arrivals: readonly Arrival<LatePoint>[], models: LateModels): Taken[] {
  return arrivals.flatMap(({ site, note: about, reply }): Taken[] => {
    switch (reply.kind) {
      case 'evaluate': {
        const { value, curvature } = reply.at;
        const gradient = required(reply.at.gradient, 'gradient');
        const model =
          curvature === null
            ? models.bySecant(site, about.z, value, gradient)
            : siteModel(about.z, { value, gradient, curvature });
        if (model === null) return [];
        about.answers[site] = model;
        return [{ site, about, model, joint: false }];
      }
      case 'joint':
        about.answers[site] = siteModel(about.z, reply.start);
        return [{ site, about, model: siteModel(reply.point, reply.end), joint: true }];
      default:
        throw new TypeError(`a quadratic ask was answered with ${reply.kind}`);
    }
  });
}
