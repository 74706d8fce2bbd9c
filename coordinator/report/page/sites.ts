import { counted, sentence } from '../phrases.js';
import { rowsText } from '../stand-in-text.js';
import { percent, whole } from './figures.js';
import type { ReportInput } from './input.js';
import { coded, html } from './markup.js';
import { list, type Section, table } from './parts.js';

/** Who took part, with what rows. */
export function sitesSection({ result }: ReportInput): Section {
  const { sites, rowsTotal, without } = result;
  const rows = (count: number | null): string => (count === null ? 'not surveyed' : whole(count));
  const total = rowsTotal === null ? '' : `, ${counted(rowsTotal, 'row')} in all`;
  return {
    id: 'sites',
    heading: 'Who took part',
    body: [
      html`<p>${counted(sites.length, 'site')}${total}.</p>`,
      table({
        id: 'sites-table',
        caption: 'Sites and their rows',
        columns: ['Site', { number: 'Rows used' }, { number: 'Share' }, { number: 'Rows left out' }],
        rows: sites.map(({ site, rowsUsed, rowsDropped }) => [
          site,
          rows(rowsUsed),
          rowsUsed === null || rowsTotal === null || rowsTotal === 0 ? '' : percent(rowsUsed / rowsTotal),
          rows(rowsDropped),
        ]),
      }),
      list(
        without.map(
          (left) =>
            `Without ${left.site}, which was given up on: its ${rowsText([left])} are not in the fit.`,
        ),
      ),
    ],
  };
}

/** What the survey of the tables showed before any fit. */
export function findingsSection({ result }: ReportInput): Section {
  return {
    id: 'findings',
    heading: 'What the survey found',
    body:
      result.notes.length === 0
        ? html`<p>Nothing worth a note: every column has spread, and every site could be used as it is.</p>`
        : list(result.notes.map((note) => coded(sentence(note)))),
  };
}
