import type { z } from 'zod';
import type { Failure, FailureCode } from '../failure.js';
import { nearestName } from './nearest.js';
import { type DocumentSource, type FieldPath, type Parsed, placeOf } from './yaml-document.js';

type Issue = z.core.$ZodIssue;

/**
 * What a schema attaches to an issue of its own. Without it, an issue's message is the text of what is allowed, and the
 * code follows from the issue.
 */
export interface IssueNote {
  readonly code: FailureCode;
  readonly remedy?: string;
  /** For `field-unknown`: the fields there are. */
  readonly known?: readonly string[];
}

/** Takes a failure found at a field of the document. */
export type Complain = (
  path: readonly PropertyKey[],
  code: FailureCode,
  message: string,
  remedy: string,
) => void;

/** A document against its schema; every failure, in the order of the schema's fields. */
export function checkDocument<S extends z.ZodType>(schema: S, source: DocumentSource): Parsed<z.output<S>> {
  const result = schema.safeParse(source.value);
  const found = result.success ? [] : failuresOfIssues(result.error.issues, source);
  const failures = [...source.failures, ...found];
  return result.success && failures.length === 0 ? { ok: true, value: result.data } : { ok: false, failures };
}

/** Issues of the schema as failures with file, line, field, what was found and what is allowed. */
export const failuresOfIssues = (issues: readonly Issue[], source: DocumentSource): Failure[] =>
  issues.map((issue) => failureOfIssue(issue, source));

function failureOfIssue(issue: Issue, source: DocumentSource): Failure {
  const where = placeOf(source, issue.path);
  const found = valueAt(source.value, issue.path);
  const note = issue.code === 'custom' ? (issue.params as IssueNote | undefined) : undefined;
  if (note?.code === 'field-unknown') return unknownField(issue.path, note.known ?? [], where);
  if (note !== undefined) {
    return {
      code: note.code,
      message: issue.message,
      ...(note.remedy === undefined ? {} : { remedy: note.remedy }),
      where,
    };
  }
  if (found === undefined) {
    const message = `The field "${String(issue.path.at(-1) ?? '')}" is missing; allowed: ${issue.message}.`;
    return { code: 'field-missing', message, remedy: 'Add the field.', where };
  }
  const message = `Found ${describeFound(found)}; allowed: ${issue.message}.`;
  const near =
    issue.code === 'invalid_value' && typeof found === 'string'
      ? nearestName(found, issue.values.map(String))
      : null;
  return {
    code: codeOf(issue, found),
    message,
    ...(near === null ? {} : { remedy: `Did you mean "${near}"?` }),
    where,
  };
}

function unknownField(path: FieldPath, known: readonly string[], where: Failure['where']): Failure {
  const written = String(path.at(-1));
  const near = nearestName(written, known);
  return {
    code: 'field-unknown',
    message: `There is no field "${written}" here; allowed: ${known.join(', ')}.`,
    remedy: near === null ? 'Remove it.' : `Did you mean "${near}"?`,
    where,
  };
}

function codeOf(issue: Issue, found: unknown): FailureCode {
  if (issue.code === 'invalid_type') {
    // Infinite numbers and fractions are numbers, but not these.
    const numeric = issue.expected === 'number' || issue.expected === 'int';
    return numeric && typeof found === 'number' ? 'field-value' : 'field-type';
  }
  if (issue.code === 'invalid_value' && typeof found === 'object') return 'field-type';
  if (issue.code === 'invalid_union') {
    const typesOnly = issue.errors.every((branch) => branch.every((inner) => inner.code === 'invalid_type'));
    return typesOnly ? 'field-type' : 'field-value';
  }
  return 'field-value';
}

function valueAt(value: unknown, path: FieldPath): unknown {
  let at = value;
  for (const step of path) {
    if (typeof at !== 'object' || at === null || !Object.hasOwn(at, step)) return undefined;
    at = (at as Record<PropertyKey, unknown>)[step];
  }
  return at;
}

/** What stands in the document, short enough for a message. */
export function describeFound(value: unknown): string {
  if (value === null || value === undefined) return 'nothing';
  if (Array.isArray(value)) return value.length === 0 ? 'an empty list' : 'a list';
  if (typeof value === 'object') return 'a mapping';
  if (typeof value !== 'string') return String(value);
  return JSON.stringify(value.length > 60 ? `${value.slice(0, 60)}…` : value);
}
