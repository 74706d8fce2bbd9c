import type { Stage } from '../run/run.js';
import { counted, wrapped } from './phrases.js';

/** The first thing that does not come out again as it is recorded. */
export interface Difference {
  /** Null where every ask agrees and the end does not. */
  readonly ask: number | null;
  readonly stage: Stage | 'end';
  /** A sentence. */
  readonly what: string;
}

/** What came of computing a run again from its folder. */
export interface Recomputed {
  /** Null where the journal ends before the run began. */
  readonly run: string | null;
  readonly title: string;
  readonly asksRecorded: number;
  /** Asks from the first on that come out again as they are recorded. */
  readonly asksAgreed: number;
  readonly difference: Difference | null;
  /** `same`: as recorded; `of-journal`: the folder has none, the journal's own was taken. */
  readonly specification: 'same' | 'of-journal' | 'changed';
  /** `none-yet`: the run had not ended; `not-reached`: something before it differs. */
  readonly result: 'equal' | 'different' | 'missing' | 'none-yet' | 'not-reached';
  readonly ended: boolean;
  /** Bytes at the end of the journal whose record was cut off. */
  readonly tornBytes: number;
  /** What the run was opened with. */
  readonly software: string | null;
  readonly node: string | null;
}

export const agrees = ({ difference, specification }: Recomputed): boolean =>
  difference === null && specification !== 'changed';

/** The outcome of a recomputation in sentences; `here` is what it was done with. */
export function replayText(
  recomputed: Recomputed,
  here: { readonly software: string; readonly node: string },
  width: number,
): string[] {
  const { difference } = recomputed;
  const sentences = [
    headOf(recomputed),
    ...versionsOf(recomputed, here),
    ...(recomputed.specification === 'changed'
      ? ['The specification is not the one whose digest the journal holds.']
      : []),
    ...(recomputed.specification === 'of-journal'
      ? ["The folder has no specification.yaml; the journal's own was taken."]
      : []),
    asksOf(recomputed),
    ...(difference === null ? [] : differenceOf(difference)),
    ...resultOf(recomputed),
    ...(recomputed.tornBytes === 0
      ? []
      : [
          `The last ${counted(recomputed.tornBytes, 'byte')} of the journal are a record that was cut off; they are not used, and left as they are.`,
        ]),
  ];
  return sentences.flatMap((text) => wrapped(text, width, 2));
}

const headOf = ({ run, title }: Recomputed): string =>
  run === null ? `“${title}” ended before its first ask.` : `Run ${run} “${title}” is computed again.`;

function versionsOf({ software, node }: Recomputed, here: { software: string; node: string }): string[] {
  const texts: string[] = [];
  if (software !== null && software !== here.software) {
    texts.push(`It was made by ${software}; this is ${here.software}, which may ask otherwise.`);
  }
  if (node !== null && node !== here.node) {
    texts.push(
      `It was made under Node ${node}; this is ${here.node}, whose last bits of a number may be others.`,
    );
  }
  return texts;
}

function asksOf({ asksRecorded, asksAgreed, ended }: Recomputed): string {
  if (asksRecorded === 0) return 'The journal holds no answers.';
  const open = ended ? '' : ' The journal has no end: the run was still going on.';
  if (asksAgreed === asksRecorded) {
    const all = asksRecorded === 1 ? 'The one ask' : `All ${counted(asksRecorded, 'ask')}`;
    return `${all} in the journal come${asksRecorded === 1 ? 's' : ''} out again as recorded.${open}`;
  }
  return `${asksAgreed} of ${counted(asksRecorded, 'ask')} agree before the first difference.${open}`;
}

function differenceOf({ ask, stage, what }: Difference): string[] {
  if (ask === null) return [what];
  const before = ask > 1 ? `the answers to ask ${ask - 1} or an earlier one, or ` : '';
  return [
    `The first difference is at ask ${ask}${stage === 'end' ? '' : ` (${stage})`}. ${what}`,
    `What was changed is ${before}the specification, or the run was made by another version.`,
  ];
}

function resultOf({ result }: Recomputed): string[] {
  switch (result) {
    case 'equal':
      return ['result.json is the recomputed one to the byte.'];
    case 'different':
      return ['result.json is not the recomputed one.'];
    case 'none-yet':
      return ['There is no result.json to compare with.'];
    default:
      return ['result.json could not be compared.'];
  }
}
