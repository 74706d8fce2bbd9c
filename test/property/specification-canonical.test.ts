import fc from 'fast-check';
import { expect, test } from 'vitest';
import { stringify } from 'yaml';
import { canonicalText, digestOf, readCanonical } from '../../protocol/specification/canonical.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { parsedValue } from '../support/specifications.js';

type Document = Record<string, unknown>;

const name = fc.stringMatching(/^[a-z][a-z0-9_]{0,8}$/);
const barrier = fc.record(
  { deadline: fc.constantFrom('500ms', '30s', '5m'), patience: fc.constantFrom('1h', '90m') },
  { requiredKeys: [] },
);
const rounds = fc.record(
  { tolerance: fc.double({ min: 1e-12, max: 0.5, noNaN: true }), most: fc.integer({ min: 1, max: 1000 }) },
  { requiredKeys: [] },
);

const penalty = (lambda: fc.Arbitrary<unknown>) =>
  fc.record({
    kind: fc.constantFrom('ridge', 'lasso'),
    lambda,
    scaled: fc.boolean(),
    'per-term': fc.dictionary(
      fc.constantFrom('x', 'm', 'm=b', 'x:m'),
      fc.double({ min: 0, max: 9, noNaN: true }),
      { noNullPrototype: true },
    ),
  });
const one = fc.double({ min: 0, max: 1e6, noNaN: true });
const path = fc.record(
  {
    count: fc.integer({ min: 2, max: 30 }),
    ratio: fc.double({ min: 1e-9, max: 0.9, noNaN: true }),
  },
  { requiredKeys: [] },
);

const choose = fc.oneof(
  fc.record(
    {
      folds: fc.integer({ min: 2, max: 100 }),
      seed: fc.integer({ min: 0, max: 2 ** 32 - 1 }),
      rule: fc.constantFrom('minimum', 'one-standard-error'),
    },
    { requiredKeys: ['folds'] },
  ),
  fc.record({ folds: fc.record({ column: name }) }),
  fc.record({ criterion: fc.constantFrom('aic', 'bic', 'extended-bic') }),
);

const report = fc
  .tuple(
    fc.subarray(['covariance', 'term-tests', 'margins', 'compare-sites', 'fit-quality']),
    fc.option(fc.oneof(fc.constant('sandwich'), fc.record({ sandwich: fc.record({ cluster: name }) }))),
    fc.option(
      fc.record({ profile: fc.uniqueArray(fc.constantFrom('x', 'm', 'm=b', 'x:m=c'), { minLength: 1 }) }),
    ),
  )
  .map(([plain, ...others]) => [...plain, ...others.filter((part) => part !== null)]);

/** Documents with columns x0…, a levels column and any of the optional fields. */
const plainDocuments: fc.Arbitrary<Document> = fc.record(
  {
    commonfit: fc.constant(1),
    title: fc.string({ maxLength: 30 }),
    sites: fc.uniqueArray(name, { minLength: 1, maxLength: 5 }),
    missing: fc.constantFrom('refuse', 'drop'),
    response: fc.constant({ column: 'y' }),
    loss: fc.oneof(
      fc.constantFrom('squared', 'poisson', 'logistic'),
      fc.record({
        kind: fc.constant('huber'),
        threshold: fc.double({ min: 0, minExcluded: true, max: 1e9, noNaN: true }),
      }),
    ),
    weights: fc.constant({ column: 'w' }),
    terms: fc.constant([
      { column: 'x', transform: 'log' },
      { column: 'm', levels: ['a', 'b', 'c'] },
      { product: ['x', 'm'] },
    ]),
    penalty: fc.array(penalty(one), { maxLength: 3 }),
    intercept: fc.constantFrom('shared', 'per-site', 'none'),
    report,
    rounds,
    barrier,
  },
  { requiredKeys: ['commonfit', 'sites', 'response', 'loss', 'terms'], noNullPrototype: true },
);

/** The same with several λ and a choice among their fits. */
const documents: fc.Arbitrary<Document> = fc.oneof(
  plainDocuments,
  fc
    .tuple(plainDocuments, penalty(fc.oneof(path, fc.array(one, { minLength: 2, maxLength: 30 }))), choose)
    .map(([document, several, chosen]) => ({ ...document, penalty: [several], choose: chosen })),
);

const parse = (text: string) => parsedValue(parseFitSpecification(text, 'x.fit.yaml'));

/** Reorders the keys of every mapping, by a drawn number for each. */
function shuffled(value: unknown, draw: () => number): unknown {
  if (Array.isArray(value)) return value.map((entry) => shuffled(entry, draw));
  if (typeof value !== 'object' || value === null) return value;
  const members = Object.entries(value).map(([key, member]) => ({
    key,
    member: shuffled(member, draw),
    rank: draw(),
  }));
  return Object.fromEntries(members.sort((a, b) => a.rank - b.rank).map(({ key, member }) => [key, member]));
}

test('the digest does not depend on key order, comments or layout', () => {
  fc.assert(
    fc.property(documents, fc.infiniteStream(fc.nat()), fc.boolean(), (document, ranks, flow) => {
      const reordered = shuffled(document, () => ranks.next().value ?? 0);
      const text = stringify(
        reordered,
        flow ? { collectionStyle: 'flow' } : { indent: 4, defaultStringType: 'QUOTE_DOUBLE' },
      );
      const digest = digestOf(canonicalText(parse(stringify(document))));
      expect(digestOf(canonicalText(parse(`# about pipes\n${text}# end\n`)))).toBe(digest);
    }),
  );
});

test('reading the canonical form gives the specification back', () => {
  fc.assert(
    fc.property(documents, (document) => {
      const specification = parse(stringify(document));
      expect(readCanonical(canonicalText(specification))).toEqual({ ok: true, value: specification });
    }),
  );
});

test('different titles, sites or rounds have different canonical forms', () => {
  fc.assert(
    fc.property(documents, documents, (one, other) => {
      const a = parse(stringify(one));
      const b = parse(stringify(other));
      expect(canonicalText(a) === canonicalText(b)).toBe(JSON.stringify(a) === JSON.stringify(b));
    }),
  );
});

test('no text makes the parser throw', () => {
  const pieces = fc.constantFrom(
    'commonfit: 1',
    'terms:',
    '  - {column: x}',
    '&a',
    '*a',
    '[',
    '}',
    '? ',
    ': ',
    '"',
    '\n',
    '|',
    '!!set',
    '<<: ',
    '1e9',
  );
  fc.assert(
    fc.property(fc.array(fc.oneof(pieces, fc.string()), { maxLength: 12 }), (parts) => {
      const parsed = parseFitSpecification(parts.join(''), 'x.fit.yaml');
      expect(parsed.ok ? 1 : parsed.failures.length).toBeGreaterThan(0);
    }),
  );
});
