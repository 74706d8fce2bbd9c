import type { FitDocument } from '../run/result.js';
import type { InferenceDocument } from '../run/result-parts.js';
import { coefficientsOf, testOf } from './tables.js';

/** Digits of a figure in a table to be read; `coefficients.csv` has them all. */
const SIGNIFICANT_DIGITS = 4;
const P_LEAST = 0.001;

type Row = readonly string[];

/**
 * The coefficients of a fit as a Markdown table (the pipe tables of GitHub Flavored Markdown §4.10), with standard errors
 * and intervals where the run measured them.
 */
export function coefficientsMarkdown(
  title: string,
  fit: FitDocument,
  inference: InferenceDocument | null,
): string {
  const { head, rows } = cellsOf(fit, inference);
  const line = (cells: Row): string => `| ${cells.join(' | ')} |`;
  return [
    `**${markdownText(title)}**`,
    '',
    line(head),
    line(head.map((_, at) => (at === 0 ? ':--' : '--:'))),
    ...rows.map(([name, ...figures]) => line([markdownText(name), ...figures.map(markdownText)])),
    '',
    ...[remark(inference, markdownText)].filter((text) => text !== ''),
    '',
  ].join('\n');
}

const markdownText = (text: string): string =>
  text.replace(/[\\`*_{}[\]<>#|~$&]/g, '\\$&').replace(/\s+/g, ' ');

/** The same as a LaTeX `tabular`, which needs no package. */
export function coefficientsLatex(
  title: string,
  fit: FitDocument,
  inference: InferenceDocument | null,
): string {
  const { head, rows } = cellsOf(fit, inference);
  const line = (cells: Row): string => `${cells.join(' & ')} \\\\`;
  return [
    `% ${title.replace(/\s+/g, ' ')}`,
    ...[remark(inference, (text) => text)].filter((text) => text !== '').map((text) => `% ${text}`),
    `\\begin{tabular}{l${'r'.repeat(head.length - 1)}}`,
    '\\hline',
    line(head.map(latexText)),
    '\\hline',
    ...rows.map(([name, ...figures]) => line([latexText(name), ...figures.map(latexFigure)])),
    '\\hline',
    '\\end{tabular}',
    '',
  ].join('\n');
}

function cellsOf(fit: FitDocument, inference: InferenceDocument | null): { head: Row; rows: Row[] } {
  const coefficients = coefficientsOf(fit);
  if (inference === null)
    return {
      head: ['Term', 'Coefficient'],
      rows: coefficients.map(([name, value]) => [name, figure(value)]),
    };
  const level = `${Number((100 * inference.level).toPrecision(4))} %`;
  return {
    head: ['Term', 'Coefficient', 'Standard error', `${level} from`, `${level} to`, 'p'],
    rows: coefficients.map(([name, value]) => {
      const test = testOf(inference, name);
      if (test === null) return [name, figure(value), '', '', '', ''];
      const { standardError, lower, upper, pValue } = test;
      return [name, ...[value, standardError, lower, upper].map(figure), probability(pValue)];
    }),
  };
}

function remark(inference: InferenceDocument | null, quoted: (text: string) => string): string {
  if (inference === null) return '';
  const { used, cautions } = inference;
  return quoted([`Covariance: ${used}.`, ...cautions].join(' '));
}

function figure(value: number): string {
  if (value === 0) return '0';
  const size = Math.abs(value);
  if (size >= 1e-4 && size < 1e7) {
    const digits = SIGNIFICANT_DIGITS - 1 - Math.floor(Math.log10(size));
    return value.toFixed(Math.min(20, Math.max(0, digits)));
  }
  return value.toExponential(SIGNIFICANT_DIGITS - 1).replace('e+', 'e');
}

const probability = (value: number): string => (value < P_LEAST ? `<${P_LEAST}` : value.toFixed(3));

/** Figures are set in mathematics, where a hyphen is a minus sign. */
function latexFigure(text: string): string {
  if (text === '') return '';
  const [mantissa, exponent] = text.split('e');
  return exponent === undefined ? `$${mantissa}$` : `$${mantissa} \\times 10^{${exponent}}$`;
}

const LATEX: Readonly<Record<string, string>> = {
  '\\': '\\textbackslash{}',
  '~': '\\textasciitilde{}',
  '^': '\\textasciicircum{}',
  '<': '\\textless{}',
  '>': '\\textgreater{}',
  '|': '\\textbar{}',
  '"': '\\char34{}',
  // a row that begins with a bracket would be taken for an option of the line break before it
  '[': '{[}',
  ']': '{]}',
};

const latexText = (text: string): string =>
  text.replace(/\s+/g, ' ').replace(/[\\~^<>|"[\]{}$&#%_]/g, (letter) => LATEX[letter] ?? `\\${letter}`);
