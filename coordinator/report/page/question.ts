import { designColumns } from '../../../protocol/specification/design-columns.js';
import { chooseText, interceptText, reportText } from '../analysis-text.js';
import { counted } from '../phrases.js';
import {
  barrierText,
  columnText,
  modelText,
  penaltyText,
  roundsText,
  sitesText,
} from '../specification-text.js';
import type { ReportInput } from './input.js';
import { html } from './markup.js';
import { list, paragraphs, type Section } from './parts.js';

/** Design columns described one by one. */
const COLUMNS_MOST = 60;

/** What was asked, as the specification says it. */
export function questionSection({ specification }: ReportInput): Section {
  const columns = designColumns(specification);
  const shown = columns.slice(0, COLUMNS_MOST).map((column) => columnText(specification, column));
  const more = columns.length - shown.length;
  const { penalties, choose, report, terms, intercept } = specification;
  return {
    id: 'question',
    heading: 'The question',
    body: [
      html`<p>${modelText(specification)}</p>`,
      html`<p>${sitesText(specification)}</p>`,
      html`<p>${counted(columns.length, 'coefficient')} from ${counted(terms.length, 'term')}${interceptText(intercept)}:</p>`,
      list(more > 0 ? [...shown, `and ${more} more`] : shown),
      paragraphs([
        ...(penalties.length === 0 ? ['No penalty.'] : penalties.map(penaltyText)),
        ...(choose === null ? [] : [chooseText(choose)]),
        ...reportText(report),
        roundsText(specification),
        barrierText(specification),
      ]),
    ],
  };
}
