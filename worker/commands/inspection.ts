import type { Failure } from '../../protocol/failure.js';
import type { SurveyAnswer } from '../../protocol/messages/survey.js';
import { usedColumns } from '../../protocol/specification/design-columns.js';
import { fitCount } from '../../protocol/specification/fit-count.js';
import type { FitSpecification, LossForm, Term } from '../../protocol/specification/types.js';
import { allowanceOf, checkApproval, checkColumns, checkFolds, checkRows } from '../custody/policy.js';
import type { Policy, SiteFile } from '../custody/site-file.js';
import type { RawShard } from '../design/shard.js';
import { surveyOf } from '../design/survey.js';
import { lossOf } from '../losses/index.js';
import { checkWholeSite } from '../service/whole-site.js';
import { departuresOf, type PossibleDeparture } from './departures.js';
import type { SpecificationFile } from './documents.js';

/** What one specification would read at one site and what would leave, without a coordinator. */
export interface Inspection {
  readonly title: string;
  readonly digest: string;
  readonly site: string;
  readonly shard: { readonly index: number; readonly of: number };
  readonly loss: string;
  readonly reads: readonly ColumnRead[];
  /** Null where the table was not read, or could not be. */
  readonly rows: { readonly used: number; readonly dropped: number } | null;
  readonly response: { readonly least: number; readonly most: number; readonly mean: number } | null;
  readonly design: readonly DesignSummary[] | null;
  readonly departures: readonly PossibleDeparture[];
  readonly fits: number;
  readonly limits: {
    readonly curvatureMost: number | null;
    readonly numbersMost: number | null;
    readonly roundsMost: number | null;
  };
  readonly notes: readonly string[];
  readonly refusals: readonly Failure[];
}

export interface ColumnRead {
  readonly column: string;
  readonly role: string;
  readonly type: string;
  readonly allowed: boolean;
}

/** Over the rows used; sd with divisor n. */
export interface DesignSummary {
  readonly name: string;
  readonly mean: number;
  readonly sd: number;
}

/** `raw`: the rows as read, the failure that stopped it, or null where the policy kept the table shut. */
export function inspectionOf(
  site: SiteFile,
  file: SpecificationFile,
  approved: ReadonlySet<string>,
  raw: RawShard | Failure | null,
): Inspection {
  const { specification: spec, digest } = file;
  const { policy } = site;
  const read = raw !== null && !('code' in raw) ? raw : null;
  const survey = read === null ? null : surveyOf(read, lossOf(spec.loss));
  const refusals = [
    namesSite(spec, site.site),
    checkWholeSite(spec, site.shard),
    checkColumns(policy, spec),
    checkApproval(policy, digest, approved),
    raw !== null && 'code' in raw ? raw : null,
    read === null ? null : checkRows(policy, read.rowCount),
    read === null ? null : checkFolds(policy, read.folds),
  ].filter((failure) => failure !== null);
  return {
    title: spec.title,
    digest,
    site: site.site,
    shard: site.shard,
    loss: lossWords(spec.loss),
    reads: readsOf(spec, policy),
    rows: read === null ? null : { used: read.rowCount, dropped: read.rowsDropped },
    response: survey === null ? null : responseOf(survey.response),
    design: survey === null ? null : designOf(survey),
    departures: survey === null ? [] : departuresOf(spec, policy, survey),
    fits: fitCount(spec),
    limits: allowanceOf(policy),
    notes: survey?.notes ?? [],
    refusals,
  };
}

const lossWords = (loss: LossForm): string =>
  loss.kind === 'huber' ? `${loss.kind} with threshold ${loss.threshold}` : loss.kind;

function namesSite(spec: FitSpecification, site: string): Failure | null {
  if ('least' in spec.sites || spec.sites.includes(site)) return null;
  return {
    code: 'site-unknown',
    message: `The specification asks ${spec.sites.join(', ')}; this site is ${site}.`,
    remedy: 'Name this site in the specification, or inspect it with the site file of a site it names.',
  };
}

function readsOf(spec: FitSpecification, policy: Policy): ColumnRead[] {
  const allowed = policy.columns === 'any' ? null : new Set(policy.columns);
  return usedColumns(spec).map(({ column, role }) => ({
    column,
    role,
    type: typeOf(spec, column, role),
    allowed: allowed?.has(column) ?? true,
  }));
}

function typeOf(spec: FitSpecification, column: string, role: string): string {
  if (role === 'response')
    return spec.response.positive === null
      ? 'number'
      : `one of two values, ${spec.response.positive} counts as 1`;
  if (role === 'fold' || role === 'cluster') return 'any value, as a label';
  if (role !== 'term') return role === 'exposure' ? 'number, log of it' : 'number';
  return spec.terms
    .filter((term) => term.kind !== 'product' && term.column === column)
    .map(termWords)
    .join('; ');
}

function termWords(term: Term): string {
  if (term.kind === 'levels')
    return `levels ${term.levels.map((level) => (level === term.baseline ? `${level} (baseline)` : level)).join(', ')}`;
  if (term.kind === 'product') return 'product';
  const { unit, transform } = term;
  const applied =
    transform === 'none' ? null : typeof transform === 'string' ? transform : `power ${transform.power}`;
  const number = unit === null ? 'number' : `number in ${unit}`;
  return applied === null ? number : `${number}, ${applied} of it`;
}

const responseOf = ({
  least,
  most,
  weightedSum,
  weightSum,
}: SurveyAnswer['response']): Inspection['response'] => ({
  least,
  most,
  mean: weightSum > 0 ? weightedSum / weightSum : 0,
});

const designOf = ({
  columns,
  mean,
  centredSquares,
  rowsUsed,
}: ReturnType<typeof surveyOf>): DesignSummary[] =>
  columns.map((name, j) => ({ name, mean: mean[j], sd: Math.sqrt(centredSquares[j] / rowsUsed) }));
