import { describe, expect, test } from 'vitest';
import { memoryStore } from '../../coordinator/journal/memory-store.js';
import { Bench, honest, MEANS, SITES, undisturbed } from '../support/run-host-bench.js';
import { TOY_ROUNDS, toyAnswer, toyRun } from '../support/toy-run.js';

describe('run host', () => {
  test('waits for the named sites, then runs to the end and logs every round', async () => {
    const bench = new Bench();
    await bench.host.open();
    bench.connect('castlefen', 30);
    bench.connect('harrowmere');
    expect(bench.host.state).toEqual({ state: 'waiting' });
    bench.connect('lindell-bay');
    const end = await bench.finish();
    expect(end.outcome).toBe('solved');
    expect(bench.named('waiting').map(({ sites }) => sites)).toEqual([
      SITES,
      ['harrowmere', 'lindell-bay'],
      ['lindell-bay'],
    ]);
    expect(bench.named('round')).toMatchObject(
      [1, 2, 3].map((round) => ({
        round,
        roundsMost: 300,
        tookMs: 30,
        slowest: { site: 'castlefen', ms: 30 },
        numbersUp: 6,
        numbersDown: 3,
      })),
    );
    expect(bench.events.at(-1)).toMatchObject({ event: 'outcome', outcome: 'solved', folder: 'folder' });
  });

  test('prepares each connection once, before its first ask, and tells it the end', async () => {
    const bench = await undisturbed();
    const kinds = bench.sent.filter(({ site }) => site === 'harrowmere').map(({ message }) => message.kind);
    expect(kinds).toEqual(['prepare', ...Array<string>(TOY_ROUNDS).fill('ask'), 'run-end']);
  });

  test('the roster has the order of the specification, whoever connects first', async () => {
    const bench = new Bench();
    void bench.host.open();
    for (const site of [...SITES].reverse()) bench.connect(site);
    const { result } = await bench.finish();
    expect(result.sites.map(({ site }) => site)).toEqual(SITES);
    expect(result).toEqual((await undisturbed()).kept?.result);
  });

  test('duplicates, lost replies and lost links leave the result as it is, to the bit', async () => {
    const expected = (await undisturbed()).kept?.result;
    let asks = 0;
    const bench = new Bench(memoryStore(), (ask, site) => {
      asks += 1;
      if (asks % 4 === 0) return [];
      if (asks % 5 === 0) bench.time.after(1, () => bench.drop(site));
      if (asks % 5 === 0) bench.time.after(700, () => bench.connect(site));
      return [toyAnswer(ask, MEANS[site]), toyAnswer(ask, MEANS[site])];
    });
    void bench.host.open();
    for (const site of SITES) bench.connect(site);
    const end = await bench.finish();
    expect(end.result).toEqual(expected);
    expect(bench.named('late').length).toBeGreaterThan(0);
    expect(bench.named('site').map(({ change }) => change)).toContain('lost');
    expect(bench.notices.map(({ code }) => code)).toContain('answer-unasked');
  });

  test('a site that stays away ends the run as site-missing, by name', async () => {
    const bench = new Bench();
    void bench.host.open();
    bench.connect('castlefen');
    const end = await bench.finish();
    expect(end.outcome).toBe('site-missing');
    expect(end.reason).toMatch(/harrowmere, lindell-bay/);
  });

  test('a site that goes in the middle ends the run as site-missing, without a fit', async () => {
    const bench = new Bench(memoryStore(), (ask, site) =>
      ask.ask === 2 && site === 'castlefen' ? [] : honest(ask, site),
    );
    void bench.host.open();
    for (const site of SITES) bench.connect(site);
    const end = await bench.finish();
    expect(end).toMatchObject({ outcome: 'site-missing', result: { fits: [], rounds: 1 } });
    expect(end.reason).toMatch(/ castlefen\.$/);
    expect(bench.named('late')).toHaveLength(4);
  });

  test('a refusal reaches the run', async () => {
    const bench = new Bench(memoryStore(), (ask, site) =>
      site === 'castlefen'
        ? [{ kind: 'refusal', run: ask.run, ask: ask.ask, code: 'policy-rows', message: '', remedy: null }]
        : honest(ask, site),
    );
    void bench.host.open();
    for (const site of SITES) bench.connect(site);
    expect(await bench.finish()).toMatchObject({
      outcome: 'refused',
      reason: 'castlefen refused: policy-rows',
    });
  });

  test('a vector of the wrong length closes the link and counts for nothing', async () => {
    let wrong = true;
    const bench = new Bench(memoryStore(), (ask, site) => {
      const answer = toyAnswer(ask, MEANS[site]);
      const [work] = answer.work;
      if (site === 'castlefen' && wrong && work.work === 'evaluate') {
        wrong = false;
        work.points[0].gradient = Float64Array.of(1, 2);
        bench.time.after(500, () => bench.connect(site));
      }
      return [answer];
    });
    void bench.host.open();
    for (const site of SITES) bench.connect(site);
    expect((await bench.finish()).result).toEqual((await undisturbed()).kept?.result);
    expect(bench.notices).toContainEqual(
      expect.objectContaining({ level: 'warn', code: 'dimension-wrong', site: 'castlefen' }),
    );
  });

  test('at least two of any site: starts at the deadline with all that are there', async () => {
    const bench = new Bench(memoryStore(), honest, { sites: { least: 2 } });
    void bench.host.open();
    bench.connect('lindell-bay');
    bench.connect('castlefen');
    await bench.time.pass(999);
    expect(bench.host.state.state).toBe('waiting');
    bench.connect('harrowmere');
    const { result } = await bench.finish();
    expect(result.sites.map(({ site }) => site)).toEqual(['castlefen', 'harrowmere', 'lindell-bay']);
  });

  test('waits for its turn without losing patience', async () => {
    const bench = new Bench();
    bench.mayStart = false;
    void bench.host.open();
    for (const site of SITES) bench.connect(site);
    await bench.time.pass(20_000);
    expect(bench.host.state.state).toBe('waiting');
    bench.mayStart = true;
    bench.host.poke();
    expect((await bench.finish()).outcome).toBe('solved');
  });

  test('a defect of the run ends it as broken, and the host goes on', async () => {
    const bench = new Bench(memoryStore(), honest, {
      *run(specification, digest, roster) {
        const toy = toyRun(specification, digest, roster);
        const { value } = toy.next();
        if ('works' in value) yield value;
        throw new Error('division by a site');
      },
    });
    void bench.host.open();
    for (const site of SITES) bench.connect(site);
    expect(await bench.finish()).toMatchObject({
      outcome: 'broken',
      reason: expect.stringMatching(/division by a site/),
    });
  });
});
