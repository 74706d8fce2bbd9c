import type { RunOutcome } from '../run/run.js';

/** What the program can end with, but for outcomes. */
export const EXIT = {
  ok: 0,
  defect: 1,
  usage: 2,
  document: 3,
  unreachable: 4,
  unauthorised: 5,
  notFound: 6,
  /** Something on this machine is in the way: a port that is taken, a folder that cannot be written. */
  machine: 7,
  /** A replay or a verification does not come out as recorded. */
  differs: 8,
  /** Nobody vouches for the coordinator's certificate, or not any more. */
  untrusted: 9,
  /** A run solved without the rows of a site that it began with. */
  solvedWithout: 19,
  /** 128 + SIGINT, as shells expect. */
  interrupted: 130,
} as const;

const OUTCOME_CODES: Readonly<Record<RunOutcome, number>> = {
  solved: 0,
  'round-limit': 10,
  'time-limit': 11,
  stalled: 12,
  'site-missing': 13,
  refused: 14,
  infeasible: 15,
  unbounded: 16,
  cancelled: 17,
  broken: 18,
};

export type ExitCode = (typeof EXIT)[keyof typeof EXIT] | number;

/**
 * The exit code of a run's outcome; `without`: the sites that it went on without. An outcome that this program does not
 * know (a newer coordinator's) is `broken`.
 */
export function exitCodeOf(outcome: string, without: readonly unknown[]): number {
  if (outcome === 'solved' && without.length > 0) return EXIT.solvedWithout;
  return Object.hasOwn(OUTCOME_CODES, outcome) ? OUTCOME_CODES[outcome as RunOutcome] : OUTCOME_CODES.broken;
}

const MEANINGS: readonly [number, string][] = [
  [EXIT.ok, 'done; of a run: solved'],
  [EXIT.defect, 'a defect of this program'],
  [EXIT.usage, 'the command line is wrong'],
  [EXIT.document, 'the document, folder or journal is wrong or cannot be read'],
  [EXIT.unreachable, 'the coordinator cannot be reached, or has no room or no disk space at present'],
  [EXIT.unauthorised, 'the token is missing or not accepted'],
  [EXIT.notFound, 'no such run or token, or the run has no result yet'],
  [EXIT.machine, 'a port, file or folder of this machine is in the way'],
  [EXIT.differs, 'the replay or the verification does not come out as stored'],
  [EXIT.untrusted, 'the certificate of the coordinator is not trusted'],
  [EXIT.interrupted, 'interrupted'],
];

/** Exit codes with their meaning, for `--help`: all, or those a command names. */
export function exitCodeTable(codes: readonly number[], withOutcomes: boolean): string {
  const rows = MEANINGS.filter(([code]) => codes.includes(code)).map(([code, meaning]) => [code, meaning]);
  const outcomes = withOutcomes
    ? Object.entries(OUTCOME_CODES)
        .filter(([, code]) => code !== EXIT.ok)
        .map(([outcome, code]): [number, string] => [code, `the run ended as ${outcome}`])
        .concat([[EXIT.solvedWithout, 'the run ended as solved, without the rows of a site']])
    : [];
  return [...rows, ...outcomes]
    .sort((a, b) => Number(a[0]) - Number(b[0]))
    .map(([code, meaning]) => `  ${String(code).padStart(3)}  ${meaning}`)
    .join('\n');
}
