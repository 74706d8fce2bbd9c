import type { FitSpecification } from '../../protocol/specification/types.js';
import type { Member } from '../run/run.js';

/** The members a run starts with, in roster order; or whom it still waits for. */
export type RosterCheck =
  | { readonly ready: true; readonly roster: readonly Member[] }
  | { readonly ready: false; readonly missing: readonly string[] };

/**
 * Named sites: ready when every shard of each is connected. `{least: n}`: ready when n sites are there in full and the
 * barrier's deadline has passed since submission, with all that are there then. Order: the specification's, else by
 * name; shards by index. Of a site whose workers split its rows in more than one way, the coarsest complete split
 * takes part (each split covers all its rows).
 */
export function checkRoster(
  specification: Pick<FitSpecification, 'sites' | 'barrier'>,
  connected: readonly Member[],
  waitedMs: number,
): RosterCheck {
  const at = (site: string): Member[] => connected.filter((member) => member.site === site);
  const { sites } = specification;
  if (isNamed(sites)) {
    const found = sites.map((site) => siteMembers(site, at(site)));
    const missing = found.flatMap((site) => (site.ready ? [] : site.missing));
    if (missing.length > 0) return { ready: false, missing };
    return { ready: true, roster: found.flatMap((site) => (site.ready ? site.roster : [])) };
  }
  const names = [...new Set(connected.map(({ site }) => site))].sort(byText);
  const complete = names.flatMap((site) => {
    const found = siteMembers(site, at(site));
    return found.ready ? [found.roster] : [];
  });
  if (complete.length < sites.least) {
    return { ready: false, missing: [`${sites.least - complete.length} more of any site`] };
  }
  return waitedMs < specification.barrier.deadlineMs
    ? { ready: false, missing: [] }
    : { ready: true, roster: complete.flat() };
}

const isNamed = (sites: FitSpecification['sites']): sites is readonly string[] => Array.isArray(sites);

function siteMembers(site: string, connected: readonly Member[]): RosterCheck {
  if (connected.length === 0) return { ready: false, missing: [site] };
  const splits = [...new Set(connected.map(({ shard }) => shard.of))].sort((a, b) => a - b);
  for (const of of splits) {
    const roster = connected
      .filter(({ shard }) => shard.of === of)
      .sort((a, b) => a.shard.index - b.shard.index);
    if (roster.length === of) return { ready: true, roster };
  }
  const of = splits[0] ?? 1;
  const there = new Set(connected.filter(({ shard }) => shard.of === of).map(({ shard }) => shard.index));
  const missing = Array.from({ length: of }, (_, i) => i + 1)
    .filter((index) => !there.has(index))
    .map((index) => `${site}#${index}`);
  return { ready: false, missing };
}

const byText = (a: string, b: string): number => (a < b ? -1 : a > b ? 1 : 0);
