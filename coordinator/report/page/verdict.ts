import type { Certificate } from '../../consensus/method.js';
import type { ResultDocument } from '../../run/result.js';
import { OUTCOME_HEAD } from '../outcome-text.js';
import { counted, listed, sentence } from '../phrases.js';
import { rowsText } from '../stand-in-text.js';
import { tick } from './figures.js';
import { fitStoodBy } from './input.js';

/** Whether the fit can be relied on, in a word, a heading and sentences. */
export interface Verdict {
  readonly tone: 'sound' | 'caution' | 'unsound';
  readonly head: string;
  readonly sentences: readonly string[];
}

const GROUNDS: Readonly<Record<Certificate['kind'], string>> = {
  measured: 'The gradients and the curvature of every site, taken at this very point, bound the distance',
  sketched: 'The gradients of every site and sketches of their curvature bound the distance',
  'duality-gap': 'The duality gap bounds the distance',
  estimate: 'Only an estimate from gradients and diagonal curvature tells the distance',
};

/** What the certificate shows, without its terms of art. */
export function certificateWords(certificate: Certificate | null, tolerance: number): string {
  if (certificate === null) {
    return 'There is no certificate: nothing shows how far these coefficients are from the best ones.';
  }
  const { kind, relativeGap } = certificate;
  const about = kind === 'estimate' || kind === 'sketched' ? 'about' : 'at most';
  const held = relativeGap <= tolerance ? 'within' : 'which is not within';
  return `${GROUNDS[kind]}: the objective is ${about} ${tick(Number(relativeGap.toPrecision(2)))} above the least possible, relative to it, ${held} the tolerance of ${tick(tolerance)}.`;
}

type Trust = Verdict['tone'];

export function verdictOf(result: ResultDocument): Verdict {
  const fit = fitStoodBy(result);
  const certificate = fit?.certificate ?? null;
  const missing = missingSentences(result);
  if (result.outcome !== 'solved') {
    const reason = result.reason === null ? [] : [`Why: ${sentence(result.reason)}`];
    const use = 'Do not rely on any number below: this is what there was when the run ended.';
    return { tone: 'unsound', head: OUTCOME_HEAD[result.outcome], sentences: [...reason, use, ...missing] };
  }
  if (fit === null) {
    const many = `${counted(result.fits.length, 'fit')} were made and none was chosen: read them one by one, or add \`choose\` to the specification.`;
    const unsure = result.fits.filter((one) => trustIn(one.certificate, result.tolerance) !== 'sound');
    const doubt =
      unsure.length === 0
        ? 'Each of them has a certificate within the tolerance.'
        : `${counted(unsure.length, 'fit')} of them ${unsure.length === 1 ? 'has' : 'have'} no certificate within the tolerance that rests on measured curvature.`;
    return { tone: 'caution', head: 'Solved, with no fit chosen.', sentences: [many, doubt, ...missing] };
  }
  const trust = trustIn(certificate, result.tolerance);
  const shown = certificateWords(certificate, result.tolerance);
  if (trust === 'unsound') {
    const use = 'Do not rely on the coefficients below before it has been run again, or explained.';
    return {
      tone: 'unsound',
      head: 'The certificate failed: these coefficients are not shown to be the answer.',
      sentences: [shown, use, ...missing],
    };
  }
  const without =
    result.without.length > 0 ? `, without ${listed(result.without.map(({ site }) => site))}` : '';
  return {
    tone: trust === 'sound' && without === '' ? 'sound' : 'caution',
    head: `Solved${without}.`,
    sentences: [
      trust === 'sound'
        ? `You can trust the arithmetic of this fit. ${shown}`
        : `The fit is probably right, and not proven to be. ${shown}`,
      ...missing,
    ],
  };
}

function trustIn(certificate: Certificate | null, tolerance: number): Trust {
  if (certificate === null || !(certificate.relativeGap <= tolerance)) return 'unsound';
  return certificate.kind === 'estimate' ? 'caution' : 'sound';
}

/** What is not in it: sites, rows, parts. */
function missingSentences({ without, sites, omitted }: ResultDocument): string[] {
  const dropped = sites.reduce((sum, site) => sum + (site.rowsDropped ?? 0), 0);
  return [
    ...without.map((left) => `Not in it: ${left.site}, which was given up on, with its ${rowsText([left])}.`),
    ...(dropped === 0
      ? []
      : [`Not in it: ${counted(dropped, 'row')} with a missing value, left out at the sites.`]),
    ...(omitted.length === 0
      ? []
      : [
          `Asked for and not in it: ${omitted.map(({ part, reason }) => `${part} (${reason.replace(/\.$/, '')})`).join('; ')}.`,
        ]),
  ];
}
