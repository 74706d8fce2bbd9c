/**
 * Expected endings are values, not exceptions: a function that may fail for a reason the user can mend returns
 * `Checked<T>`. Exceptions are kept for defects of this program.
 */

/** Why something could not be done, and what to do about it. `code` is stable; callers match on it, never on `message`. */
export interface Failure {
  readonly code: FailureCode;
  /** One sentence: what was found and what is allowed. */
  readonly message: string;
  /** One sentence: what the user can do. */
  readonly remedy?: string;
  /** Where it was found: a file (with line and field), a table (with row and column) or a site. */
  readonly where?: Place;
}

export interface Place {
  readonly file?: string;
  /** 1-based. */
  readonly line?: number;
  /** Dotted path of a field in a document, `terms[2].levels`. */
  readonly field?: string;
  /** 1-based data row of a table, header not counted. */
  readonly row?: number;
  readonly column?: string;
  readonly site?: string;
}

export type Checked<T> =
  | { readonly ok: true; readonly value: T }
  | { readonly ok: false; readonly failure: Failure };

export const succeed = <T>(value: T): Checked<T> => ({ ok: true, value });

export const fail = (
  code: FailureCode,
  message: string,
  more: { remedy?: string; where?: Place } = {},
): { readonly ok: false; readonly failure: Failure } => ({ ok: false, failure: { code, message, ...more } });

/** `file:line field: message. remedy` on one line, for terminals and logs. */
export function describeFailure(failure: Failure): string {
  const { where } = failure;
  const place = [
    where?.site === undefined ? undefined : `site ${where.site}`,
    where?.file === undefined
      ? undefined
      : where.line === undefined
        ? where.file
        : `${where.file}:${where.line}`,
    where?.field,
    where?.row === undefined ? undefined : `row ${where.row}`,
    where?.column === undefined ? undefined : `column ${where.column}`,
  ].filter((part) => part !== undefined);
  const head = place.length === 0 ? '' : `${place.join(', ')}: `;
  const tail = failure.remedy === undefined ? '' : ` ${failure.remedy}`;
  return `${head}${failure.message}${tail} [${failure.code}]`;
}

/** Every stable code. A new code is added here, and documented in protocol/README.md if it can cross the wire. */
export const FAILURE_CODES = [
  // documents (fit specification, site file)
  'file-unreadable',
  'yaml-invalid',
  'field-unknown',
  'field-missing',
  'field-type',
  'field-value',
  'field-conflict',
  'not-supported',
  // tables
  'table-missing',
  'table-empty',
  'table-unreadable',
  'header-duplicate',
  'column-missing',
  'column-not-numeric',
  'value-not-finite',
  'value-missing',
  'level-unknown',
  'response-range',
  'exposure-not-positive',
  'weight-negative',
  // custody
  'policy-column',
  'policy-rows',
  'policy-kind',
  'policy-curvature',
  'policy-numbers',
  'policy-rounds',
  'policy-approval',
  'ledger-broken',
  // wire
  'frame-too-large',
  'frame-malformed',
  'message-unknown',
  'version-unsupported',
  'token-refused',
  'certificate-untrusted',
  'certificate-refused',
  'site-unknown',
  'site-taken',
  'dimension-wrong',
  'number-not-finite',
  'answer-unasked',
  'run-unknown',
  'memory-missing',
  'ask-changed',
  'link-lost',
  // method
  'no-spread',
  'no-rows',
  'rows-too-few',
  'separable',
  'rank-deficient',
  'not-positive-definite',
  'round-limit',
  'stalled',
  // running
  'site-missing',
  'run-cancelled',
  'journal-broken',
  'port-in-use',
  'state-unwritable',
  'coordinator-full',
  'too-many-requests',
  'too-slow',
  'not-found',
  'unauthorised',
  'internal',
] as const;

export type FailureCode = (typeof FAILURE_CODES)[number];
