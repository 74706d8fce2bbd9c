import { join } from 'node:path';
import { z } from 'zod';
import { type Failure, fail } from '../../protocol/failure.js';
import type { Verification } from '../report/verify-text.js';
import { AnswerBook } from '../run/answer-book.js';
import type { ResultDocument } from '../run/result.js';
import { memberName } from '../run/run.js';
import { verifyFits } from '../run/verify.js';
import { sha256Of } from './files.js';
import { recompute } from './recompute.js';
import { RUN_FILES } from './run-entry.js';
import { readStoredRun } from './run-folder.js';

const numbers = z.union([z.number(), z.array(z.number())]).nullable();
/** What is checked of `result.json`; it may have been changed by anybody. */
const resultSchema = z.looseObject({
  outcome: z.string(),
  rung: z.enum(['pooled', 'curvature', 'sketched', 'proximal']).nullable(),
  fits: z.array(
    z.looseObject({
      lambda: numbers,
      outcome: z.string(),
      intercept: z.number().nullable(),
      coefficients: z.record(z.string(), z.number()),
      loss: z.number(),
      penalty: z.number(),
      objective: z.number(),
      certificate: z
        .object({
          kind: z.enum(['measured', 'sketched', 'estimate', 'duality-gap']),
          gap: z.number(),
          relativeGap: z.number(),
          kkt: z.number(),
        })
        .nullable(),
      rung: z.enum(['pooled', 'curvature', 'sketched', 'proximal']),
    }),
  ),
});

type Verified =
  | { readonly ok: true; readonly value: Verification }
  | { readonly ok: false; readonly failures: readonly Failure[] };

/** Changes nothing in the folder. Fails where it, its journal, specification or result cannot be used. */
export async function verifyFolder(path: string): Promise<Verified> {
  const stored = await readStoredRun(path);
  if (!stored.ok) return stored;
  const { folder, chosen } = stored.value;
  const result = readResult(folder.resultText, join(path, RUN_FILES.result));
  if ('failure' in result) return { ok: false, failures: [result.failure] };
  const book = new AnswerBook();
  const replayed = recompute(stored.value, (heard) => book.hear(heard));
  const { opened } = folder;
  const fits = verifyFits(
    chosen.specification,
    opened?.roster ?? [],
    opened?.startFrom ?? null,
    book,
    result.document,
  );
  const audit = {
    specification: chosen.digest,
    journal: await sha256Of(join(path, RUN_FILES.journal)),
    software: replayed.software,
    node: replayed.node,
    kernels: (opened?.roster ?? []).map((member) => ({ site: memberName(member), kernel: member.kernel })),
  };
  return { ok: true, value: { replayed, fits, outcome: result.document.outcome, audit } };
}

function readResult(
  text: string | null,
  file: string,
): { readonly document: ResultDocument } | { readonly failure: Failure } {
  const where = { file };
  if (text === null) {
    const remedy = 'Verify a run that has ended: its folder holds a result.json.';
    return { failure: fail('file-unreadable', 'There is no result to verify.', { remedy, where }).failure };
  }
  try {
    const parsed = resultSchema.safeParse(JSON.parse(text));
    if (parsed.success) return { document: parsed.data as unknown as ResultDocument };
    const what = z.prettifyError(parsed.error).replace(/\s+/g, ' ');
    return {
      failure: fail('file-unreadable', `It is not a result of this format: ${what}.`, { where }).failure,
    };
  } catch (error) {
    if (!(error instanceof SyntaxError)) throw error;
    return { failure: fail('file-unreadable', `It is no JSON: ${error.message}.`, { where }).failure };
  }
}
