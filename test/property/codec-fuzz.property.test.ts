/** The codec against frames that somebody spoiled: of structure, of bytes, and with lengths that lie. */
import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import { seededRandom } from '../../numerics/random.js';
import { encodeMessage } from '../../protocol/codec.js';
import { readItems, writeItems } from '../fuzz/cbor-items.js';
import { readCorpus } from '../fuzz/corpus.js';
import { judge } from '../fuzz/judge.js';
import { DAMAGES, SPOILINGS, spoilTree } from '../fuzz/mutations.js';
import { arbitraryToCoordinator, arbitraryToWorker } from '../support/arbitrary-messages.js';
import { toCoordinatorMessages, toWorkerMessages } from '../support/messages.js';

const frame = fc.oneof(arbitraryToWorker, arbitraryToCoordinator).map(encodeMessage);
const seed = fc.nat();

describe('the fuzzer’s own tools', () => {
  test('a tree that nobody spoiled is written as it was read', () => {
    fc.assert(
      fc.property(frame, (bytes) => {
        expect(writeItems(readItems(bytes))).toEqual(new Uint8Array(bytes));
      }),
    );
  });

  test('frames that nobody spoiled are accepted by one reader', () => {
    fc.assert(
      fc.property(frame, (bytes) => {
        expect(judge(bytes).ends.filter((end) => end === 'ok')).toHaveLength(1);
      }),
    );
  });
});

describe('spoiled structure', () => {
  test.each(Object.keys(SPOILINGS))('%s', (name) => {
    let changed = 0;
    fc.assert(
      fc.property(frame, frame, seed, (bytes, other, drawn) => {
        const tree = readItems(bytes);
        if (!spoilTree(tree, name, seededRandom(drawn), readItems(other))) return;
        const spoiled = writeItems(tree);
        if (Buffer.compare(spoiled, bytes) !== 0) changed++;
        judge(spoiled);
      }),
      { numRuns: 200 },
    );
    expect(changed).toBeGreaterThan(30);
  });

  test('several at once', () => {
    const names = fc.array(fc.constantFrom(...Object.keys(SPOILINGS)), { minLength: 2, maxLength: 6 });
    fc.assert(
      fc.property(frame, frame, seed, names, (bytes, other, drawn, spoilings) => {
        const tree = readItems(bytes);
        const random = seededRandom(drawn);
        for (const name of spoilings) spoilTree(tree, name, random, readItems(other));
        judge(writeItems(tree));
      }),
      { numRuns: 1500 },
    );
  });
});

describe('spoiled bytes', () => {
  test.each(Object.keys(DAMAGES))('%s', (name) => {
    fc.assert(
      fc.property(frame, frame, seed, (bytes, other, drawn) => {
        judge(DAMAGES[name](bytes, seededRandom(drawn), other));
      }),
      { numRuns: 300 },
    );
  });

  test('a frame cut anywhere is refused by both readers', () => {
    fc.assert(
      fc.property(frame, (bytes) => {
        for (let length = 0; length < bytes.length; length++) {
          expect(judge(bytes.subarray(0, length)).ends).not.toContain('ok');
        }
      }),
      { numRuns: 60 },
    );
  });

  test('any two frames spliced at every pair of cuts', () => {
    const [first, second] = [toWorkerMessages[4], toCoordinatorMessages[0]].map(encodeMessage);
    for (let head = 0; head <= first.length; head++) {
      for (let tail = 0; tail <= second.length; tail++) {
        judge(Buffer.concat([first.subarray(0, head), second.subarray(tail)]));
      }
    }
  });
});

describe('lengths that lie', () => {
  const huge = ['1a00ffffff', '1b00000000ffffffff', '1b001fffffffffffff', '1bffffffffffffffff'];
  /** A map whose one value is the head given, with the argument given. */
  const lying = (major: number, argument: string): Uint8Array => {
    const head = Buffer.from(argument, 'hex');
    head[0] |= major << 5;
    return Buffer.concat([Buffer.from('a1646b696e64', 'hex'), head]);
  };

  test('take no memory and are refused', () => {
    const before = process.memoryUsage();
    for (let times = 0; times < 500; times++) {
      for (const argument of huge) {
        for (const major of [2, 3, 4, 5]) {
          expect(judge(lying(major, argument)).ends).toEqual(['frame-malformed', 'frame-malformed']);
        }
      }
    }
    const after = process.memoryUsage();
    expect(after.arrayBuffers - before.arrayBuffers).toBeLessThan(16 * 2 ** 20);
    expect(after.heapTotal - before.heapTotal).toBeLessThan(64 * 2 ** 20);
  });
});

describe('frames that are large and wrong throughout', () => {
  const many = 60_000;
  const keys = Array.from({ length: many }, (_, i) => [`k${i}`, 0]);
  test.each<[string, object]>([
    ['fields nobody knows', { kind: 'hello', version: 1, ...Object.fromEntries(keys) }],
    ['elements of the wrong type', { kind: 'answer', run: 'r', ask: 1, work: new Array(many).fill('') }],
    [
      'fields nobody knows in every element',
      { kind: 'ask', run: 'r', ask: 1, work: new Array(many / 2).fill({ work: 'survey', more: 1 }) },
    ],
  ])('%s: refused within seconds, in a short text', (_, message) => {
    const startedMs = performance.now();
    expect(judge(encodeMessage(message as never)).ends).not.toContain('ok');
    expect(performance.now() - startedMs).toBeLessThan(10_000);
  });

  test.each([
    ['a key', { kind: 'hello', '\u001b[2J\u0007': 1 }],
    ['a kind', { kind: '\u001b[2J\u0007' }],
    ['a long key', { kind: 'hello', ['x'.repeat(100_000)]: 1 }],
  ])('%s that would upset a terminal is not repeated as it is', (_, message) => {
    judge(encodeMessage(message as never));
  });
});

describe('the kept corpus of the coverage-guided fuzzer', () => {
  test('breaks no promise', async () => {
    const corpus = await readCorpus();
    expect(corpus.length).toBeGreaterThan(0);
    for (const kept of corpus) judge(kept);
  });
});
