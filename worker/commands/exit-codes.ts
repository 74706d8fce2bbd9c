import type { Failure, FailureCode } from '../../protocol/failure.js';

/** What the program can end with. */
export const EXIT = {
  ok: 0,
  defect: 1,
  usage: 2,
  document: 3,
  table: 4,
  policy: 5,
  coordinator: 6,
  machine: 7,
  flagged: 8,
  /** 128 + SIGINT, as shells expect. */
  interrupted: 130,
} as const;

export type ExitCode = (typeof EXIT)[keyof typeof EXIT];

const MEANINGS: readonly [ExitCode, string][] = [
  [EXIT.ok, 'done'],
  [EXIT.defect, 'a defect of this program'],
  [EXIT.usage, 'the command line is wrong'],
  [EXIT.document, 'the site file, fit specification, approvals file or model is wrong'],
  [EXIT.table, 'the table cannot be read, or not as the specification needs it'],
  [EXIT.policy, "the site's policy does not let the specification in"],
  [EXIT.coordinator, 'the coordinator refuses this worker, or its certificate is not trusted'],
  [EXIT.machine, 'a file or folder of this machine is in the way, or the ledger is broken'],
  [EXIT.flagged, 'done, but some rows could not be scored and are flagged'],
  [EXIT.interrupted, 'interrupted'],
];

/** Exit codes with their meaning, for `--help`. */
export const exitCodeTable = (codes: readonly ExitCode[]): string =>
  MEANINGS.filter(([code]) => codes.includes(code))
    .map(([code, meaning]) => `  ${code}  ${meaning}`)
    .join('\n');

const CODES: readonly [ExitCode, readonly FailureCode[]][] = [
  [
    EXIT.document,
    [
      'file-unreadable',
      'yaml-invalid',
      'field-unknown',
      'field-missing',
      'field-type',
      'field-value',
      'field-conflict',
      'not-supported',
    ],
  ],
  [
    EXIT.table,
    [
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
      'no-rows',
      'rows-too-few',
    ],
  ],
  [
    EXIT.policy,
    [
      'policy-column',
      'policy-rows',
      'policy-kind',
      'policy-curvature',
      'policy-numbers',
      'policy-rounds',
      'policy-approval',
    ],
  ],
  [
    EXIT.coordinator,
    [
      'token-refused',
      'certificate-untrusted',
      'certificate-refused',
      'version-unsupported',
      'site-unknown',
      'site-taken',
      'link-lost',
    ],
  ],
  [EXIT.machine, ['ledger-broken', 'state-unwritable']],
  [EXIT.interrupted, ['run-cancelled']],
];

const BY_FAILURE = new Map(CODES.flatMap(([exit, codes]) => codes.map((code) => [code, exit] as const)));

export const exitCodeOf = (failure: Failure): ExitCode => BY_FAILURE.get(failure.code) ?? EXIT.defect;
