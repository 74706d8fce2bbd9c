import fc from 'fast-check';
import { describe, expect, test } from 'vitest';
import type { Ask, Work } from '../../protocol/messages/round.js';
import { readLedger } from '../../worker/custody/ledger.js';
import type { AnswererDeps, Reply } from '../../worker/service/answerer.js';
import {
  askOf,
  type MemoryLedgerFile,
  prepareOf,
  SCALING,
  type SiteInMemory,
  siteInMemory,
  specification,
} from '../support/worker-site.js';

/** A worker keeps one ask of each run: the newest. */

const gradientAt = (...point: number[]): Work => ({
  work: 'evaluate',
  problem: 0,
  part: null,
  points: [{ point: Float64Array.from(point), want: 'gradient' }],
  ownFit: null,
  sketch: null,
});
const ask = (number: number, run = 'r1'): Ask => askOf(run, number, gradientAt(-1, number / 100, 0));

/** Two evaluations: the worker breathes before each. */
const long = (number: number, run = 'r1'): Ask =>
  askOf(run, number, gradientAt(-1, 0, 0), gradientAt(-1, 1, 0));

const inWords = (reply: Reply): string =>
  reply === null ? 'skipped' : reply.kind === 'refusal' ? reply.code : `answer ${reply.ask}`;

const recorded = (file: MemoryLedgerFile): string[] => {
  const read = readLedger(file.text, file.name);
  if (!read.ok) throw new Error(read.failure.message);
  return read.value.records.map((record) => `${record.run} ${record.ask}`);
};

const skips = ({ events }: SiteInMemory): unknown[] => events.filter(({ event }) => event === 'skipped');

/** A site that comes to a stand at its `at`-th breath (from 1) until it is released. */
async function heldSite(
  at: number,
  more: Partial<AnswererDeps> = {},
): Promise<SiteInMemory & { readonly standing: Promise<void>; readonly release: () => void }> {
  let release = (): void => undefined;
  let arrive = (): void => undefined;
  const held = new Promise<void>((resolve) => {
    release = resolve;
  });
  const standing = new Promise<void>((resolve) => {
    arrive = resolve;
  });
  let breaths = 0;
  const pause = async (): Promise<void> => {
    breaths += 1;
    if (breaths !== at) return;
    arrive();
    await held;
  };
  const site = await siteInMemory({ pause, ...more });
  for (const run of ['r1', 'r2']) site.answerer.prepare(prepareOf(run));
  return { ...site, standing, release };
}

describe('an ask that waits', () => {
  test('is skipped at once when a newer one of its run comes, and nothing of it leaves', async () => {
    const site = await heldSite(1);
    const other = site.answerer.answer(ask(1, 'r2'));
    await site.standing;
    const older = site.answerer.answer(ask(3));
    expect(site.answerer.open).toBe(2);
    const newer = site.answerer.answer(ask(4));
    expect(inWords(await older)).toBe('skipped');
    expect(site.answerer.open).toBe(2);
    site.release();
    expect([await other, await newer].map(inWords)).toEqual(['answer 1', 'answer 4']);
    expect(recorded(site.file)).toEqual(['r2 1', 'r1 4']);
    expect(skips(site)).toEqual([{ event: 'skipped', run: 'r1', ask: 3, newest: 4 }]);
  });

  test('stays where the newer one is of another run', async () => {
    const site = await heldSite(1);
    const replies = [ask(1, 'r2'), ask(1), ask(2, 'r2')].map((one) => site.answerer.answer(one));
    site.release();
    expect((await Promise.all(replies)).map(inWords)).toEqual(['skipped', 'answer 1', 'answer 2']);
  });

  test('makes room: a run that goes on and on does not fill the queue', async () => {
    const site = await heldSite(1, { bounds: { asksMost: 3 } });
    const replies = [site.answerer.answer(ask(1, 'r2'))];
    await site.standing;
    for (let number = 1; number <= 50; number++) replies.push(site.answerer.answer(ask(number)));
    expect(site.answerer.open).toBe(2);
    site.release();
    const words = (await Promise.all(replies)).map(inWords);
    expect(words.filter((word) => word !== 'skipped')).toEqual(['answer 1', 'answer 50']);
  });
});

describe('an ask in the making', () => {
  test('is given up at the next breath when a newer one of its run comes', async () => {
    const site = await heldSite(2);
    const older = site.answerer.answer(long(1));
    await site.standing;
    const newer = site.answerer.answer(ask(2));
    site.release();
    expect([await older, await newer].map(inWords)).toEqual(['skipped', 'answer 2']);
    expect(recorded(site.file)).toEqual(['r1 2']);
    expect(site.answerer.departed('r1').asks).toBe(1);
  });

  test('is recorded and sent where it is past computing', async () => {
    const site = await heldSite(0);
    let newer: Promise<Reply> = Promise.resolve(null);
    const append = site.file.append.bind(site.file);
    site.file.append = async (line) => {
      if (site.file.text === '') newer = site.answerer.answer(ask(2));
      return append(line);
    };
    const older = await site.answerer.answer(ask(1));
    expect([older, await newer].map(inWords)).toEqual(['answer 1', 'answer 2']);
    expect(recorded(site.file)).toEqual(['r1 1', 'r1 2']);
  });

  test('of a run that ended is refused, a newer ask or not', async () => {
    const site = await heldSite(2);
    const older = site.answerer.answer(long(1));
    await site.standing;
    const newer = site.answerer.answer(ask(2));
    site.answerer.forget('r1');
    site.release();
    expect([await older, await newer].map(inWords)).toEqual(['run-cancelled', 'run-unknown']);
    expect(recorded(site.file)).toEqual([]);
  });
});

