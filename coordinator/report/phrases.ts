/** Numbers, durations, lists and paragraphs as the terminal shows them. Widths are in columns. */

/** `12,345`. */
export const grouped = (count: number): string => count.toLocaleString('en-US');

/** `1 row`, `12,345 rows`. */
export const counted = (count: number, one: string, many = `${one}s`): string =>
  `${grouped(count)} ${count === 1 ? one : many}`;

/** Two significant digits: `0.012`, `2.4e-4`, `0`. For distances, where only the size matters. */
export function roughly(value: number): string {
  if (value === 0) return '0';
  const size = Math.abs(value);
  if (size >= 1e-3 && size < 1e4) return String(Number(value.toPrecision(2)));
  return value.toExponential(1).replace('.0e', 'e').replace('e+', 'e');
}

/** `0.12 s`, `4.2 s`, `38 s`, `12 min`, `3.5 h`. */
export function duration(ms: number): string {
  const seconds = ms / 1000;
  if (seconds < 0.995) return `${seconds.toFixed(2)} s`;
  if (seconds < 9.95) return `${seconds.toFixed(1)} s`;
  if (seconds < 119.5) return `${Math.round(seconds)} s`;
  if (seconds < 119.5 * 60) return `${Math.round(seconds / 60)} min`;
  return `${Number((seconds / 3600).toFixed(1))} h`;
}

/** `a`, `a and b`, `a, b and c`; past `most` names, `a, b and 7 more`. */
export function listed(names: readonly string[], most = Number.POSITIVE_INFINITY): string {
  if (names.length <= 1) return names.join('');
  if (names.length > most) {
    const shown = names.slice(0, Math.max(1, most - 1));
    return `${shown.join(', ')} and ${names.length - shown.length} more`;
  }
  return `${names.slice(0, -1).join(', ')} and ${names[names.length - 1]}`;
}

/** The text in at most `most` columns: its head and its tail, as site names often differ in the last letters. */
export function shortened(text: string, most: number): string {
  const letters = [...text];
  if (letters.length <= most) return text;
  if (most <= 4) return letters.slice(0, Math.max(1, most)).join('');
  const tail = Math.floor((most - 1) / 3);
  const head = most - 1 - tail;
  return `${letters.slice(0, head).join('')}…${letters.slice(letters.length - tail).join('')}`;
}

/**
 * A paragraph in lines of at most `width` columns, the later lines indented by `indent`, the first by `indentFirst`. A
 * single word longer than the width (a path) stays whole on a line of its own: broken in two it could not be copied.
 */
export function wrapped(text: string, width: number, indent = 0, indentFirst = 0): string[] {
  const lines: string[] = [];
  let line = ' '.repeat(indentFirst);
  let empty = true;
  for (const word of text.split(' ').filter((part) => part !== '')) {
    if (empty) line += word;
    else if ([...line].length + 1 + [...word].length <= width) line = `${line} ${word}`;
    else {
      lines.push(line);
      line = `${' '.repeat(indent)}${word}`;
    }
    empty = false;
  }
  return empty ? lines : [...lines, line];
}

/** A reason as a sentence: with its full stop, and otherwise as it is, since it may begin with a name. */
export function sentence(text: string): string {
  const trimmed = text.trim();
  return trimmed === '' || /[.!?]$/.test(trimmed) ? trimmed : `${trimmed}.`;
}
