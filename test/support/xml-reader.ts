/** A strict reader of the part of XML 1.0 that an element tree needs: no DTD, no CDATA, no processing instruction. */
export interface XmlElement {
  readonly name: string;
  readonly attributes: ReadonlyMap<string, string>;
  readonly children: readonly XmlElement[];
  readonly text: string;
}

const NAME = '[A-Za-z_][A-Za-z0-9_.-]*';
const REFERENCES: Readonly<Record<string, string>> = { amp: '&', lt: '<', gt: '>', quot: '"', apos: "'" };

/** Throws where the document is not well-formed. */
export function readXml(document: string): XmlElement {
  const declaration = '<?xml version="1.0" encoding="UTF-8"?>';
  if (!document.startsWith(declaration)) throw new Error('no XML declaration');
  const reader = new Reader(document, declaration.length);
  const root = reader.element();
  reader.end();
  return root;
}

class Reader {
  constructor(
    private readonly text: string,
    private at: number,
  ) {}

  element(): XmlElement {
    this.space();
    const name = this.taken(new RegExp(`<(${NAME})`, 'y'))[1] as string;
    const attributes = new Map<string, string>();
    for (;;) {
      const found = this.maybe(new RegExp(`\\s+(${NAME})="([^"<]*)"`, 'y'));
      if (found === null) break;
      const [, key = '', value = ''] = found;
      if (attributes.has(key)) throw new Error(`attribute ${key} twice`);
      // attribute-value normalisation, section 3.3.3
      attributes.set(key, resolved(value.replace(/[\t\n\r]/g, ' ')));
    }
    if (this.maybe(/\s*\/>/y) !== null) return { name, attributes, children: [], text: '' };
    this.taken(/\s*>/y);
    const children: XmlElement[] = [];
    let text = '';
    for (;;) {
      text += resolved(this.taken(/[^<]*/y)[0]);
      if (this.text.startsWith('</', this.at)) break;
      children.push(this.element());
    }
    this.taken(new RegExp(`</${name}\\s*>`, 'y'));
    return { name, attributes, children, text: text.trim() };
  }

  end(): void {
    this.space();
    if (this.at !== this.text.length) throw new Error('something follows the root element');
  }

  private space(): void {
    this.taken(/\s*/y);
  }

  private taken(pattern: RegExp): RegExpExecArray {
    const found = this.maybe(pattern);
    if (found === null) throw new Error(`${pattern} expected at ${this.text.slice(this.at, this.at + 40)}`);
    return found;
  }

  private maybe(pattern: RegExp): RegExpExecArray | null {
    pattern.lastIndex = this.at;
    const found = pattern.exec(this.text);
    if (found !== null) this.at = pattern.lastIndex;
    return found;
  }
}

function resolved(text: string): string {
  return text.replace(/&([^;]*);?/g, (whole, name: string) => {
    const code = /^#(\d+)$/.exec(name)?.[1];
    const letter = code === undefined ? REFERENCES[name] : String.fromCodePoint(Number(code));
    if (letter === undefined || !whole.endsWith(';')) throw new Error(`bad reference ${whole}`);
    return letter;
  });
}
