import { describe, expect, test } from 'vitest';
import { parseSiteFile } from '../../worker/custody/site-file.js';
import { failuresOf, marks, parsedValue } from '../support/specifications.js';

const SITE = [
  'commonfit-site: 1', // 1
  'site: harrowmere', // 2
  'coordinator:', // 3
  '  url: wss://fit.example.net:7443', // 4
  '  token-file: ./harrowmere.token', // 5
  'table: {csv: ./pipes.csv}', // 6
  'policy:', // 7
  '  columns: [breaks, km_years]', // 8
];
const FILE = '/srv/pipes/harrowmere.site.yaml';
const siteWith = (replaced: Readonly<Record<number, string>>, added: readonly string[] = []): string =>
  [...SITE.map((line, index) => replaced[index + 1] ?? line), ...added].join('\n');
const parse = (text: string) => parsedValue(parseSiteFile(text, FILE));

describe('a site file', () => {
  test('has defaults for all but name, coordinator, table and columns', () => {
    expect(parse(SITE.join('\n'))).toEqual({
      site: 'harrowmere',
      coordinator: {
        url: 'wss://fit.example.net:7443',
        tokenFile: '/srv/pipes/harrowmere.token',
        caFile: null,
        pairFiles: null,
      },
      table: { kind: 'csv', path: '/srv/pipes/pipes.csv' },
      shard: { index: 1, of: 1 },
      policy: {
        columns: ['breaks', 'km_years'],
        rowsLeast: 50,
        leave: ['counts', 'moments', 'proximal', 'gradients', 'curvature'],
        curvatureMost: 3,
        numbersMost: 1_000_000,
        roundsMost: 2000,
        approvals: 'any',
      },
      file: FILE,
    });
  });

  test('says all there is to say', () => {
    const policy = [
      '  columns: any',
      '  rows-least: 1',
      '  leave: [counts, moments, sketches]',
      '  curvature-most: 0',
      '  numbers-most: any',
      '  rounds-most: any',
      '  approvals: listed',
      'shard: {index: 2, of: 3}',
    ];
    const site = parse(
      siteWith({ 5: '  token-file: /etc/site.token\n  ca-file: ../ca.pem', 8: policy.join('\n') }),
    );
    expect(site.coordinator).toMatchObject({ tokenFile: '/etc/site.token', caFile: '/srv/ca.pem' });
    expect(site.shard).toEqual({ index: 2, of: 3 });
    const showing = parse(
      siteWith({ 5: '  token-file: t\n  certificate-file: ./site.pem\n  key-file: /etc/site.key' }),
    );
    expect(showing.coordinator.pairFiles).toEqual({
      certificate: '/srv/pipes/site.pem',
      key: '/etc/site.key',
    });
    expect(site.policy).toEqual({
      columns: 'any',
      rowsLeast: 1,
      leave: ['counts', 'moments', 'sketches'],
      curvatureMost: 0,
      numbersMost: 'any',
      roundsMost: 'any',
      approvals: 'listed',
    });
  });

  test.each([
    ['{parquet: "./years/*.parquet"}', { kind: 'parquet', path: '/srv/pipes/years/*.parquet' }],
    ['{jsonl: /data/pipes.jsonl}', { kind: 'jsonl', path: '/data/pipes.jsonl' }],
    [
      '{query: "select * from read_csv(\'pipes.csv\')"}',
      { kind: 'query', query: "select * from read_csv('pipes.csv')", folder: '/srv/pipes' },
    ],
  ])('reads rows from %s', (written, table) => {
    expect(parse(siteWith({ 6: `table: ${written}` })).table).toEqual(table);
  });

  test('may leave nothing', () => {
    expect(parse(siteWith({}, ['  leave: []'])).policy.leave).toEqual([]);
  });
});

