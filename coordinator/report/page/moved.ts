import { counted, listed } from '../phrases.js';
import { figure } from './figures.js';
import { fitStoodBy, type ReportInput } from './input.js';
import { type Content, html } from './markup.js';
import { list, type Section, table } from './parts.js';

/** Coefficients in the table, those that moved most first. */
const MOVED_MOST = 60;

/** What moved since the run that this one was started from; null where it was not. */
export function movedSection({ result }: ReportInput): Section | null {
  const { startedFrom, moved } = result;
  if (startedFrom === null) return null;
  const start = startedFrom.used
    ? `The rounds began at the coefficients of run ${startedFrom.run}; where they begin does not change where they end, only how soon.`
    : `The coefficients of run ${startedFrom.run} were given to begin at, and the method had no use for them.`;
  const body: Content[] = [html`<p>${start}</p>`];
  if (moved !== null) {
    const size = ([, { before, change, changeInStandardErrors }]: (typeof rows)[number]): number =>
      Math.abs(changeInStandardErrors ?? change / Math.max(Math.abs(before), Number.MIN_VALUE));
    const rows = Object.entries(moved);
    const shown = [...rows].sort((a, b) => size(b) - size(a)).slice(0, MOVED_MOST);
    const now = Object.keys(fitStoodBy(result)?.coefficients ?? {});
    const added = now.filter((name) => !Object.hasOwn(startedFrom.coefficients, name));
    const gone = Object.keys(startedFrom.coefficients).filter((name) => !Object.hasOwn(moved, name));
    const more =
      rows.length > shown.length ? `: ${shown.length} of ${counted(rows.length, 'coefficient')}` : '';
    body.push(
      table({
        id: 'moved-table',
        caption: `Coefficients then and now, what moved most first${more}`,
        columns: [
          'Coefficient',
          { number: 'Before' },
          { number: 'Now' },
          { number: 'Change' },
          { number: 'In standard errors' },
        ],
        rows: shown.map(([name, { before, after, change, changeInStandardErrors }]) => [
          name,
          figure(before, 4),
          figure(after, 4),
          `${change > 0 ? '+' : ''}${figure(change, 2)}`,
          changeInStandardErrors === null ? '' : figure(changeInStandardErrors, 2),
        ]),
      }),
      list([
        ...(added.length === 0 ? [] : [`New here: ${listed(added, 8)}.`]),
        ...(gone.length === 0 ? [] : [`No longer here: ${listed(gone, 8)}.`]),
      ]),
    );
  }
  return { id: 'moved', heading: 'What moved since the earlier run', body };
}
