import type { VerifiedFit } from '../run/verify.js';
import { counted, roughly, wrapped } from './phrases.js';
import { agrees, type Recomputed, replayText } from './replay-text.js';
import { lambdaText } from './tables.js';

/** What came of checking a run folder: the run computed again, and every fit against the answers themselves. */
export interface Verification {
  readonly replayed: Recomputed;
  readonly fits: readonly VerifiedFit[];
  readonly outcome: string;
  readonly audit: Audit;
}

/** What the run rests on. */
export interface Audit {
  /** SHA-256, hex: of the canonical specification, of the journal. */
  readonly specification: string;
  readonly journal: string;
  readonly software: string | null;
  readonly node: string | null;
  readonly kernels: readonly { readonly site: string; readonly kernel: string }[];
}

/** Fits told of one by one; those that differ are all told of. */
const FITS_MOST = 12;

export const verifies = ({ replayed, fits }: Verification): boolean =>
  agrees(replayed) && fits.every(({ differences }) => differences.length === 0);

/** What was checked and what came of it, in sentences; `here` is what it was done with. */
export function verifyText(
  verification: Verification,
  here: { readonly software: string; readonly node: string },
  width: number,
): string[] {
  const { replayed, fits, audit } = verification;
  const member = audit.kernels.some(({ site }) => site.includes('#')) ? 'shard' : 'site';
  const certified = fits.filter(({ extent }) => extent !== 'uncertified');
  const head = verifies(verification)
    ? `Verified: result.json is what the stored answers give${certified.length === 0 ? '' : ', certificates included'}.`
    : 'Not verified: result.json and the stored answers differ.';
  const told = fits.filter(({ differences }, at) => at < FITS_MOST || differences.length > 0);
  const untold = fits.length - told.length;
  const sentences = [
    head,
    ...told.flatMap((fit) => fitSentences(fit, fits.length, member, replayed)),
    ...(untold === 0 ? [] : [`${counted(untold, 'more fit')} came out in the same way.`]),
    ...(fits.length === 0
      ? [`The run ended as ${verification.outcome} without a fit: there is no certificate.`]
      : []),
    ...(replayed.difference?.ask == null ? waysOf(certified) : []),
  ];
  return [
    ...sentences.flatMap((text) => wrapped(text, width, 2)),
    '',
    ...replayText(replayed, here, width),
    '',
    ...auditOf(verification).flatMap((text) => wrapped(text, width, 2)),
  ];
}

function fitSentences(fit: VerifiedFit, count: number, member: string, { difference }: Recomputed): string[] {
  const { differences, atCoefficients } = fit;
  const lambda = fit.lambda === null ? '' : ` at λ = ${lambdaText(fit.lambda)}`;
  const name = `${count === 1 ? 'the fit' : `fit ${fit.fit + 1} of ${count}`}${lambda}`;
  if (difference !== null && difference.ask !== null) {
    const before = counted(difference.ask - 1, 'ask');
    return [`What ${name} rests on cannot be told: the journal fits the run for its first ${before} only.`];
  }
  if (differences.length > 0) return [`In result.json, ${name}: ${differences.join('; ')}.`];
  if (fit.extent === 'uncertified') return [`No certificate of ${name} was recomputed: ${uncertified(fit)}.`];
  const again =
    atCoefficients === null
      ? ''
      : ` Measured anew at its coefficients themselves, from the answers to ask ${atCoefficients.ask}, it is ${roughly(atCoefficients.relativeGap)}.`;
  return [`${gapOf(fit, name, member)}${again}`];
}

const uncertified = ({ kind }: VerifiedFit): string =>
  kind === null
    ? 'the run gave it none'
    : 'it did not end solved, and its gap is of another point than its coefficients';

function gapOf(
  { kind, extent, relativeGap, members, ask }: VerifiedFit,
  name: string,
  member: string,
): string {
  const gap = relativeGap === null ? 'not known' : roughly(relativeGap);
  const from = `the answers of ${counted(members, member)} to ask ${ask}`;
  if (kind === 'measured')
    return `The gap of ${name} is at most ${gap} of the objective (measured): recomputed from ${from}.`;
  const what = kind === 'estimate' ? 'an estimate, not a bound' : 'with a curvature learned from sketches';
  return extent === 'recomputed'
    ? `The gap of ${name} is about ${gap} of the objective (${what}): recomputed from the gradients and diagonal curvature in ${from}.`
    : `The gap of ${name} is about ${gap} of the objective (${what}): objective and gradient are recomputed from ${from}; the curvature that the gap takes was learned over many rounds, and comes out again by making the run again.`;
}

/** What the coefficients have to do with the point of the answers, where there is something to explain. */
function waysOf(fits: readonly VerifiedFit[]): string[] {
  const ways: string[] = [];
  if (fits.some(({ at }) => at === 'step'))
    ways.push(
      'Coefficients are handed over one model step beyond the point whose gap is certified: the same gradients and curvature give both, the gap is of the point before the step, and the step, which they do not certify, is as a rule far nearer to the optimum.',
    );
  if (fits.some(({ at }) => at === 'function'))
    ways.push(
      'The loss is squared, so that the answers are the whole function: its minimiser and the gap there need no other answers.',
    );
  return ways;
}

function auditOf({ audit }: Verification): string[] {
  const { specification, software, node, journal, kernels } = audit;
  const groups = new Map<string, string[]>();
  for (const { site, kernel } of kernels) groups.set(kernel, [...(groups.get(kernel) ?? []), site]);
  const used = [...groups].map(([kernel, sites]) => `${kernel} (${sites.join(', ')})`);
  return [
    `Specification: ${specification} (SHA-256 of its canonical text).`,
    `Journal: ${journal} (SHA-256 of the file).`,
    `Made by ${software ?? 'a run that never began'}${node === null ? '' : ` under Node ${node}`}${used.length === 0 ? '' : `; kernels ${used.join('; ')}`}.`,
  ];
}
