import { MATERIALS, SOILS, UTILITIES } from './segments.js';

/** Columns that the custodians let the fit read. */
const COLUMNS = [
  'breaks',
  'km_years',
  'age_years',
  'diameter_mm',
  'material',
  'pressure_bar',
  'soil',
  'depth_m',
];

export function fitSpecificationText(): string {
  return `commonfit: 1
title: Pipe breaks per kilometre-year
sites: [${UTILITIES.map((utility) => utility.name).join(', ')}]
missing: refuse
response: {column: breaks}
loss: poisson
exposure: {column: km_years}
intercept: shared
terms:
  - {column: age_years, unit: year}
  - {column: diameter_mm, unit: mm, transform: log}
  - {column: material, levels: [${MATERIALS.join(', ')}], baseline: pvc}
  - {column: pressure_bar, unit: bar}
  - {column: pressure_bar, unit: bar, transform: {power: 2}}
  - {column: soil, levels: [${SOILS.join(', ')}], baseline: sand}
  - {column: depth_m, unit: m}
  - {product: [age_years, material]}
report: [covariance, sandwich, term-tests, margins, compare-sites, fit-quality]
rounds: {tolerance: 1e-8, most: 300}
barrier: {deadline: 30s, patience: 5m}
`;
}

export interface SiteFileOptions {
  readonly site: string;
  readonly table: { readonly kind: 'csv' | 'parquet' | 'jsonl'; readonly file: string };
  readonly url: string;
  readonly curvatureMost: number | 'any';
}

export function siteFileText({ site, table, url, curvatureMost }: SiteFileOptions): string {
  return `commonfit-site: 1
site: ${site}
coordinator: {url: '${url.replaceAll("'", "''")}', token-file: ./${site}.token}
table: {${table.kind}: ./${table.file}}
policy:
  columns: [${COLUMNS.join(', ')}]
  rows-least: 50
  leave: [counts, moments, proximal, gradients, curvature, site-estimates, residual-bins]
  curvature-most: ${curvatureMost}
  numbers-most: 1000000
  rounds-most: 2000
  approvals: listed
`;
}
