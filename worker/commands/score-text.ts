import type { ModelDocument } from '../../protocol/model/model-document.js';
import type { Scored } from '../score/score-table.js';
import { counted } from './terminal.js';

const NAMED_MOST = 10;

/** What is said on standard error before rows are computed: only what the reader of the numbers should know. */
export function beforeScore(model: ModelDocument): string[] {
  const lines: string[] = [];
  if (model.fit.outcome !== 'solved')
    lines.push(
      `Caution: the fit ended as "${model.fit.outcome}"; its coefficients may be far from those of the optimum.`,
    );
  if (model.dropped.length > 0)
    lines.push(
      `Had one value in every row of the fit, and has no coefficient: ${listed(model.dropped)}. The model knows nothing of another value.`,
    );
  return lines;
}

export function afterScore(model: ModelDocument, scored: Scored, options: { out?: string }): string[] {
  const { rows, flagged, inputs } = scored;
  const where = options.out === undefined ? '' : ` in ${options.out}`;
  const lines = [`${counted(rows, 'row')}${where}.`];
  if (flagged > 0)
    lines.push(
      `${counted(flagged, 'row')} could not be scored: without a prediction, and the column "note" says why.`,
    );
  const units = inputs.flatMap(({ column, unit }) => (unit === null ? [] : [`${column} in ${unit}`]));
  if (units.length > 0) lines.push(`Taken: ${listed(units)}.`);
  lines.push(
    `The prediction is the expected ${model.response.column}${meaningOf(model)}: an estimate from "${model.title}", no ground by itself for a decision; those belong to licensed practice and local codes.`,
  );
  return lines;
}

function meaningOf({ response, offset, inverseLink }: ModelDocument): string {
  const chance =
    inverseLink === 'logistic'
      ? ` (the probability of ${response.positive === null ? '1' : `"${response.positive}"`})`
      : '';
  return offset?.kind === 'exposure' ? `${chance} over the row's ${offset.column}` : chance;
}

const listed = (names: readonly string[]): string =>
  names.length <= NAMED_MOST
    ? names.join(', ')
    : `${names.slice(0, NAMED_MOST).join(', ')} and ${names.length - NAMED_MOST} more`;