describe('an ask that comes late', () => {
  test('is skipped where a newer one has been answered; the newest may be repeated', async () => {
    const site = await heldSite(0);
    await site.answerer.answer(ask(2));
    expect(inWords(await site.answerer.answer(ask(1)))).toBe('skipped');
    expect(inWords(await site.answerer.answer(ask(2)))).toBe('answer 2');
    expect(recorded(site.file)).toEqual(['r1 2']);
  });

  test('is answered where the run was prepared anew in between: the coordinator begins again', async () => {
    const site = await heldSite(0);
    await site.answerer.answer(ask(2));
    site.answerer.prepare(prepareOf('r1', specification(), SCALING));
    expect(inWords(await site.answerer.answer(ask(1)))).toBe('answer 1');
  });

  test('is skipped although many runs were asked since', async () => {
    const site = await heldSite(0);
    await site.answerer.answer(ask(2));
    for (let n = 3; n < 15; n++) await site.answerer.answer(ask(1, `r${n}`));
    expect(inWords(await site.answerer.answer(ask(1)))).toBe('skipped');
  });
});

describe('in whatever order the asks come', () => {
  test('while the worker is busy with another run: the newest alone is answered', async () => {
    const orders = fc.integer({ min: 1, max: 8 }).chain((n) =>
      fc.array(fc.integer({ min: 1, max: n }), { maxLength: 4 }).chain((again) => {
        const all = [...Array.from({ length: n }, (_, i) => i + 1), ...again];
        return fc.shuffledSubarray(all, { minLength: all.length });
      }),
    );
    await fc.assert(
      fc.asyncProperty(orders, async (numbers) => {
        const site = await heldSite(1);
        const other = site.answerer.answer(ask(1, 'r2'));
        await site.standing;
        const replies = numbers.map((number) => site.answerer.answer(ask(number)));
        site.release();
        const newest = Math.max(...numbers);
        expect((await Promise.all(replies)).map(inWords)).toEqual(
          numbers.map((number) => (number === newest ? `answer ${newest}` : 'skipped')),
        );
        await other;
        expect(recorded(site.file)).toEqual(['r2 1', `r1 ${newest}`]);
      }),
      { numRuns: 30 },
    );
  });

  const arrivals = fc.record({
    asks: fc
      .tuple(fc.integer({ min: 1, max: 7 }), fc.integer({ min: 0, max: 4 }))
      .chain(([n, m]) =>
        fc.shuffledSubarray(
          [
            ...Array.from({ length: n }, (_, i) => long(i + 1)),
            ...Array.from({ length: m }, (_, i) => long(i + 1, 'r2')),
          ],
          { minLength: n + m },
        ),
      ),
    /** Turns of the event loop that the worker has before each of them. */
    turns: fc.array(fc.integer({ min: 0, max: 12 }), { minLength: 11, maxLength: 11 }),
    repeats: fc.array(fc.boolean(), { minLength: 11, maxLength: 11 }),
  });

  test('of two runs, at any moment: the newest of each is answered, an older one at most before it came, and the ledger holds what was sent', async () => {
    await fc.assert(
      fc.asyncProperty(arrivals, async ({ asks, turns, repeats }) => {
        const site = await siteInMemory({ pause: () => new Promise((resolve) => setImmediate(resolve)) });
        for (const run of ['r1', 'r2']) site.answerer.prepare(prepareOf(run));
        const sent: Promise<string | null>[] = [];
        const send = (one: Ask): void => {
          sent.push(
            site.answerer.answer(structuredClone(one)).then((reply) => {
              if (reply === null) return null;
              expect(reply).toMatchObject({ kind: 'answer', run: one.run, ask: one.ask });
              return `${one.run} ${one.ask}`;
            }),
          );
        };
        const newest = new Map<string, number>();
        const mayLeave = new Set<string>();
        for (const [at, one] of asks.entries()) {
          for (let turn = 0; turn < turns[at]; turn++) await new Promise((resolve) => setImmediate(resolve));
          if (one.ask > (newest.get(one.run) ?? 0)) {
            newest.set(one.run, one.ask);
            mayLeave.add(`${one.run} ${one.ask}`);
          }
          send(one);
          if (repeats[at]) send(one);
        }
        const left = new Set((await Promise.all(sent)).filter((key) => key !== null));
        const lines = recorded(site.file);
        expect(new Set(lines)).toEqual(left);
        expect(lines).toHaveLength(left.size);
        for (const [run, number] of newest) expect(left).toContain(`${run} ${number}`);
        for (const key of left) expect(mayLeave).toContain(key);
      }),
      { numRuns: 60 },
    );
  });
});
