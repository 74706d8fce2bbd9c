/** Where two texts of `result.json` differ first, as a sentence: the field, or the byte where the values are the same. */
export function firstDifference(stored: string, recomputed: string): string {
  let document: unknown;
  try {
    document = JSON.parse(stored);
  } catch {
    return 'The stored result.json is no JSON.';
  }
  const found = fieldThatDiffers(document, JSON.parse(recomputed), '');
  if (found !== null) {
    const shown = (value: unknown): string => (value === undefined ? 'absent' : short(JSON.stringify(value)));
    return `In result.json, ${found.field} is ${shown(found.a)}; recomputed, it is ${shown(found.b)}.`;
  }
  const [a, b] = [Buffer.from(stored), Buffer.from(recomputed)];
  let at = 0;
  while (at < a.length && a[at] === b[at]) at += 1;
  return `The values in result.json are the same, but it is written otherwise from byte ${at} on.`;
}

interface Found {
  readonly field: string;
  readonly a: unknown;
  readonly b: unknown;
}

function fieldThatDiffers(a: unknown, b: unknown, field: string): Found | null {
  if (!isHolder(a) || !isHolder(b) || Array.isArray(a) !== Array.isArray(b)) {
    return Object.is(a, b) ? null : { field: field === '' ? 'the document' : field, a, b };
  }
  for (const key of new Set([...Object.keys(b), ...Object.keys(a)])) {
    const name = Array.isArray(b) ? `${field}[${key}]` : field === '' ? key : `${field}.${key}`;
    const found = fieldThatDiffers(a[key], b[key], name);
    if (found !== null) return found;
  }
  return null;
}

const isHolder = (value: unknown): value is Record<string, unknown> =>
  typeof value === 'object' && value !== null;

const SHOWN_CHARACTERS_MOST = 80;
const short = (text: string): string =>
  text.length <= SHOWN_CHARACTERS_MOST ? text : `${text.slice(0, SHOWN_CHARACTERS_MOST)}…`;
