import { type Content, html, type Markup } from './markup.js';

/** The bricks of the page: sections, tables, paragraphs, lists. */

export interface Section {
  readonly id: string;
  readonly heading: string;
  readonly body: Content;
}

export const sectionMarkup = ({ id, heading, body }: Section): Markup =>
  html`<section id="${id}" aria-labelledby="${id}-heading"><h2 id="${id}-heading">${heading}</h2>${body}</section>\n`;

export const paragraphs = (sentences: readonly Content[]): Content =>
  sentences.map((sentence) => html`<p>${sentence}</p>`);

export const list = (items: readonly Content[]): Content =>
  items.length === 0 ? null : html`<ul>${items.map((item) => html`<li>${item}</li>`)}</ul>`;

export const subheading = (text: string): Markup => html`<h3>${text}</h3>`;

export interface Table {
  /** Unique on the page. */
  readonly id: string;
  readonly caption: string;
  /** Numbers stand to the right. The first column heads its rows. */
  readonly columns: readonly (string | { readonly number: string })[];
  readonly rows: readonly (readonly Content[])[];
  /** The table says the same as a picture beside it: folded on a screen, open in print. */
  readonly folded?: boolean;
  /** Cells hold more than one number each and may break on paper. */
  readonly dense?: boolean;
}

/** Rows past which a table is laid out when it comes into view: 200 of them cost most of the time to open a page. */
const LONG = 100;

export function table({ id, caption, columns, rows, folded = false, dense = false }: Table): Markup {
  const kinds = columns.map((column) => (typeof column === 'string' ? null : ' class="number"'));
  const raw = (kind: string | null | undefined): Content => (kind ? NUMBER : null);
  const heads = columns.map(
    (column, at) =>
      html`<th scope="col"${raw(kinds[at])}>${typeof column === 'string' ? column : column.number}</th>`,
  );
  const lines = rows.map(
    ([head, ...cells]) =>
      html`<tr><th scope="row">${head ?? null}</th>${cells.map((cell, at) => html`<td${raw(kinds[at + 1])}>${cell}</td>`)}</tr>\n`,
  );
  const body = html`<div class="${rows.length > LONG ? 'wide long' : 'wide'}" role="region" aria-labelledby="${id}-caption" tabindex="0"><table id="${id}"${dense ? DENSE : null}><caption id="${id}-caption">${caption}</caption><thead><tr>${heads}</tr></thead><tbody>${lines}</tbody></table></div>\n`;
  return folded
    ? html`<details><summary>The numbers: ${lowerFirst(caption)}</summary>${body}</details>\n`
    : body;
}

const DENSE = html` class="dense"`;
const NUMBER = html` class="number"`;

const lowerFirst = (text: string): string =>
  /^[A-Z][a-z]/.test(text) ? text.charAt(0).toLowerCase() + text.slice(1) : text;

/** Terms and what is said of them. */
export const definitions = (entries: readonly (readonly [Content, Content])[]): Markup =>
  html`<dl>${entries.map(([term, said]) => html`<div><dt>${term}</dt><dd>${said}</dd></div>`)}</dl>\n`;

/** Code to copy, a line each. */
export const commands = (label: string, lines: readonly string[]): Markup =>
  html`<pre aria-label="${label}" role="region" tabindex="0"><code>${lines.join('\n')}</code></pre>\n`;
