import { segmentsOf, UTILITIES } from '../../examples/pipe-breaks/segments.js';
import type { Stage } from './stage.js';

/** The pipe-breaks scenario with few rows, as CSV files, and a specification that takes many rounds. */
export const SMALL_SITES = ['harrowmere', 'lindell-bay', 'castlefen'] as const;

/** Rows of one site, their header first. */
export function smallTable(site: string, rows: number): string {
  const at = UTILITIES.findIndex(({ name }) => name === site);
  // a changed utility is no longer one of the list, whose place keeps the sites' seeds apart
  const segments = segmentsOf({ ...UTILITIES[at], segments: rows }, 17 + at);
  const lines = [Object.keys(segments[0]), ...segments.map((segment) => Object.values(segment))];
  return lines.map((line) => `${line.join(',')}\n`).join('');
}

export const siteFileOf = (
  stage: Stage,
  site: string,
  table: string,
  policy: readonly string[] = [],
): string =>
  [
    'commonfit-site: 1',
    `site: ${site}`,
    `coordinator: {url: ${stage.address.replace(/^http/, 'ws')}, token-file: ./${site}.token}`,
    `table: ${table}`,
    'policy:',
    ...['columns: any', 'rows-least: 1', 'approvals: any', ...policy].map((line) => `  ${line}`),
    '',
  ].join('\n');

/** Proximal rounds only, to a tight tolerance: some dozens of them. */
export const longFit = (sites: readonly string[]): string => `commonfit: 1
title: Breaks by age and pressure
sites: [${sites.join(', ')}]
response: {column: breaks}
loss: poisson
exposure: {column: km_years}
terms:
  - {column: age_years, unit: year}
  - {column: diameter_mm, unit: mm, transform: log}
  - {column: material, levels: [pvc, ductile-iron, cast-iron, steel], baseline: pvc}
  - {column: pressure_bar, unit: bar}
  - {product: [age_years, material]}
penalty:
  - {kind: elastic-net, lambda: 0.002, l1: 0.5}
rounds: {tolerance: 1e-10, most: 1000, rung: proximal}
barrier: {deadline: 1s, patience: 1m}
`;

/** A coordinator, and the small sites ready to be joined: tables, site files without curvature, tokens. */
export async function setSmallScenario(
  stage: Stage,
  rows: number,
  sites: readonly string[] = SMALL_SITES,
  state = stage.state,
): Promise<void> {
  stage.state = state;
  await stage.serve();
  for (const [index, site] of sites.entries()) {
    await stage.write(`${site}.csv`, smallTable(site, Math.round(rows / (index + 1))));
    await stage.write(
      `${site}.site.yaml`,
      siteFileOf(stage, site, `{csv: ./${site}.csv}`, ['curvature-most: 0']),
    );
  }
  await Promise.all(sites.map((site) => stage.admit(site)));
  await stage.write('long.fit.yaml', longFit(sites));
}
