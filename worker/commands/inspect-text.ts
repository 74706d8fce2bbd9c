import { describeFailure } from '../../protocol/failure.js';
import type { Inspection } from './inspection.js';
import { counted, grouped, WIDTH_DEFAULT, wrapped } from './terminal.js';

/** An inspection as a page of at most `width` columns. */
export function inspectionLines(inspection: Inspection, width = WIDTH_DEFAULT): string[] {
  return [
    ...heading(inspection, width),
    '',
    ...reads(inspection, width),
    ...design(inspection, width),
    ...departures(inspection, width),
    ...verdict(inspection, width),
  ];
}

function heading({ title, digest, site, shard, loss }: Inspection, width: number): string[] {
  const share = shard.of === 1 ? '' : `, shard ${shard.index} of ${shard.of}`;
  return [...wrapped(title, width, 0), `Loss ${loss}, at site ${site}${share}.`, `Digest ${digest}`];
}

function reads({ reads: columns, rows, response }: Inspection, width: number): string[] {
  const lines = table(
    columns.map(({ column, role, type, allowed }) => [
      column,
      role,
      allowed ? type : `${type}  (policy: no)`,
    ]),
    width,
  );
  const used =
    rows === null
      ? []
      : [`Rows used: ${grouped(rows.used)}. Left out for a missing value: ${grouped(rows.dropped)}.`];
  const range =
    response === null
      ? []
      : [`Response from ${short(response.least)} to ${short(response.most)}, mean ${short(response.mean)}.`];
  return ['Would be read', ...lines, ...used.map(indented), ...range.map(indented)];
}

function design({ design: columns }: Inspection, width: number): string[] {
  if (columns === null) return [];
  if (columns.length === 0) return ['', 'No design columns: the intercept alone.'];
  const nameWidth = Math.min(width - 30, Math.max(...columns.map(({ name }) => name.length), 12));
  const row = (name: string, mean: string, sd: string): string =>
    `  ${name.padEnd(nameWidth)}${mean.padStart(13)}${sd.padStart(13)}`;
  return [
    '',
    row('Design column', 'mean', 'sd')
      .slice(2)
      .replace(/^(Design column\s*)/, (head) => head.padEnd(head.length + 2)),
    ...columns.map(({ name, mean, sd }) => row(name, short(mean), sd === 0 ? 'no spread' : short(sd))),
  ];
}

function departures(inspection: Inspection, width: number): string[] {
  const { departures: list, limits, fits } = inspection;
  if (list.length === 0) return [];
  const rows = list.map(({ rung, what, numbers, times, kept }) => [
    rung,
    what,
    grouped(numbers),
    kept === null ? times : `never: ${kept}`,
  ]);
  const limit = (most: number | null, unit: string): string =>
    `${most === null ? 'any number of' : grouped(most)} ${unit}`;
  const bounds = `In one run the policy lets leave at most ${limit(limits.numbersMost, 'numbers')} in ${limit(
    limits.roundsMost,
    'answers',
  )}; it holds ${counted(fits, 'fit')}.`;
  return [
    '',
    'Could leave, in numbers of 8 bytes; the run takes the highest rung all allow',
    ...table(rows, width, 2),
    ...wrapped(bounds, width - 2, 0).map(indented),
  ];
}

function verdict({ refusals, notes, digest }: Inspection, width: number): string[] {
  const remarks = notes.length === 0 ? [] : ['', 'To note', ...notes.flatMap((note) => bullet(note, width))];
  if (refusals.length === 0)
    return [...remarks, '', `This site would take part in ${digest.slice(0, 12)}… as the files stand now.`];
  return [
    ...remarks,
    '',
    'This site would refuse',
    ...refusals.flatMap((failure) => bullet(describeFailure(failure), width)),
  ];
}

const indented = (line: string): string => `  ${line}`;

const bullet = (text: string, width: number): string[] => wrapped(`- ${text}`, width - 2, 2).map(indented);

/** Columns as wide as their widest cell, the last one wrapped; the column `right` is set to the right. */
function table(rows: readonly (readonly string[])[], width: number, right = -1): string[] {
  const count = rows[0]?.length ?? 0;
  const widths = Array.from({ length: count }, (_, at) => Math.max(...rows.map((row) => row[at].length)));
  const before = widths.slice(0, -1).reduce((sum, cell) => sum + cell + 2, 2);
  return rows.flatMap((row) => {
    const head = row
      .slice(0, -1)
      .map((cell, at) => (at === right ? cell.padStart(widths[at]) : cell.padEnd(widths[at])))
      .join('  ');
    const [first, ...more] = wrapped(row[count - 1], Math.max(16, width - before), 0);
    return [`  ${head}  ${first}`, ...more.map((line) => ' '.repeat(before) + line)];
  });
}

/** Five significant digits. */
function short(value: number): string {
  const size = Math.abs(value);
  if (value === 0 || (size >= 1e-4 && size < 1e7)) return String(Number(value.toPrecision(5)));
  return value.toExponential(3);
}
