import { cp, readFile, rm, stat, writeFile } from 'node:fs/promises';
import { join } from 'node:path';
import { afterAll, beforeAll, beforeEach, describe, expect, test } from 'vitest';
import { frameRecord } from '../../coordinator/journal/frame.js';
import { openJournal } from '../../coordinator/journal/journal.js';
import { memoryStore } from '../../coordinator/journal/memory-store.js';
import {
  decodeReply,
  encodeRecord,
  encodeReply,
  type JournalRecord,
} from '../../coordinator/journal/records.js';
import { isRefusal } from '../../coordinator/panel/panel-state.js';
import { longFit, SMALL_SITES, smallTable } from '../support/small-scenario.js';
import { PATIENT, Stage } from '../support/stage.js';

/** A rehearsed run, and copies of its result folder in which something was changed. */
let stage: Stage;
const changed = (file: string): string => join(stage.folder, 'changed', file);

beforeAll(async () => {
  stage = await Stage.open('replay');
  const rows = SMALL_SITES.map((site) => {
    const [head, ...lines] = smallTable(site, 150).trimEnd().split('\n');
    return { head: `${head},utility`, lines: lines.map((line) => `${line},${site}`) };
  });
  await stage.write('all.csv', [rows[0].head, ...rows.flatMap(({ lines }) => lines), ''].join('\n'));
  await stage.write('breaks.fit.yaml', longFit(SMALL_SITES));
  const args = ['breaks.fit.yaml', '--rows', 'all.csv', '--by', 'utility', '--out', 'rehearsed', '--json'];
  const rehearsed = await stage.commonfit('rehearse', ...args);
  expect(rehearsed).toMatchObject({ code: 0, stderr: '' });
}, PATIENT.timeout);
afterAll(() => stage?.close());
beforeEach(async () => {
  await rm(join(stage.folder, 'changed'), { recursive: true, force: true });
  await cp(join(stage.folder, 'rehearsed'), join(stage.folder, 'changed'), { recursive: true });
});

async function replay(folder: string) {
  const [{ code, stdout, stderr }, words] = await Promise.all([
    stage.commonfit('replay', folder, '--json'),
    stage.commonfit('replay', folder),
  ]);
  const text = `${words.stdout}${words.stderr}`.replace(/\s+/g, ' ');
  expect(words.code).toBe(code);
  return { code, json: JSON.parse(stdout), text, stderr };
}

async function records(file: string): Promise<JournalRecord[]> {
  const journal = openJournal(memoryStore(await readFile(file)));
  const found: JournalRecord[] = [];
  for (;;) {
    const next = await journal.next();
    if (!next.ok) throw new Error(next.failure.message);
    if (next.value === null) return found;
    found.push(next.value);
  }
}

const rewrite = (file: string, all: readonly JournalRecord[]): Promise<void> =>
  writeFile(file, Buffer.concat(all.map((record) => frameRecord(encodeRecord(record)))));

/** Changes one number in the first site's answer to this ask, in its ninth digit; the record's checks fit it. */
async function changeOneNumber(file: string, ask: number): Promise<void> {
  const all = await records(file);
  const [opened] = all;
  const answered = all[ask];
  if (opened.record !== 'opened' || answered.record !== 'answered') throw new Error('another journal');
  const reply = decodeReply(opened.run, ask, answered.replies[0] as Uint8Array);
  if (!reply.ok || isRefusal(reply.value)) throw new Error('no answer');
  const [work] = reply.value;
  if (work.work !== 'proximal') throw new Error(`a ${work.work}`);
  work.problems[0].point[0] *= 1 + 1e-9;
  answered.replies[0] = encodeReply(opened.run, ask, reply.value);
  await rewrite(file, all);
}

describe('a rehearsed run', () => {
  test('comes out again ask by ask, and its result to the byte', async () => {
    const { code, json, text, stderr } = await replay('rehearsed');
    expect({ code, stderr }).toEqual({ code: 0, stderr: '' });
    expect(json).toMatchObject({ agrees: true, difference: null, result: 'equal', specification: 'same' });
    expect(json.asksAgreed).toBe(json.asksRecorded);
    expect(json.asksRecorded).toBeGreaterThan(5);
    expect(text).toContain(`All ${json.asksRecorded} asks in the journal come out again as recorded.`);
    expect(text).toContain('result.json is the recomputed one to the byte.');
    expect((await stat(join(stage.folder, 'rehearsed', 'journal'))).mode & 0o777).toBe(0o600);
  });

  test('a torn tail is told of and left; the run had not ended as far as the journal knows', async () => {
    const bytes = await readFile(changed('journal'));
    await writeFile(changed('journal'), bytes.subarray(0, -5));
    await rm(changed('result.json'));
    const { code, json, text } = await replay('changed');
    expect(code).toBe(0);
    expect(json).toMatchObject({ agrees: true, ended: false, result: 'none-yet' });
    expect(text).toMatch(/The last \d+ bytes of the journal are a record that was cut off/);
    expect((await stat(changed('journal'))).size).toBe(bytes.length - 5);
  });

  test('without specification.yaml the journal’s own is taken', async () => {
    await rm(changed('specification.yaml'));
    const { code, json } = await replay('changed');
    expect(code).toBe(0);
    expect(json).toMatchObject({ specification: 'of-journal', result: 'equal' });
  });
});

