/** HTML by template: whatever is put in is escaped unless it is markup already. */

/** Text that is HTML. */
export class Markup {
  constructor(readonly text: string) {}
}

export type Content = string | number | Markup | null | readonly Content[];

const REPLACED: Readonly<Record<string, string>> = {
  '&': '&amp;',
  '<': '&lt;',
  '>': '&gt;',
  '"': '&quot;',
  "'": '&#39;',
};

/** What XML 1.0 and HTML allow in no document, escaped or not: control characters but tab and line ends. */
const CONTROL = /[^\P{Cc}\t\n\r]/gu;

/** Fit for element content and for attribute values in either kind of quotes. */
export const escaped = (text: string): string =>
  text.replace(CONTROL, '\u{FFFD}').replace(/[&<>"']/g, (character) => REPLACED[character] ?? character);

/** `null` puts in nothing; a list puts in each of its entries. */
export function html(strings: TemplateStringsArray, ...values: readonly Content[]): Markup {
  return new Markup(strings.map((text, at) => text + textOf(values[at] ?? null)).join(''));
}

function textOf(value: Content): string {
  if (value === null) return '';
  if (value instanceof Markup) return value.text;
  if (typeof value === 'string') return escaped(value);
  if (typeof value === 'number') return Number.isFinite(value) ? String(value) : 'not available';
  return value.map(textOf).join('');
}

/** Words of ours in which backquotes mark what is typed, as code. */
export const coded = (text: string): Content =>
  text.split('`').map((part, at) => (at % 2 === 1 ? html`<code>${part}</code>` : part));
