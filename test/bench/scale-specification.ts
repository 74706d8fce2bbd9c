/** The only site, all workers of which are its shards. */
export const SITE = 'harrowmere';

/** Above it the levels of one term are listed nowhere: their products are the columns. */
const LISTED_MOST = 100_000;

export interface ScaleSpecification {
  readonly rung: 'proximal' | 'sketched';
  /** Columns: exactly so many up to 1e5, about so many above. */
  readonly p: number;
  readonly roundsMost: number;
  readonly tolerance: number;
}

/** A logistic lasso on the levels of a zone, or of a zone and a kind of pipe and their products. */
export const scaleSpecification = ({ rung, p, roundsMost, tolerance }: ScaleSpecification): string =>
  [
    'commonfit: 1',
    'title: Breaks by zone',
    `sites: [${SITE}]`,
    'response: {column: broke}',
    'loss: logistic',
    'intercept: none',
    ...termsOf(p),
    `penalty: [{kind: lasso, lambda: ${0.1 / p}}]`,
    `rounds: {rung: ${rung}, most: ${roundsMost}, tolerance: ${tolerance}}`,
    'barrier: {deadline: 10m, patience: 30m}',
  ].join('\n');

function termsOf(p: number): string[] {
  const levels = (column: string, count: number): string =>
    `  - {column: ${column}, levels: [${Array.from({ length: count }, (_, k) => k).join(', ')}], baseline: null}`;
  if (p <= LISTED_MOST) return ['terms:', levels('zone', p)];
  const side = Math.round(Math.sqrt(p)) - 1;
  return ['terms:', levels('zone', side), levels('kind', side), '  - {product: [zone, kind]}'];
}
