import { z } from 'zod';
import { LEAVE_KINDS } from '../../protocol/messages/survey.js';
import {
  chosen,
  columnName,
  distinct,
  isMapping,
  mapping,
  notBuilt,
  refused,
  siteName,
  text,
  wholeFrom,
  wholeOrAny,
  words,
} from '../../protocol/specification/fields.js';
import type { IssueNote } from '../../protocol/specification/issues.js';

/** The site file as it is written, field by field. */

const urlAllowed = 'an address that begins with ws:// or wss://, without user, password, query or fragment';

const url = z.string({ error: urlAllowed }).refine(
  (written) => {
    if (!URL.canParse(written)) return false;
    const { protocol, username, password, search, hash, hostname } = new URL(written);
    return (
      ['ws:', 'wss:'].includes(protocol) && hostname !== '' && username + password + search + hash === ''
    );
  },
  { error: urlAllowed },
);

const path = text('the path of a file', 4096);

export interface WrittenTable {
  readonly kind: 'csv' | 'parquet' | 'jsonl' | 'query';
  /** A path, or the text of the query. */
  readonly text: string;
}

const TABLE_KINDS = ['csv', 'parquet', 'jsonl', 'query', 'postgres'] as const;

const oneTable = mapping({
  csv: path.optional(),
  parquet: path.optional(),
  jsonl: path.optional(),
  query: text('a query in SQL', 100_000).optional(),
  postgres: notBuilt('Tables of a database server are', 'Use csv, parquet, jsonl or query.').optional(),
}).transform((written, context): WrittenTable => {
  for (const kind of ['csv', 'parquet', 'jsonl', 'query'] as const) {
    const given = written[kind];
    if (given !== undefined) return { kind, text: given };
  }
  const note: IssueNote = { code: 'field-missing', remedy: 'Say where the rows are.' };
  const message = 'Found no source of rows; allowed: one of csv, parquet, jsonl, query.';
  context.addIssue({ code: 'custom', message, params: { ...note } });
  return z.NEVER;
});

const table = chosen((input): z.ZodType<WrittenTable> => {
  const given = isMapping(input) ? TABLE_KINDS.filter((kind) => kind in input) : [];
  if (given.length < 2) return oneTable;
  return refused(
    'field-conflict',
    `Found ${given.join(' and ')}; allowed: one of them.`,
    'Keep one source of rows.',
  );
});

const shard = mapping({
  /** This worker's share, from 1. */
  index: wholeFrom(1, 10_000),
  /** Shares in all. */
  of: wholeFrom(1, 10_000),
}).superRefine((written, context) => {
  if (written.index <= written.of) return;
  const note: IssueNote = { code: 'field-value', remedy: 'Count shares from 1.' };
  const message = `Found ${written.index}, of ${written.of} shares; allowed: a whole number from 1 to ${written.of}.`;
  context.addIssue({ code: 'custom', path: ['index'], message, params: { ...note } });
});

const leaveKind = words(...LEAVE_KINDS);

const policy = mapping({
  /** No default: the custodian says which columns a fit may use, or `any`. */
  columns: chosen((input): z.ZodType<readonly string[] | 'any'> => {
    const allowed = 'a list of column names, or any';
    return typeof input === 'string' ? z.literal('any', { error: allowed }) : distinct(columnName, allowed);
  }),
  /** Least rows a fit must use here. Default 50. */
  'rows-least': wholeFrom(1).default(50),
  /** Kinds of answer that may leave. */
  leave: distinct(leaveKind, 'a list of kinds of answer', 0).default([
    'counts',
    'moments',
    'proximal',
    'gradients',
    'curvature',
  ]),
  /** Curvature matrices a fit. Default 3; 0 none, any: no limit. */
  'curvature-most': wholeOrAny(0).default(3),
  /** Numbers a run, of all kinds together. Default 1,000,000. */
  'numbers-most': wholeOrAny(1).default(1_000_000),
  /** Rounds a run. Default 2,000. */
  'rounds-most': wholeOrAny(1).default(2000),
  /** Default any: a specification needs no approval of its own. */
  approvals: words('any', 'listed').default('any'),
});

export const siteDocument = mapping({
  /** Version of the format. */
  'commonfit-site': z.literal(1, { error: '1, the version of the format' }),
  site: siteName,
  coordinator: mapping({
    url,
    /** File that holds the site's token. */
    'token-file': path,
    /** Certificate authority of the coordinator. Default: the platform's. */
    'ca-file': path.optional(),
    /** Certificate of this site, and its key, for a coordinator that asks for one: both or neither. */
    'certificate-file': path.optional(),
    'key-file': path.optional(),
  }).superRefine((written, context) => {
    const given = written['certificate-file'] === undefined ? 'key-file' : 'certificate-file';
    const missing = given === 'key-file' ? 'certificate-file' : 'key-file';
    if ((written[given] === undefined) === (written[missing] === undefined)) return;
    const note: IssueNote = { code: 'field-conflict', remedy: `Name the ${missing} too, or neither.` };
    const message = `Found ${given} without ${missing}; allowed: both, or neither.`;
    context.addIssue({ code: 'custom', path: [given], message, params: { ...note } });
  }),
  table,
  /** Default: all rows. */
  shard: shard.default({ index: 1, of: 1 }),
  policy,
});
