import { mergeFactors } from '../../numerics/triangular-factor.js';
import { sumOf } from '../../numerics/vector.js';
import type { SiteAnswers } from '../consensus/method.js';
import { required } from '../consensus/pooled.js';
import { FactoredModel } from '../consensus/pooled-rung.js';
import type { PartFrame } from './part-frames.js';

/** ∇f at the start of some rows, from the sites' answers to the first ask about them; p solver columns. */
export function startGradient(first: SiteAnswers, { start }: PartFrame, p: number): Float64Array {
  switch (first.kind) {
    case 'evaluate':
      return sumOf(first.sites.map(({ points }) => required(points[0].gradient, 'gradient')));
    case 'factor':
      return new FactoredModel(mergeFactors(first.factors, p + 1), p).gradient(start);
    case 'proximal':
      throw new TypeError('no method starts with a proximal ask');
  }
}
