import { describe, expect, test } from 'vitest';
import { memoryStore } from '../../coordinator/journal/memory-store.js';
import { fail } from '../../protocol/failure.js';
import { Bench, honest, MEANS, SITES, undisturbed } from '../support/run-host-bench.js';
import { toyAnswer, toyRun } from '../support/toy-run.js';

describe('cancel', () => {
  test('ends a waiting run and a running one; an ended one cannot be cancelled', async () => {
    const waiting = new Bench();
    await waiting.host.open();
    expect(waiting.host.cancel()).toBe(true);
    expect((await waiting.finish()).outcome).toBe('cancelled');
    expect(waiting.host.cancel()).toBe(false);

    const running = new Bench();
    await running.host.open();
    for (const site of SITES) running.connect(site);
    await running.time.pass(15);
    running.host.cancel();
    expect(await running.finish()).toMatchObject({ outcome: 'cancelled', result: { rounds: 1, fits: [] } });
    expect(running.sent.at(-1)?.message).toEqual({ kind: 'run-end', run: 'r1', outcome: 'cancelled' });
  });
});

test('a cancellation and the last reply at the same moment: one end, and a journal that replays to it', async () => {
  const bench = new Bench(memoryStore(), () => []);
  await bench.host.open();
  for (const site of SITES) bench.connect(site);
  await bench.time.pass(5);
  bench.host.cancel();
  for (const { site, message } of [...bench.sent]) {
    const linked = bench.links.get(site);
    if (message.kind === 'ask' && linked !== undefined) {
      bench.host.receive(linked, toyAnswer(message, MEANS[site]));
    }
  }
  const end = await bench.finish();
  expect(end.outcome).toBe('cancelled');
  expect(bench.named('outcome')).toHaveLength(1);
  const again = new Bench(memoryStore(bench.store.bytes()));
  await again.host.open();
  expect(again.kept).toEqual(end);
});

describe('taking a run up from its journal', () => {
  test('cut off after any byte, the journal leads to the same result and a log without gap or repetition', async () => {
    const first = await undisturbed();
    const bytes = first.store.bytes();
    for (let length = 0; length <= bytes.length; length += 97) {
      const logged = first.events.filter(({ event }) => event === 'round').slice(0, 1);
      const again = new Bench(memoryStore(bytes.slice(0, length)), honest, { logged });
      await again.host.open();
      for (const site of SITES) again.connect(site);
      const end = await again.finish();
      expect(end.result).toEqual(first.kept?.result);
      expect(again.named('round').map(({ round }) => round)).toEqual([2, 3]);
    }
  });

  test('a run that had ended is published again without any site', async () => {
    const first = await undisturbed();
    const again = new Bench(memoryStore(first.store.bytes()));
    await again.host.open();
    expect(again.kept?.result).toEqual(first.kept?.result);
    expect(again.named('resumed')).toEqual([]);
  });

  test('a cancelled run stays cancelled', async () => {
    const first = new Bench();
    await first.host.open();
    for (const site of SITES) first.connect(site);
    await first.time.pass(15);
    first.host.cancel();
    const end = await first.finish();
    const again = new Bench(memoryStore(first.store.bytes()));
    await again.host.open();
    expect(again.kept).toEqual(end);
  });

  test('says that it goes on, and asks only what is not recorded', async () => {
    const first = new Bench();
    await first.host.open();
    for (const site of SITES) first.connect(site);
    await first.time.pass(15);
    await first.host.close();
    const again = new Bench(memoryStore(first.store.bytes()));
    await again.host.open();
    expect(again.named('resumed')).toMatchObject([{ round: 1 }]);
    for (const site of SITES) again.connect(site);
    await again.finish();
    const asks = again.sent.flatMap(({ message }) => (message.kind === 'ask' ? [message.ask] : []));
    expect(new Set(asks)).toEqual(new Set([2, 3]));
  });

  test('a damaged journal, or one of another specification, ends the run as broken', async () => {
    const bytes = (await undisturbed()).store.bytes();
    bytes[40] ^= 1;
    const damaged = new Bench(memoryStore(bytes));
    await damaged.host.open();
    expect(damaged.kept).toMatchObject({
      outcome: 'broken',
      reason: expect.stringMatching(/\[journal-broken\]/),
    });
    expect(damaged.store.bytes()).toEqual(bytes);
  });

  test('a run that asks something else than it asked then is journal-broken', async () => {
    const first = await undisturbed();
    const other = new Bench(memoryStore(first.store.bytes()), honest, {
      *run(specification, digest, roster) {
        const { value } = toyRun(specification, digest, roster).next();
        if ('works' in value)
          yield { ...value, works: value.works.map(() => [{ work: 'factor' as const, folds: [] }]) };
        throw new Error('not reached');
      },
    });
    await other.host.open();
    expect(other.kept?.outcome).toBe('broken');
    expect(other.kept?.reason).toMatch(/Ask 1 was another one.*\[journal-broken\]/);
  });
});

describe('a state folder that cannot be written', () => {
  test('halts the run: no answer counts that is not recorded, no outcome is told', async () => {
    const store = memoryStore();
    const full = fail('state-unwritable', 'No space.');
    let appends = 0;
    const bench = new Bench({
      ...store,
      append: async (bytes) => {
        appends += 1;
        return appends > 2 ? full : store.append(bytes);
      },
    });
    await bench.host.open();
    for (const site of SITES) bench.connect(site);
    await bench.time.pass(60_000);
    expect(bench.host.state).toMatchObject({ state: 'halted', reason: expect.stringMatching(/No space/) });
    expect(bench.kept).toBeNull();
    expect(bench.named('round').map(({ round }) => round)).toEqual([1]);
    const again = new Bench(memoryStore(store.bytes()));
    await again.host.open();
    for (const site of SITES) again.connect(site);
    expect((await again.finish()).result).toEqual((await undisturbed()).kept?.result);
  });
});
