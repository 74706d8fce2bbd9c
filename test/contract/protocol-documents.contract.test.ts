/** protocol/messages.cddl and protocol/README.md say what the code does, no more and no less. */
import { readFileSync } from 'node:fs';
import { describe, expect, test } from 'vitest';
import { CLOSE_CODES } from '../../protocol/close-codes.js';
import { decodeToCoordinator, encodeMessage } from '../../protocol/codec.js';
import { FAILURE_CODES } from '../../protocol/failure.js';
import { LIMITS } from '../../protocol/limits.js';
import { work } from '../../protocol/messages/round.js';
import { toCoordinator } from '../../protocol/messages/to-coordinator.js';
import { toWorker } from '../../protocol/messages/to-worker.js';
import { canonicalText, readCanonical } from '../../protocol/specification/canonical.js';
import { designColumns } from '../../protocol/specification/design-columns.js';
import { parseFitSpecification } from '../../protocol/specification/parse.js';
import { PROTOCOL_VERSION, SUBPROTOCOL } from '../../protocol/version.js';
import { cddlRules, formOfCddl, formOfSchema } from '../support/cddl.js';

const read = (name: string): string =>
  readFileSync(new URL(`../../protocol/${name}`, import.meta.url), 'utf8');
const readme = read('README.md');
const rules = cddlRules(read('messages.cddl'));

