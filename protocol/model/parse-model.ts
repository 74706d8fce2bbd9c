import { z } from 'zod';
import { type Checked, fail, succeed } from '../failure.js';
import { designColumns } from '../specification/design-columns.js';
import { INVERSE_LINKS, type ModelDocument } from './model-document.js';

const name = z.string().min(1).max(200);
const column = z.string().min(1).max(200);
const transform = z.union([z.enum(['none', 'log', 'sqrt']), z.strictObject({ power: z.number() })]);
const numericTerm = z.strictObject({
  kind: z.literal('numeric'),
  column,
  unit: z.string().nullable(),
  transform,
  name,
});
const levelsTerm = z.strictObject({
  kind: z.literal('levels'),
  column,
  levels: z.array(z.string()).min(1),
  baseline: z.string().nullable(),
  name,
});
const singleTerm = z.discriminatedUnion('kind', [numericTerm, levelsTerm]);
const productTerm = z.strictObject({
  kind: z.literal('product'),
  factors: z.array(singleTerm).min(2),
  name: z.string().min(1),
});

const modelSchema = z.strictObject({
  commonfitModel: z.literal(1),
  title: z.string(),
  specification: z.string().regex(/^[0-9a-f]{64}$/),
  software: z.string(),
  sites: z.array(z.string()),
  rowsTotal: z.int().nullable(),
  fit: z.strictObject({
    number: z.int().min(1),
    of: z.int().min(1),
    lambda: z.union([z.number(), z.array(z.number())]).nullable(),
    outcome: z.string(),
    certificate: z.strictObject({ kind: z.string(), relativeGap: z.number() }).nullable(),
  }),
  loss: z.enum(['squared', 'huber', 'logistic', 'poisson']),
  inverseLink: z.enum(['identity', 'logistic', 'exponential']),
  response: z.strictObject({ column, positive: z.string().nullable() }),
  offset: z.strictObject({ kind: z.enum(['exposure', 'offset']), column }).nullable(),
  intercept: z.number().nullable(),
  terms: z.array(z.discriminatedUnion('kind', [numericTerm, levelsTerm, productTerm])),
  coefficients: z.array(z.strictObject({ name: z.string(), value: z.number() })),
  dropped: z.array(z.string()),
  covariance: z
    .strictObject({ kind: z.string(), order: z.array(z.string()), matrix: z.array(z.array(z.number())) })
    .optional(),
}) satisfies z.ZodType<ModelDocument>;

const REMEDY = 'Take model.json from the result folder as it was written.';

/**
 * Reads `model.json`. `file` is named in failures.
 *
 * Fails with `field-type` (no JSON), `not-supported` (another version of the format), `field-missing`, `field-unknown`,
 * `field-type` or `field-value` at the first field that is wrong, and `field-conflict` where the coefficients are not
 * those of the terms.
 */
export function parseModel(text: string, file: string): Checked<ModelDocument> {
  let value: unknown;
  try {
    value = JSON.parse(text);
  } catch {
    return fail('field-type', 'The file is not JSON.', { where: { file }, remedy: REMEDY });
  }
  const version = z.looseObject({ commonfitModel: z.number() }).safeParse(value);
  if (!version.success)
    return fail('field-missing', 'The file has no field commonfitModel: it is not a model of commonfit.', {
      where: { file, field: 'commonfitModel' },
      remedy: REMEDY,
    });
  if (version.data.commonfitModel !== 1)
    return fail(
      'not-supported',
      `The model has format ${version.data.commonfitModel}; this version reads 1.`,
      {
        where: { file, field: 'commonfitModel' },
        remedy: 'Score with the version of commonfit that wrote the model, or a later one.',
      },
    );
  const parsed = modelSchema.safeParse(value, { reportInput: true });
  if (!parsed.success) {
    const [issue] = parsed.error.issues;
    return fail(codeOf(issue), `${issue.message}.`, {
      where: { file, field: z.core.toDotPath(issue.path) },
      remedy: REMEDY,
    });
  }
  const wrong = inconsistency(parsed.data);
  return wrong === null
    ? succeed(parsed.data)
    : fail('field-conflict', wrong.message, { where: { file, field: wrong.field }, remedy: REMEDY });
}

const codeOf = (issue: z.core.$ZodIssue): 'field-unknown' | 'field-missing' | 'field-type' | 'field-value' =>
  issue.code === 'unrecognized_keys'
    ? 'field-unknown'
    : issue.code !== 'invalid_type'
      ? 'field-value'
      : issue.input === undefined
        ? 'field-missing'
        : 'field-type';

/** Every design column has a coefficient or is dropped, once; and the inverse link is that of the loss. */
function inconsistency(model: ModelDocument): { field: string; message: string } | null {
  if (model.inverseLink !== INVERSE_LINKS[model.loss])
    return {
      field: 'inverseLink',
      message: `The inverse link of the loss ${model.loss} is ${INVERSE_LINKS[model.loss]}, not ${model.inverseLink}.`,
    };
  const given = [...model.coefficients.map((coefficient) => coefficient.name), ...model.dropped];
  const expected = new Set(designColumns(model).map((designed) => designed.name));
  const there = new Set<string>();
  for (const one of given) {
    if (!expected.has(one) || there.has(one))
      return { field: 'coefficients', message: `"${one}" is there twice, or no term of the model has it.` };
    there.add(one);
  }
  const absent = [...expected].find((one) => !there.has(one));
  return absent === undefined
    ? null
    : { field: 'coefficients', message: `The coefficient "${absent}" is missing.` };
}
