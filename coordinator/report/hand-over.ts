import { modelText } from '../../protocol/model/model-document.js';
import type { FitSpecification } from '../../protocol/specification/types.js';
import type { ResultDocument } from '../run/result.js';
import { coefficientsLatex, coefficientsMarkdown } from './coefficient-tables.js';
import { inferenceOf, modelDocument } from './model-document.js';
import { pmmlOf } from './pmml.js';

/** Files by which a fit is handed over to those who use it. */
export const HAND_OVER_FILES = {
  model: 'model.json',
  pmml: 'model.pmml',
  markdown: 'coefficients.md',
  latex: 'coefficients.tex',
} as const;

/**
 * Name and text of each file of a fit that `isUsable`. Without `model.pmml` where the model has a name that XML cannot
 * carry.
 */
export function handOverFiles(
  specification: FitSpecification,
  result: ResultDocument,
  fit: number,
): readonly (readonly [string, string])[] {
  const model = modelDocument(specification, result, fit);
  const pmml = pmmlOf(model);
  const { title, fits } = result;
  const inference = inferenceOf(result, fit);
  return [
    [HAND_OVER_FILES.model, modelText(model)],
    ...(pmml.ok ? [[HAND_OVER_FILES.pmml, pmml.value] as const] : []),
    [HAND_OVER_FILES.markdown, coefficientsMarkdown(title, fits[fit], inference)],
    [HAND_OVER_FILES.latex, coefficientsLatex(title, fits[fit], inference)],
  ];
}