/** Rows of the table under a heading of the README, cells without back quotes. */
function tableUnder(heading: string): string[][] {
  const section = readme.split(/^## /m).find((part) => part.startsWith(`${heading}\n`)) ?? '';
  return section
    .split('\n')
    .filter((line) => line.startsWith('| ') && !line.startsWith('| --'))
    .slice(1)
    .map((line) =>
      line
        .slice(1, -1)
        .split('|')
        .map((cell) => cell.trim().replaceAll('`', '')),
    );
}

const kindsOf = (union: typeof toWorker | typeof toCoordinator): string[] =>
  union.options.map((option) => option.shape.kind.value);

describe('messages.cddl', () => {
  for (const schema of [...toWorker.options, ...toCoordinator.options]) {
    const kind = schema.shape.kind.value;
    test(`${kind} has the fields and types of the schema`, () => {
      expect(formOfCddl(kind, rules)).toBe(formOfSchema(schema));
    });
  }

  test('each direction takes the kinds of its schema', () => {
    expect(rules.get('to-worker')?.split(' / ')).toEqual(kindsOf(toWorker));
    expect(rules.get('to-coordinator')?.split(' / ')).toEqual(kindsOf(toCoordinator));
  });

  test('every rule is used', () => {
    const bodies = [...rules.values()].join(' ');
    const unused = [...rules.keys()].filter(
      (name) => !name.startsWith('to-') && !new RegExp(`(?<![\\w"-])${name}(?![\\w"-])`).test(bodies),
    );
    expect(unused).toEqual([]);
  });

  test('the comparison notices every field that is missing, renamed, added or of another type', () => {
    const text = read('messages.cddl');
    const formOf = (cddl: string): string => {
      const rulesThere = cddlRules(cddl);
      return ['to-worker', 'to-coordinator'].map((root) => formOfCddl(root, rulesThere)).join('\n');
    };
    const schemas = [toWorker, toCoordinator].map(formOfSchema).join('\n');
    expect(formOf(text)).toBe(schemas);
    const fields = text.split('\n').filter((line) => /^ {2}\w+: /.test(line));
    // fields of the same words in several messages count once here, and are spoilt in each of them in turn below
    expect(new Set(fields).size).toBeGreaterThan(90);
    for (const [at, line] of text.split('\n').entries()) {
      const [, name, type, comment] = /^ {2}(\w+): (.*?),(.*)$/.exec(line) ?? [];
      if (name === undefined) continue;
      const spoilt = [
        '',
        `  ${name}Other: ${type},${comment}`,
        `  ${name}: ${type === 'bool' ? 'count' : 'bool'},${comment}`,
        `  ${name}: ${type.includes('null') ? type.replace(' / null', '') : `${type} / null`},${comment}`,
        `${line}\n  extra: count,`,
      ];
      if (/characters|digits/.test(comment))
        spoilt.push(line.replace(/\d+(?= (characters|hexadecimal))/, '63'));
      for (const other of spoilt) {
        const lines = text.split('\n');
        lines[at] = other;
        expect(formOf(lines.join('\n')), `${line} → ${other}`).not.toBe(schemas);
      }
    }
  });

  test('the comparison notices every choice that is missing, and every bound of an array', () => {
    const formOf = (cddl: string, root: string): string => formOfCddl(root, cddlRules(cddl));
    const text = read('messages.cddl');
    for (const [root, schema] of [
      ['to-worker', toWorker],
      ['to-coordinator', toCoordinator],
    ] as const) {
      const form = formOfSchema(schema);
      const named = new Set(form.match(/"[a-z-]+"/g));
      for (const choice of named) {
        const other = text.replaceAll(choice, '"another"');
        expect(formOf(other, root), choice).not.toBe(form);
      }
      for (const bound of new Set(text.match(/\d*\*\d*(?= )/g)))
        if (form.includes(`[${/^\d/.test(bound) ? bound : `0${bound}`} (`))
          expect(formOf(text.replaceAll(bound, '2*3'), root), bound).not.toBe(form);
    }
  });
});

describe('README.md', () => {
  test('limits', () => {
    const documented = tableUnder('Limits').map(([name, value]) => [name, Number(value)]);
    expect(Object.fromEntries(documented)).toEqual(LIMITS);
  });

  test('close codes', () => {
    const documented = tableUnder('Close codes').map(([code, name]) => [name, Number(code)]);
    expect(Object.fromEntries(documented)).toEqual(CLOSE_CODES);
  });

  test('failure codes, in the order of the code', () => {
    expect(tableUnder('Failure codes').map(([code]) => code)).toEqual([...FAILURE_CODES]);
  });

  test('version and subprotocol', () => {
    expect(readme).toMatch(new RegExp(`^# The commonfit protocol, version ${PROTOCOL_VERSION}$`, 'm'));
    expect(readme).toContain(`Subprotocol \`${SUBPROTOCOL}\``);
  });

  test('every kind of message and of work is explained', () => {
    for (const kind of [...kindsOf(toWorker), ...kindsOf(toCoordinator)])
      expect(readme).toContain(`\`${kind}\``);
    for (const { shape } of work.options) expect(readme).toContain(`**\`${shape.work.value}\`**`);
  });

  test('every field of every message is named', () => {
    const code = [...(readme.match(/`[^`\n]+`/g) ?? []), ...(readme.match(/^ {4}\S.*$/gm) ?? [])].join(' ');
    const words = new Set(code.match(/\w+/g));
    const fields = [...rules.values()].flatMap((rule) => rule.match(/\w+(?=: )/g) ?? []);
    expect([...new Set(fields)].filter((field) => !words.has(field))).toEqual([]);
  });

  test('the specification shown is a canonical one, with the columns named below it', () => {
    const text = /```text\n(\{.*\})\n```/.exec(readme)?.[1] ?? '';
    const read = readCanonical(text);
    expect(read).toMatchObject({ ok: true });
    if (!read.ok) return;
    const named = /has the design columns (.*)\./.exec(readme)?.[1].match(/`[^`]+`/g) ?? [];
    expect(named.map((name) => name.slice(1, -1))).toEqual(designColumns(read.value).map(({ name }) => name));
  });

  test('every member of a canonical specification is explained', () => {
    // one that has every member there can be: exposure and offset exclude each other
    const full = (role: string): string[] => {
      const parsed = parseFitSpecification(
        `commonfit: 1
title: All there is
sites: [harrowmere, castlefen]
response: {column: breaks}
loss: poisson
${role}: {column: size}
weights: {column: counted}
terms: [{column: age}]
penalty: [{kind: ridge, lambda: [0.1, 0.2]}]
choose: {folds: 5, seed: 7, rule: minimum}
report: [covariance]
`,
        'all.fit.yaml',
      );
      return parsed.ok ? Object.keys(JSON.parse(canonicalText(parsed.value))) : [];
    };
    const members = [...new Set([...full('exposure'), ...full('offset')])];
    expect(members).toContain('choose');
    const explained = tableUnder('The specification').flatMap(([cell]) => cell.split(', '));
    expect(explained.sort()).toEqual(members.sort());
  });

  test('the worked message is one, and is what we would send', () => {
    const block = /```hex\n([\s\S]*?)```/.exec(readme)?.[1] ?? '';
    const hex = block
      .split('\n')
      .map((line) => /^ *((?:[0-9a-f]{2,} +|[0-9a-f]{2,}$)*)/.exec(line)?.[1].replaceAll(' ', '') ?? '')
      .join('');
    const message = decodeToCoordinator(Uint8Array.from(Buffer.from(hex, 'hex')));
    const problem = { problem: 0, point: Float64Array.from([0.5, -2]), newtonSteps: 3 };
    const expected = {
      kind: 'answer' as const,
      run: 'r1',
      ask: 7,
      work: [{ work: 'proximal' as const, problems: [problem] }],
    };
    expect(message).toEqual({ ok: true, value: expected });
    expect(Buffer.from(encodeMessage(expected)).toString('hex')).toBe(hex);
    expect(readme).toContain(`in 3 steps. ${hex.length / 2} bytes.`);
  });
});
