import type { FailureCode } from '../../protocol/failure.js';
import { MARK } from '../source/column-sql.js';
import { transformed } from './factors.js';
import type { ModelInput, Predictor } from './predictor.js';
import { OFFSET_MOST } from './value-limit.js';

/** Why a row cannot be scored. */
export interface RowFault {
  readonly code: FailureCode;
  /** Null where no single column is at fault. */
  readonly column: string | null;
  readonly message: string;
  readonly remedy: string;
}

/**
 * The first thing wrong with a row, in the order of the predictor's inputs.
 *
 * @param values the row's numbers and codes, one for each input
 * @param texts the same as they stand in the table; null where missing
 * @param offset the column of the offset and its kind, null without one
 */
export function rowFault(
  predictor: Predictor,
  values: readonly number[],
  texts: readonly (string | null)[],
  offset: { readonly kind: 'exposure' | 'offset'; readonly column: string } | null,
): RowFault {
  for (const [position, input] of predictor.inputs.entries()) {
    const value = values[position];
    const text = texts[position];
    const fault =
      input.levels === null
        ? numericFault(input, value, text)
        : levelFault(input, predictor.levelRules.seen[position], value, text);
    if (fault !== null) return fault;
    if (offset?.column === input.column) {
      const wrong = offsetFault(offset, value);
      if (wrong !== null) return wrong;
    }
  }
  for (const together of predictor.levelRules.neverTogether) {
    if (!together.every(({ position, code }) => values[position] === code)) continue;
    const parts = together.map(({ position }) => `${predictor.inputs[position].column} "${texts[position]}"`);
    return {
      code: 'level-unknown',
      column: predictor.inputs[together[0].position].column,
      message: `No row of the fit had ${parts.join(' with ')}.`,
      remedy: 'The model says nothing about such rows: leave them out.',
    };
  }
  return (
    transformFault(predictor, values) ?? {
      code: 'value-not-finite',
      column: null,
      message: 'The linear predictor or the prediction is too large to compute with.',
      remedy: 'Look for a value in another unit than that of the fit.',
    }
  );
}

function transformFault(predictor: Predictor, values: readonly number[]): RowFault | null {
  for (const factor of predictor.columns.flatMap(({ factors }) => factors)) {
    if (factor.kind === 'level' || factor.transform === 'none') continue;
    const { column, transform } = factor;
    const value = values[predictor.inputs.findIndex((input) => input.column === column)];
    if (Number.isFinite(transformed(Float64Array.of(value), transform)[0])) continue;
    const name = typeof transform === 'string' ? transform : `power ${transform.power}`;
    return {
      code: 'value-not-finite',
      column,
      message: `The transform ${name} of the value ${value} is not finite.`,
      remedy: 'Correct the value, or leave the row out.',
    };
  }
  return null;
}

function numericFault({ column, unit }: ModelInput, value: number, text: string | null): RowFault | null {
  if (Number.isFinite(value)) return null;
  const needed = unit === null ? '' : ` The model takes it in ${unit}.`;
  if (value === MARK.numericMissing && text === null)
    return {
      code: 'value-missing',
      column,
      message: 'The value is missing.',
      remedy: `Fill it in.${needed}`,
    };
  if (/^\s*[+-]?(inf|infinity|nan)\s*$/i.test(text ?? '') || !Number.isNaN(Number(text)))
    return {
      code: 'value-not-finite',
      column,
      message: `The value ${text} is not finite.`,
      remedy: `Correct it or leave it empty as missing.${needed}`,
    };
  return {
    code: 'column-not-numeric',
    column,
    message: `The value "${text}" is not a number.`,
    remedy: `Correct it, or leave it empty as missing; decimals are written with a point.${needed}`,
  };
}

function levelFault(
  { column, levels }: ModelInput,
  seen: readonly boolean[],
  code: number,
  text: string | null,
): RowFault | null {
  if (seen[code]) return null;
  if (code === MARK.levelMissing)
    return { code: 'value-missing', column, message: 'The value is missing.', remedy: 'Fill it in.' };
  const known = (levels ?? []).filter((_, at) => seen[at]).map((level) => `"${level}"`);
  const message =
    code === MARK.levelUnknown
      ? `The value "${text}" is no level of the model; its levels: ${known.join(', ')}.`
      : `No row of the fit had the level "${text}"; its levels: ${known.join(', ')}.`;
  const remedy = 'Correct it, or leave the row out; text is compared letter by letter.';
  return { code: 'level-unknown', column, message, remedy };
}

function offsetFault(
  { kind, column }: { readonly kind: 'exposure' | 'offset'; readonly column: string },
  value: number,
): RowFault | null {
  if (kind === 'exposure' && value <= 0)
    return {
      code: 'exposure-not-positive',
      column,
      message: `The exposure ${value} is not above zero.`,
      remedy: 'Give the exposure that the prediction is for.',
    };
  if (Math.abs(kind === 'exposure' ? Math.log(value) : value) <= OFFSET_MOST) return null;
  return {
    code: 'value-not-finite',
    column,
    message: `The ${kind} ${value} is too large to compute with.`,
    remedy: 'Correct the value, or give the column in the unit of the fit.',
  };
}
