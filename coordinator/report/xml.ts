/** Just enough of XML 1.0 to write a document. */

export interface Element {
  readonly name: string;
  readonly attributes: Readonly<Record<string, string | number>>;
  readonly children: readonly (Element | string)[];
}

export const element = (
  name: string,
  attributes: Readonly<Record<string, string | number>> = {},
  ...children: (Element | string)[]
): Element => ({ name, attributes, children });

/** A document with a declaration, an element a line. */
export const xmlDocument = (root: Element): string =>
  `<?xml version="1.0" encoding="UTF-8"?>\n${written(root, 0)}`;

/** Whether XML 1.0 has every character of a text (production [2], Char). */
export const isXmlText = (text: string): boolean =>
  [...text].every((letter) => {
    const code = letter.codePointAt(0) ?? 0;
    return (
      code === 0x9 ||
      code === 0xa ||
      code === 0xd ||
      (code >= 0x20 && code <= 0xd7ff) ||
      (code >= 0xe000 && code <= 0xfffd) ||
      code >= 0x10000
    );
  });

function written({ name, attributes, children }: Element, depth: number): string {
  const pad = '  '.repeat(depth);
  const head = `${pad}<${name}${Object.entries(attributes)
    .map(([key, value]) => ` ${key}="${escaped(String(value))}"`)
    .join('')}`;
  if (children.length === 0) return `${head}/>\n`;
  if (children.every((child) => typeof child === 'string'))
    return `${head}>${children.map(escaped).join('')}</${name}>\n`;
  const inside = children.map((child) =>
    typeof child === 'string' ? `${'  '.repeat(depth + 1)}${escaped(child)}\n` : written(child, depth + 1),
  );
  return `${head}>\n${inside.join('')}${pad}</${name}>\n`;
}

/** White space is written as references, since a reader makes plain spaces of it in attributes (§3.3.3). */
const escaped = (text: string): string =>
  text.replace(/[&<>"\t\n\r]/g, (letter) =>
    letter === '&'
      ? '&amp;'
      : letter === '<'
        ? '&lt;'
        : letter === '>'
          ? '&gt;'
          : letter === '"'
            ? '&quot;'
            : `&#${letter.charCodeAt(0)};`,
  );
