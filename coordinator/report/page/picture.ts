import { type PlotOptions, plot } from '@observablehq/plot';
import { parseHTML } from 'linkedom';
import { type Content, html, Markup } from './markup.js';

/** Pictures: marks of the plotting library drawn into a document without a browser, as SVG that the page's style colours. */

/** Text in a picture, in its own units. */
const FONT_SIZE = 12;
/** Width of a letter of that size, on the wide side. */
const LETTER_WIDTH = 6.9;

export interface Picture {
  /** Unique on the page. */
  readonly id: string;
  /** What it shows, as a short name. */
  readonly title: string;
  /** What one sees in it, in a sentence or two: read out in place of the picture. */
  readonly description: string;
  /** Under the picture: what the marks are. */
  readonly caption: Content;
  readonly options: PlotOptions;
}

export const pictureMarkup = ({ id, title, description, caption, options }: Picture): Markup =>
  html`<figure><div class="wide" role="region" aria-label="${title}: picture" tabindex="0">${svg({ id, title, description, options })}</div><figcaption>${caption}</figcaption></figure>\n`;

/** The bare drawing, named and described. */
export function svg({ id, title, description, options }: Omit<Picture, 'caption'>): Markup {
  const { document } = parseHTML('<!doctype html><html><body></body></html>');
  const drawing: { readonly outerHTML: string } = plot({ ...options, document, className: 'picture' });
  const named = html`role="img" aria-labelledby="${id}-title" aria-describedby="${id}-description"><title id="${id}-title">${title}</title><desc id="${id}-description">${description}</desc>`;
  const text = drawing.outerHTML
    .replace(/<style>[\s\S]*?<\/style>/g, '')
    .replace(/(?<=^<svg[^>]*) font-size="[^"]*"/, ` font-size="${FONT_SIZE}"`)
    .replace(/(?<=^<svg[^>]*) font-family="[^"]*"/, '')
    .replace(/ aria-label="[^"]*"/g, '')
    .replace(/(?<=^<svg[^>]*)>/, ` ${named.text}`)
    .replace(/ (d|x|y|x1|x2|y1|y2|cx|cy|r|width|height|transform)="([^"]*)"/g, shortNumbers);
  return new Markup(text);
}

/** A hundredth of a unit is finer than a screen or a printer shows. */
const shortNumbers = (_: string, name: string, value: string): string =>
  ` ${name}="${value.replace(/-?\d+\.\d{3,}(e-?\d+)?/g, (number) => String(Number(Number(number).toFixed(2))))}"`;

/** Room for the longest of the labels, in units of the picture. */
export const roomFor = (labels: readonly string[], least = 40): number =>
  Math.max(least, Math.ceil(Math.max(0, ...labels.map((label) => [...label].length)) * LETTER_WIDTH) + 16);
