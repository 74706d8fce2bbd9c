import { createHash } from 'node:crypto';
import type { EvaluateWork } from '../../protocol/messages/evaluate.js';
import type { FactorWork } from '../../protocol/messages/factor.js';
import type { JointWork } from '../../protocol/messages/joint.js';
import type { MarginsWork } from '../../protocol/messages/margins.js';
import type { Part } from '../../protocol/messages/part.js';
import type { QualityWork } from '../../protocol/messages/quality.js';
import type { Work } from '../../protocol/messages/round.js';
import type { Scaling } from '../../protocol/messages/run.js';
import type { ScoresWork } from '../../protocol/messages/scores.js';
import type { SiteFitWork } from '../../protocol/messages/site-fit.js';
import type { SurveyWork } from '../../protocol/messages/survey.js';

/** A proximal problem with the vectors that were left out filled in: all that its answer depends on. */
export interface FilledProblem {
  readonly problem: number;
  readonly part: Part;
  readonly center: Float64Array;
  readonly scale: number;
  readonly diagonal: Float64Array;
  readonly start: Float64Array;
}

export type FilledWork =
  | SurveyWork
  | FactorWork
  | EvaluateWork
  | JointWork
  | ScoresWork
  | SiteFitWork
  | MarginsWork
  | QualityWork
  | { readonly work: 'proximal'; readonly problems: readonly FilledProblem[] };

/** Anything that hashes plainly: objects by sorted field, float64 bit for bit. */
type Plain =
  | string
  | number
  | boolean
  | null
  | Float64Array
  | readonly Plain[]
  | { readonly [field: string]: Plain };

/**
 * SHA-256 (hex) of what an ask asks: the specification, the scaling (which a survey does not depend on) and the work
 * with no vector left out. Two asks with one content have one answer.
 */
export function contentDigest(digest: string, scaling: Scaling | null, works: readonly FilledWork[]): string {
  const scaled = works.some((work) => work.work !== 'survey');
  return hashOf({ digest, scaling: scaled ? (scaling as Plain) : null, works: works as unknown as Plain });
}

/** SHA-256 of an ask as it came, vectors left out and all: tells a repeated message while its answer is in the making. */
export const messageDigest = (works: readonly Work[]): string => hashOf(works as unknown as Plain);

function hashOf(value: Plain): string {
  const hash = createHash('sha256');
  feed(value);
  return hash.digest('hex');

  // every value goes in with its type and length, so that no two values give the same bytes
  function feed(part: Plain): void {
    if (part instanceof Float64Array) {
      hash.update(`v${part.length}:`);
      hash.update(new Uint8Array(part.buffer, part.byteOffset, part.byteLength));
    } else if (typeof part === 'number') {
      hash.update('n');
      hash.update(new Uint8Array(Float64Array.of(part).buffer));
    } else if (typeof part === 'string') {
      hash.update(`s${Buffer.byteLength(part)}:${part}`);
    } else if (part === null || typeof part === 'boolean') {
      hash.update(`${part};`);
    } else if (isList(part)) {
      hash.update(`a${part.length}:`);
      for (const item of part) feed(item);
    } else {
      const fields = Object.keys(part).sort();
      hash.update(`o${fields.length}:`);
      for (const field of fields) {
        feed(field);
        feed(part[field]);
      }
    }
  }
}

const isList = (value: Plain): value is readonly Plain[] => Array.isArray(value);
