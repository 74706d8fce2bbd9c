import type {
  DesignColumn,
  FitSpecification,
  LossForm,
  Penalty,
  Term,
  Transform,
} from '../../protocol/specification/types.js';
import { chooseText, interceptText, lambdaText, reportText } from './analysis-text.js';
import { counted, duration, listed, wrapped } from './phrases.js';

/** Design columns named one by one before the rest is only counted. */
const COLUMNS_MOST = 60;

function lossText(loss: LossForm, response: string): string {
  switch (loss.kind) {
    case 'squared':
      return `the mean of ${response} by least squares`;
    case 'logistic':
      return `the log odds of ${response} by logistic regression`;
    case 'poisson':
      return `the log of the expected ${response} by Poisson regression`;
    case 'huber':
      return `the centre of ${response} by Huber's loss (residuals up to ${loss.threshold} count by their square, larger ones only in proportion to their size)`;
  }
}

/** What a specification fits, in words: model, rows, design columns, penalty, rounds, barrier, digest. */
export function specificationText(
  spec: FitSpecification,
  columns: readonly DesignColumn[],
  digest: string,
  width: number,
): string[] {
  const paragraph = (text: string): string[] => wrapped(text, width);
  return [
    ...paragraph(`“${spec.title}”`),
    '',
    ...paragraph(modelText(spec)),
    ...paragraph(sitesText(spec)),
    '',
    ...paragraph(
      `${counted(columns.length, 'coefficient')} from ${counted(spec.terms.length, 'term')}${interceptText(spec.intercept)}:`,
    ),
    ...columns.slice(0, COLUMNS_MOST).flatMap((column) => wrapped(columnText(spec, column), width, 4, 2)),
    ...(columns.length > COLUMNS_MOST ? [`  and ${columns.length - COLUMNS_MOST} more`] : []),
    '',
    ...(spec.penalties.length === 0
      ? ['No penalty.']
      : spec.penalties.flatMap((penalty) => paragraph(penaltyText(penalty)))),
    ...(spec.choose === null ? [] : paragraph(chooseText(spec.choose))),
    ...reportText(spec.report).flatMap(paragraph),
    ...paragraph(roundsText(spec)),
    ...paragraph(barrierText(spec)),
    '',
    'Digest, which custodians approve:',
    digest,
  ];
}

export function modelText(spec: FitSpecification): string {
  const { column, positive } = spec.response;
  const response = positive === null ? column : `${column} being ${positive}`;
  const offset =
    spec.offset === null
      ? ''
      : spec.offset.kind === 'exposure'
        ? ` per unit of exposure ${spec.offset.column} (offset ln ${spec.offset.column})`
        : `, with the offset ${spec.offset.column}`;
  const weights = spec.weights === null ? '' : `, rows weighted by ${spec.weights.column}`;
  return `Models ${lossText(spec.loss, response)}${offset}${weights}.`;
}

export function sitesText(spec: FitSpecification): string {
  const missing =
    spec.missing === 'refuse'
      ? 'A site that has a missing value in a used column refuses.'
      : 'Rows with a missing value in a used column are left out and counted.';
  const sites =
    'least' in spec.sites
      ? `Over the rows of whichever sites are connected, at least ${spec.sites.least}.`
      : `Over the rows of ${counted(spec.sites.length, 'site')}, all needed: ${listed(spec.sites)}.`;
  return `${sites} ${missing}`;
}

export function columnText(spec: FitSpecification, column: DesignColumn): string {
  const term = spec.terms[column.term];
  const factors = column.factors.map((factor) =>
    factor.kind === 'level'
      ? `1 where ${factor.column} is ${factor.level}`
      : transformed(factor.column, factor.transform),
  );
  const detail = term === undefined ? '' : termDetail(term);
  return `${column.name}: ${factors.join(', times ')}${detail}`;
}

function termDetail(term: Term): string {
  if (term.kind === 'numeric') return term.unit === null ? '' : ` [${term.unit}]`;
  if (term.kind === 'levels') return term.baseline === null ? ', no baseline' : `, against ${term.baseline}`;
  return '';
}

function transformed(column: string, transform: Transform): string {
  if (transform === 'none') return column;
  if (transform === 'log') return `ln(${column})`;
  if (transform === 'sqrt') return `square root of ${column}`;
  return `${column} to the power ${transform.power}`;
}

export function penaltyText(penalty: Penalty): string {
  const share = penalty.kind === 'elastic-net' ? `, ${penalty.l1} of it on absolute values` : '';
  const scale = penalty.scaled
    ? 'coefficients times the standard deviation of their column'
    : 'coefficients as they are';
  const factors = Object.entries(penalty.perTerm).map(([name, factor]) =>
    factor === 0 ? `${name} left out` : `${name} times ${factor}`,
  );
  return `Penalty ${penalty.kind}, ${lambdaText(penalty)}${share}, on ${scale}${factors.length === 0 ? '' : `; ${listed(factors)}`}.`;
}

export function roundsText(spec: FitSpecification): string {
  const { tolerance, most, rung } = spec.rounds;
  const ladder = rung === 'highest' ? '' : `, on no rung above ${rung}`;
  return `Stops at a relative distance of ${tolerance} to the optimum, or after ${counted(most, 'round')}${ladder}.`;
}

export function barrierText(spec: FitSpecification): string {
  const { quorum, oldest, deadlineMs, patienceMs, missing } = spec.barrier;
  const who = quorum === 'all' ? 'every site' : counted(quorum, 'site');
  const older =
    quorum === 'all'
      ? ''
      : ` For the others their older answers stand in, of up to ${counted(oldest, 'round')} before; the result is certified by answers of all sites at one point.`;
  const gone =
    missing === 'stop'
      ? 'then the run ends as site-missing'
      : 'then the fit begins again without its rows, and the result says so';
  return `A round waits for ${who}.${older} A site without an answer is asked again after ${duration(deadlineMs)} and waited for up to ${duration(patienceMs)}; ${gone}.`;
}
