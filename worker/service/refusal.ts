import type { Failure, FailureCode } from '../../protocol/failure.js';
import type { Ask, Refusal } from '../../protocol/messages/round.js';

/**
 * What a refusal may say outside. Failures found in the rows name a row, a value or a path: those stay in the worker's
 * own log, and the refusal says what kind of thing is wrong and in which column.
 */
const OUTSIDE: Partial<Record<FailureCode, string>> = {
  'table-missing': 'The table is not where the site file says.',
  'table-empty': 'The table holds no rows.',
  'table-unreadable': 'The table cannot be read.',
  'header-duplicate': 'The table has the same column name twice.',
  'column-missing': 'The table has no such column.',
  'column-not-numeric': 'The column holds a value that is not a number.',
  'value-not-finite': 'The column holds a value that is not finite.',
  'value-missing': 'The column has rows without a value.',
  'level-unknown': 'The column holds a level that the specification does not list.',
  'response-range': 'The response holds a value that the loss does not allow.',
  'exposure-not-positive': 'The exposure is not positive in every row.',
  'weight-negative': 'A weight is negative.',
  'no-rows': 'No row is left after those with missing values are dropped.',
  'rows-too-few': 'The site has fewer usable rows than the cross-validation has folds.',
  'policy-rows': 'The site has fewer usable rows than its policy asks for.',
  'ledger-broken': 'The site cannot write to its ledger.',
  'state-unwritable': 'The site cannot write to its disk.',
  'file-unreadable': 'The site cannot read its files.',
  internal: 'The worker met a defect of its own.',
};

const AT_THE_SITE = "The custodian finds the details in the worker's log.";

const textMost = 4000;

export function refusalOf(ask: Pick<Ask, 'run' | 'ask'>, failure: Failure): Refusal {
  const outside = OUTSIDE[failure.code];
  const column = failure.where?.column;
  const message =
    outside === undefined ? failure.message : column === undefined ? outside : `Column ${column}: ${outside}`;
  const remedy = outside === undefined ? (failure.remedy ?? null) : AT_THE_SITE;
  return {
    kind: 'refusal',
    run: ask.run,
    ask: ask.ask,
    code: failure.code,
    message: message.slice(0, textMost),
    remedy: remedy === null ? null : remedy.slice(0, textMost),
  };
}
