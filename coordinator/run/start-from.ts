import { type Checked, fail, succeed } from '../../protocol/failure.js';
import { designColumns } from '../../protocol/specification/design-columns.js';
import type { FitSpecification, LossKind } from '../../protocol/specification/types.js';
import type { FitDocument, ResultDocument } from './result.js';
import type { InferenceDocument, MovedDocument } from './result-parts.js';
import { INTERCEPT_NAME } from './result-parts.js';
import type { RungChoice } from './rung.js';
import type { Frame } from './scale.js';

/**
 * The coefficients of an earlier run that a run starts from. They are part of what the run is, since the last bits of a
 * result depend on where its method starts: the journal holds them, and nothing of the earlier run is needed again.
 */
export interface StartFrom {
  readonly run: string;
  /** Names and values on the original scale; the intercept, where it was a shared one, first as `(intercept)`. */
  readonly coefficients: readonly (readonly [string, number])[];
  /** Coefficients whose names mean something else in this run (another transform, say): they start at 0. */
  readonly redefined: readonly string[];
}

/** Where a run that starts from another one starts, and what is said of it. */
export interface WarmStart {
  /** On solver columns; null where the start is of no use, as `note` says. */
  readonly point: Float64Array | null;
  readonly note: string;
}

/** Outcomes whose coefficients are near an optimum that exists. */
const STARTABLE: readonly string[] = ['solved', 'round-limit', 'stalled'];

const LINKS: Readonly<Record<LossKind, string>> = {
  squared: 'the response itself',
  huber: 'the response itself',
  logistic: 'log odds',
  poisson: 'log rates',
};

/** A run that has ended, as it is looked at for a start. */
export interface Earlier {
  readonly run: string;
  readonly specification: Pick<FitSpecification, 'loss' | 'terms'>;
  readonly result: Pick<ResultDocument, 'fits' | 'chosen'>;
}

/** Fails with `field-value` where there are no coefficients, or none that both runs have. */
export function startFromOf(
  earlier: Earlier,
  specification: Pick<FitSpecification, 'loss' | 'terms'>,
): Checked<StartFrom> {
  const { run, result } = earlier;
  const fit = result.chosen === null ? undefined : result.fits[result.chosen];
  if (fit === undefined || !STARTABLE.includes(fit.outcome) || !allFinite(fit))
    return refused(
      result.fits.length > 1 && result.chosen === null
        ? `Run ${run} has ${result.fits.length} fits and none was chosen: it has no one set of coefficients to start from.`
        : `Run ${run} has no coefficients to start from.`,
    );
  const [before, now] = [earlier.specification.loss.kind, specification.loss.kind].map((kind) => LINKS[kind]);
  if (before !== now)
    return refused(`The coefficients of run ${run} are about ${before}, those of this one about ${now}.`);
  const meanings = (terms: FitSpecification['terms']): Map<string, string> =>
    new Map(designColumns({ terms }).map(({ name, factors }) => [name, JSON.stringify(factors)]));
  const old = meanings(earlier.specification.terms);
  const own = meanings(specification.terms);
  const redefined = [...own].flatMap(([name, meaning]) =>
    Object.hasOwn(fit.coefficients, name) && old.get(name) !== meaning ? [name] : [],
  );
  const kept = Object.entries(fit.coefficients).filter(([name]) => !redefined.includes(name));
  if (!kept.some(([name]) => own.has(name)))
    return refused(`No coefficient of run ${run} is one of this specification.`);
  const intercept = fit.intercept === null ? [] : [[INTERCEPT_NAME, fit.intercept] as const];
  return succeed({ run, coefficients: [...intercept, ...kept], redefined });
}

const allFinite = ({ intercept, coefficients }: FitDocument): boolean =>
  [intercept ?? 0, ...Object.values(coefficients)].every(Number.isFinite);

const refused = (message: string): Checked<never> =>
  fail('field-value', message, {
    remedy: 'Name another run with --start-from, or leave it out.',
    where: { field: 'startFrom' },
  });

/**
 * Standard deviation of the linear predictor, columns taken as uncorrelated, from which rates and odds run out of
 * numbers and the curvature says nothing: an old coefficient per metre on a column now in millimetres.
 */
const SPREAD_MOST = 30;

/** Where the methods of all rows and of every fold start; `nullStart`: the intercept-only fit, on solver columns. */
export function warmStartOf(
  { run, coefficients, redefined }: StartFrom,
  { loss, penalties }: Pick<FitSpecification, 'loss' | 'penalties'>,
  frame: Frame,
  { rung }: Pick<RungChoice, 'rung'>,
  nullStart: Float64Array,
): WarmStart {
  const unused = (why: string): WarmStart => ({
    point: null,
    note: `the coefficients of run ${run} are not started from: ${why}`,
  });
  if (rung === 'pooled') return unused('triangular factors give the fit in one round from anywhere');
  if (penalties.some(({ path }) => path !== null))
    return unused('a path of λ begins with all slopes at 0, whose gradient sets its first λ');
  const point = onSolverColumns(coefficients, frame, nullStart);
  const first = frame.intercept ? 1 : 0;
  const spread = Math.hypot(...point.subarray(first), first === 0 ? 0 : point[0] - nullStart[0]);
  if (LINKS[loss.kind] !== LINKS.squared && spread > SPREAD_MOST)
    return unused(
      `on these rows they give ${LINKS[loss.kind]} that are ${spread.toPrecision(2)} apart; was a unit changed?`,
    );
  const names = new Set(coefficients.map(([name]) => name));
  const common = frame.kept.filter(({ name }) => names.has(name)).length;
  const all = frame.kept.length;
  const shared =
    common === all ? `all ${all} are in both` : `${common} of ${all} are in both, the others start at 0`;
  const other = redefined.length === 0 ? '' : `; ${redefined.join(', ')} meant something else there`;
  return {
    point,
    note: `starts from the coefficients of run ${run}: ${shared}${other}`,
  };
}

/**
 * θ_j = b_j · scale_j, new columns at 0. The intercept is the earlier one on the columns as they are centred here,
 * unless a column has gone that it was an intercept beside: then the intercept-only fit's is nearer.
 */
function onSolverColumns(
  coefficients: StartFrom['coefficients'],
  { scaling, kept, intercept }: Frame,
  nullStart: Float64Array,
): Float64Array {
  const first = intercept ? 1 : 0;
  const point = Float64Array.from(nullStart);
  const known = new Map(coefficients);
  let shift = 0;
  for (const [j, { name }] of kept.entries()) {
    const value = known.get(name) ?? 0;
    point[first + j] = value * scaling.scale[j];
    shift += value * scaling.center[j];
    known.delete(name);
  }
  const before = known.get(INTERCEPT_NAME);
  if (intercept && before !== undefined && known.size === 1) point[0] = before + shift;
  return point;
}

/** How the coefficients that both runs have moved. */
export function movedOf(
  { coefficients }: StartFrom,
  fit: FitDocument,
  inference: InferenceDocument | null,
): MovedDocument {
  const errors = new Map(inference?.coefficients.map(({ name, standardError }) => [name, standardError]));
  const after = new Map(Object.entries(fit.coefficients));
  if (fit.intercept !== null) after.set(INTERCEPT_NAME, fit.intercept);
  return Object.fromEntries(
    coefficients.flatMap(([name, before]) => {
      const now = after.get(name);
      if (now === undefined) return [];
      const change = now - before;
      const error = errors.get(name);
      const changeInStandardErrors = error === undefined || !(error > 0) ? null : change / error;
      return [[name, { before, after: now, change, changeInStandardErrors }]];
    }),
  );
}
