import type { FitDocument, ResultDocument } from '../run/result.js';
import { movedText } from './moved-text.js';
import { certificateText, OUTCOME_HEAD } from './outcome-text.js';
import { counted, grouped, listed, roughly, sentence, shortened, wrapped } from './phrases.js';
import { rowsText } from './stand-in-text.js';
import { coefficientsOf, lambdaText } from './tables.js';

/** Fits shown in full; the rest are in `coefficients.csv`. */
const FITS_MOST = 5;
/** Coefficients shown of one fit. */
const COEFFICIENTS_MOST = 200;
const SIGNIFICANT_DIGITS = 6;

export const CAUTIONS = [
  'These coefficients describe associations in the rows that took part; they do not show what causes what.',
  'They are no ground by themselves for decisions about pipes, patients or people: those belong to licensed practice, local codes and the data owners’ agreements.',
] as const;

/** A result to read on a terminal of `width` columns. `result.json` and `coefficients.csv` hold the full digits. */
export function resultText(result: ResultDocument, width: number): string[] {
  const room = Math.max(40, width);
  return [
    ...wrapped(`“${result.title}”`, room),
    ...wrapped(
      `${OUTCOME_HEAD[result.outcome]}${result.reason === null ? '' : ` ${sentence(result.reason)}`}`,
      room,
    ),
    ...fitsText(result, room),
    ...movedText(result, room),
    '',
    ...sitesText(result, room),
    '',
    ...wrapped(wayText(result), room),
    ...result.notes.flatMap((note) => wrapped(`Note: ${sentence(note)}`, room, 2)),
    ...wrapped(`Specification ${result.specification.slice(0, 16)}, ${result.software}.`, room),
    '',
    ...CAUTIONS.flatMap((caution) => wrapped(caution, room)),
  ];
}

function wayText(result: ResultDocument): string {
  const rounds = `It took ${counted(result.rounds, 'round')} after the survey`;
  if (result.rung === null) return `${rounds}.`;
  const reason = result.rungReason === null ? '' : `: ${result.rungReason.replace(/\.$/, '')}`;
  return `${rounds}, on the rung ${result.rung}${reason}.`;
}

function fitsText(result: ResultDocument, width: number): string[] {
  const shown = result.fits.slice(0, FITS_MOST);
  const lines = shown.flatMap((fit, at) => ['', ...fitText(fit, at, result, width)]);
  if (result.fits.length > shown.length) {
    const more = `${counted(result.fits.length - shown.length, 'more fit')} in coefficients.csv and result.json.`;
    return [...lines, '', ...wrapped(more, width)];
  }
  return lines;
}

function fitText(fit: FitDocument, at: number, result: ResultDocument, width: number): string[] {
  const name = result.fits.length === 1 ? 'The fit' : `Fit ${at + 1} of ${result.fits.length}`;
  const lambda = fit.lambda === null ? '' : `, λ = ${lambdaText(fit.lambda)}`;
  const outcome = fit.outcome === result.outcome ? '' : ` ${OUTCOME_HEAD[fit.outcome]}`;
  const reason = fit.reason === null || fit.reason === result.reason ? '' : ` ${sentence(fit.reason)}`;
  const coefficients = coefficientsOf(fit);
  return [
    ...wrapped(`${name}${lambda}.${outcome}${reason}`, width),
    ...aligned(coefficients.slice(0, COEFFICIENTS_MOST), width),
    ...(coefficients.length > COEFFICIENTS_MOST
      ? [`  and ${grouped(coefficients.length - COEFFICIENTS_MOST)} more in coefficients.csv`]
      : []),
    ...(fit.dropped.length === 0
      ? []
      : wrapped(
          `No coefficient, as the column has no spread at any site: ${listed(fit.dropped)}.`,
          width,
          2,
        )),
    ...wrapped(measuresText(fit), width),
    ...wrapped(certificateText(fit.certificate?.kind ?? null, fit.certificate?.relativeGap ?? null), width),
    ...(fit.certificate === null
      ? []
      : wrapped(
          `The tolerance is ${result.tolerance}; the largest entry of the gradient left over is ${roughly(fit.certificate.kkt)}.`,
          width,
        )),
  ];
}

const measuresText = (fit: FitDocument): string =>
  `Objective ${figure(fit.objective)} = mean loss ${figure(fit.loss)} + penalty ${figure(fit.penalty)}; deviance ${figure(fit.deviance)}.`;

/** Names to the left, numbers with their decimal points under each other. */
function aligned(coefficients: readonly [string, number][], width: number): string[] {
  const figures = coefficients.map(([, value]) => splitFigure(value));
  const whole = Math.max(0, ...figures.map(([head]) => head.length));
  const rest = Math.max(0, ...figures.map(([, tail]) => tail.length));
  const most = Math.max(12, width - 4 - whole - rest);
  const names = coefficients.map(([name]) => shortened(name, most));
  const nameWidth = Math.max(0, ...names.map((name) => [...name].length));
  return names.map((name, at) => {
    const [head, tail] = figures[at] as [string, string];
    return `  ${name}${' '.repeat(nameWidth - [...name].length)}  ${head.padStart(whole)}${tail}`;
  });
}

function splitFigure(value: number): [string, string] {
  const text = figure(value);
  const at = text.search(/[.e]/);
  return at < 0 ? [text, ''] : [text.slice(0, at), text.slice(at)];
}

/** Six significant digits, with an exponent only where the number is very small or very large. An exact 0 stays `0`. */
function figure(value: number): string {
  if (value === 0) return '0';
  const size = Math.abs(value);
  const text = value.toPrecision(SIGNIFICANT_DIGITS);
  return size >= 1e-5 && size < 1e9 ? String(Number(text)) : text.replace('e+', 'e');
}

const withoutText = (left: ResultDocument['without'][number]): string =>
  `Without ${left.site}, which was given up on: its ${rowsText([left])} are not in the fit.`;

function sitesText(result: ResultDocument, width: number): string[] {
  const total = result.rowsTotal === null ? '' : `, ${counted(result.rowsTotal, 'row')} in all`;
  const lines = result.sites.map((site) => {
    const sent = result.numbersSent.filter((entry) => entry.site === site.site)[0];
    const rows = site.rowsUsed === null ? 'not surveyed' : counted(site.rowsUsed, 'row');
    const dropped =
      site.rowsDropped === null || site.rowsDropped === 0 ? '' : ` (${grouped(site.rowsDropped)} left out)`;
    const numbers =
      sent === undefined ? '' : `; sent ${counted(sent.up, 'number')}, received ${grouped(sent.down)}`;
    return `${site.site}: ${rows}${dropped}${numbers}; kernel ${site.kernel}.`;
  });
  return [
    `${counted(result.sites.length, 'site')}${total}.`,
    ...lines.flatMap((line) => wrapped(line, width, 4, 2)),
    ...result.without.flatMap((left) => wrapped(withoutText(left), width, 4, 2)),
  ];
}
