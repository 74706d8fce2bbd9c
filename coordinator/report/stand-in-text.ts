import type { LogEvent, RoundEvent } from '../run/log-event.js';
import { counted, duration, listed, shortened, wrapped } from './phrases.js';

/** Who is late and what stands in: said once for every answer that stands in, however many rounds it does. */
export class StandInTeller {
  private said: ReadonlyMap<string, number | null> = new Map();

  constructor(private readonly width: number) {}

  linesFor({ standIns, rung }: RoundEvent): string[] {
    const before = this.said;
    this.said = new Map(standIns.map(({ site, round }) => [site, round]));
    const news = standIns.filter(({ site, round }) => before.get(site) !== round);
    return news.flatMap((one) => wrapped(standInSentence(one, rung, this.width), this.width, 2));
  }
}

function standInSentence(
  { site, round }: RoundEvent['standIns'][number],
  rung: RoundEvent['rung'],
  width: number,
): string {
  const name = shortened(site, Math.floor(width / 2) - 4);
  if (round === null) return `${name} has not been heard: the others stand in for it.`;
  return `${name} is late: its ${rung === 'curvature' ? 'quadratic' : 'answer'} of round ${round} stands in.`;
}

/** The run begins again without some of its sites. */
export function withoutLines(
  { sites, waitedMs }: Extract<LogEvent, { event: 'without' }>,
  width: number,
): string[] {
  const names = listed(
    sites.map(({ site }) => shortened(site, Math.floor(width / 2) - 4)),
    8,
  );
  const [it, has, its] = sites.length === 1 ? ['it', 'has', 'its'] : ['they', 'have', 'their'];
  const text = `Going on without ${names}: ${it} ${has} not answered for ${duration(waitedMs)}; the fit begins again from the survey, ${its} ${rowsText(sites)} are not in it.`;
  return wrapped(text, width, 2);
}

/** `1,204 rows`; `rows` where a site was not surveyed. */
export function rowsText(sites: readonly { readonly rowsUsed: number | null }[]): string {
  const rows = sites.reduce<number | null>(
    (sum, { rowsUsed }) => (sum === null || rowsUsed === null ? null : sum + rowsUsed),
    0,
  );
  return rows === null ? 'rows' : counted(rows, 'row');
}