describe('a site file is refused', () => {
  test.each([
    ['no version', siteWith({ 1: '' }), 'field-missing 2 commonfit-site'],
    [
      'the version of another document',
      siteWith({ 1: 'commonfit: 1' }),
      'field-missing 1 commonfit-site|field-unknown 1 commonfit',
    ],
    ['a site name with a space', siteWith({ 2: 'site: harrow mere' }), 'field-value 2 site'],
    [
      'an address for a browser',
      siteWith({ 4: '  url: https://fit.example.net' }),
      'field-value 4 coordinator.url',
    ],
    [
      'an address with a password',
      siteWith({ 4: '  url: wss://a:b@fit.example.net' }),
      'field-value 4 coordinator.url',
    ],
    ['no address', siteWith({ 4: '  url: fit.example.net' }), 'field-value 4 coordinator.url'],
    ['no token file', siteWith({ 5: '' }), 'field-missing 3 coordinator.token-file'],
    ['two tables', siteWith({ 6: 'table: {csv: a.csv, query: select}' }), 'field-conflict 6 table'],
    ['no table in it', siteWith({ 6: 'table: {}' }), 'field-missing 6 table'],
    ['an unknown kind of table', siteWith({ 6: 'table: {cvs: a.csv}' }), 'field-unknown 6 table.cvs'],
    ['a path that is a number', siteWith({ 6: 'table: {csv: 3}' }), 'field-type 6 table.csv'],
    [
      'a database server',
      siteWith({ 6: 'table: {postgres: {url-env: PIPES_DB, query: select 1}}' }),
      'not-supported 6 table.postgres',
    ],
    ['a share beyond the last', siteWith({}, ['shard: {index: 3, of: 2}']), 'field-value 9 shard.index'],
    ['no policy', siteWith({ 7: '', 8: '' }), 'field-missing 1 policy'],
    ['no columns', siteWith({ 8: '  rows-least: 50' }), 'field-missing 7 policy.columns'],
    ['columns in a word', siteWith({ 8: '  columns: all' }), 'field-value 8 policy.columns'],
    ['a column twice', siteWith({ 8: '  columns: [a, b, a]' }), 'field-value 8 policy.columns[2]'],
    ['no rows at least', siteWith({}, ['  rows-least: 0']), 'field-value 9 policy.rows-least'],
    [
      'an unknown kind of answer',
      siteWith({}, ['  leave: [counts, gradient]']),
      'field-value 9 policy.leave[1]',
    ],
    ['a negative limit', siteWith({}, ['  curvature-most: -1']), 'field-value 9 policy.curvature-most'],
    ['a limit in another word', siteWith({}, ['  numbers-most: many']), 'field-value 9 policy.numbers-most'],
    ['half a round', siteWith({}, ['  rounds-most: 2.5']), 'field-value 9 policy.rounds-most'],
    ['an unknown rule of approvals', siteWith({}, ['  approvals: none']), 'field-value 9 policy.approvals'],
    ['an unknown limit', siteWith({}, ['  rows_least: 10']), 'field-unknown 9 policy.rows_least'],
    ['a field twice', siteWith({}, ['site: castlefen']), 'field-conflict 9 site'],
    ['a bracket left open', siteWith({ 8: '  columns: [a' }), 'yaml-invalid 8 -'],
  ])('for %s', (_, text, mark) => {
    const failures = failuresOf(parseSiteFile(text, FILE));
    expect(marks(failures).join('|')).toBe(mark);
    expect(failures[0]?.where?.file).toBe(FILE);
  });

  test('with the nearest known name', () => {
    const remedy = (text: string) => failuresOf(parseSiteFile(text, FILE))[0]?.remedy;
    expect(remedy(siteWith({}, ['  rows_least: 10']))).toBe('Did you mean "rows-least"?');
    expect(remedy(siteWith({}, ['  leave: [counts, gradient]']))).toBe('Did you mean "gradients"?');
  });
});

test.each([
  ['certificate-file', 'key-file'],
  ['key-file', 'certificate-file'],
])('%s needs %s', (given, missing) => {
  const [failure] = failuresOf(parseSiteFile(siteWith({ 5: `  token-file: t\n  ${given}: ./x.pem` }), FILE));
  expect(failure).toMatchObject({
    code: 'field-conflict',
    where: { field: `coordinator.${given}`, line: 6 },
    message: `Found ${given} without ${missing}; allowed: both, or neither.`,
  });
});