describe('result --verify', () => {
  test('says what each certificate was recomputed from, and ends with 0', async () => {
    const { code, stdout, stderr } = await stage.commonfit('result', 'rehearsed', '--verify');
    expect({ code, stderr }).toEqual({ code: 0, stderr: '' });
    expect(stdout.replace(/\s+/g, ' ')).toMatch(
      /^Verified: result\.json is what the stored answers give, certificates included\. The gap of the fit at λ = 0\.002 is at most \S+ of the objective \(measured\): recomputed from the answers of 3 sites to ask \d+\./,
    );
  });

  test('a changed certificate ends with 8; a folder that is not there with 3', async () => {
    const text = await readFile(changed('result.json'), 'utf8');
    await writeFile(changed('result.json'), text.replace(/("gap": )[-\d.e]+/, '$11e-15'));
    const { code, stdout } = await stage.commonfit('result', 'changed', '--verify', '--json');
    expect(code).toBe(8);
    expect(JSON.parse(stdout)).toMatchObject({
      event: 'verified',
      verifies: false,
      fits: [{ differences: [expect.stringContaining('certificate.gap is 1e-15')] }],
    });
    expect((await stage.commonfit('result', './nowhere', '--verify')).code).toBe(3);
  });
});

describe('what was changed is told', () => {
  test('one number in an answer: at the next ask', async () => {
    const all = await records(changed('journal'));
    const ask = all.findIndex((record) => {
      if (record.record !== 'answered') return false;
      const reply = decodeReply((all[0] as { run: string }).run, record.ask, record.replies[0] as Uint8Array);
      return reply.ok && !isRefusal(reply.value) && reply.value[0].work === 'proximal';
    });
    await changeOneNumber(changed('journal'), ask);
    const { code, json, text } = await replay('changed');
    expect(code).toBe(8);
    expect(json).toMatchObject({ agrees: false, asksAgreed: ask, result: 'not-reached' });
    expect(json.difference).toMatchObject({ ask: ask + 1, stage: 'solve' });
    expect(text).toContain(`The first difference is at ask ${ask + 1} (solve).`);
  });

  test('another specification: that it is another, and the first ask that shows it', async () => {
    const text = await readFile(changed('specification.yaml'), 'utf8');
    await writeFile(changed('specification.yaml'), text.replace('lambda: 0.002', 'lambda: 0.003'));
    const replayed = await replay('changed');
    expect(replayed.code).toBe(8);
    expect(replayed.json).toMatchObject({ agrees: false, specification: 'changed' });
    expect(replayed.json.difference.ask).toBeGreaterThan(1);
    expect(replayed.text).toContain('The specification is not the one whose digest the journal holds.');
  });

  test('another title changes no ask, but the result', async () => {
    const text = await readFile(changed('specification.yaml'), 'utf8');
    await writeFile(changed('specification.yaml'), text.replace('Breaks by age', 'Leaks by age'));
    const replayed = await replay('changed');
    expect(replayed.code).toBe(8);
    expect(replayed.json).toMatchObject({ result: 'different', difference: { ask: null, stage: 'end' } });
    expect(replayed.text).toContain('In result.json, title is "Breaks by age and pressure"');
  });

  test('a coefficient in result.json: its name and both values', async () => {
    const text = await readFile(changed('result.json'), 'utf8');
    await writeFile(changed('result.json'), text.replace(/("age_years": )[-\d.e]+/, '$11.5'));
    const replayed = await replay('changed');
    expect(replayed.code).toBe(8);
    expect(replayed.text).toContain(
      'In result.json, fits[0].coefficients.age_years is 1.5; recomputed, it is',
    );
  });

  test('a run of another Node version and another release: a sentence each', async () => {
    const [opened, ...rest] = await records(changed('journal'));
    if (opened.record !== 'opened') throw new Error('not opened');
    await rewrite(changed('journal'), [{ ...opened, node: 'v99.1.0', software: 'commonfit 9.9.9' }, ...rest]);
    const { code, text } = await replay('changed');
    expect(code).toBe(0);
    expect(text).toContain(`It was made under Node v99.1.0; this is ${process.version}`);
    expect(text).toContain('It was made by commonfit 9.9.9; this is');
  });
});

describe('what cannot be used ends with 3', () => {
  test('a folder without a journal', async () => {
    await rm(changed('journal'));
    const { code, stderr, json } = await replay('changed');
    expect(code).toBe(3);
    expect(stderr.replace(/\s+/g, ' ')).toContain('journal: The journal cannot be read');
    expect(json).toMatchObject({ event: 'failed', failures: [{ code: 'file-unreadable' }] });
  });

  test('a damaged record: how far the journal can be read; the file is left as it is', async () => {
    const all = await records(changed('journal'));
    const damaged = await readFile(changed('journal'));
    const before = all.slice(0, 3).map((record) => frameRecord(encodeRecord(record)).length);
    damaged[before.reduce((sum, length) => sum + length, 0) + 40] ^= 1;
    await writeFile(changed('journal'), damaged);
    const { code, text } = await replay('changed');
    expect(code).toBe(3);
    expect(text).toContain('It can be read as far as the answers to ask 2.');
    expect(await readFile(changed('journal'))).toEqual(damaged);
  });
});

test('a cancelled run comes out again', async () => {
  await stage.serve();
  const text = longFit(['harrowmere', 'saltmarsh']);
  const following = stage.submit(await stage.write('waits.fit.yaml', text));
  await following.event('waiting');
  const run = await following.run();
  await stage.analyst('cancel', run);
  expect((await following.outcome()).code).toBe(17);
  const { code, json, text: said } = await replay(join('state', 'runs', run));
  expect(code).toBe(0);
  expect(json).toMatchObject({ asksRecorded: 0, result: 'equal', ended: true });
  expect(said).toContain('ended before its first ask');
});
