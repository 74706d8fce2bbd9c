import { describe, expect, test } from 'vitest';
import { checkAnswer } from '../../protocol/check-answer.js';
import { fail, succeed } from '../../protocol/failure.js';
import type { ProximalProblem } from '../../protocol/messages/proximal.js';
import type { Answer, Ask, Work } from '../../protocol/messages/round.js';
import { canonicalText, digestOf } from '../../protocol/specification/canonical.js';
import { readLedger } from '../../worker/custody/ledger.js';
import { buildRawShard } from '../../worker/design/build.js';
import { scaleShard } from '../../worker/design/scale.js';
import { localSolver } from '../../worker/local/local-solver.js';
import { lossOf } from '../../worker/losses/index.js';
import type { Reply } from '../../worker/service/answerer.js';
import {
  askOf,
  OPEN_POLICY,
  prepareOf,
  SCALING,
  siteInMemory,
  specification,
  TABLE,
} from '../support/worker-site.js';

const vector = (...values: number[]): Float64Array => Float64Array.from(values);

const fullProblem = (more: Partial<ProximalProblem> = {}): ProximalProblem => ({
  problem: 0,
  part: null,
  center: vector(-1, 0.1, 0),
  scale: 0.3,
  diagonal: vector(1, 2, 0.5),
  diagonalAsk: 1,
  start: vector(0, 0, 0),
  startAsk: 1,
  ...more,
});

const proximal = (...problems: ProximalProblem[]): Work => ({ work: 'proximal', problems });
const gradient: Work = {
  work: 'evaluate',
  problem: 0,
  part: null,
  points: [{ point: vector(-1, 0, 0), want: 'gradient' }],
  ownFit: null,
  sketch: null,
};
const curvature: Work = { ...gradient, points: [{ point: vector(-1, 0, 0), want: 'curvature' }] };

/** A first ask in full, and a second one that leaves out what the site should remember. */
const first = askOf('r1', 1, proximal(fullProblem()));
const lean = (more: Partial<ProximalProblem> = {}): Ask =>
  askOf('r1', 2, proximal(fullProblem({ center: vector(-1, 0.2, 0), diagonal: null, start: null, ...more })));

function answered(reply: Reply): Answer {
  if (reply?.kind !== 'answer') expect.unreachable(`${reply?.code}: ${reply?.message}`);
  return reply;
}

const codeOf = (reply: Reply): string =>
  reply === null ? 'skipped' : reply.kind === 'refusal' ? reply.code : 'answered';

function pointOf(reply: Reply): Float64Array {
  const [item] = answered(reply).work;
  if (item.work !== 'proximal') expect.unreachable(item.work);
  return item.problems[0].point;
}

describe('answers', () => {
  test('are what the local solver says on these rows, one for each work item in order', async () => {
    const { answerer } = await siteInMemory();
    answerer.prepare(prepareOf('r1'));
    const sketch = { at: 0, directions: vector(1, 0, 0, 0, 1, -1), columns: 2 };
    const works = [gradient, proximal(fullProblem()), { ...gradient, sketch }];
    const reply = answered(await answerer.answer(askOf('r1', 1, ...works)));
    const raw = buildRawShard(specification(), TABLE);
    if (!raw.ok) expect.unreachable(raw.failure.message);
    const solver = localSolver(scaleShard(raw.value, SCALING, true), lossOf({ kind: 'poisson' }));
    const point = solver.proximal(vector(-1, 0.1, 0), 0.3, vector(1, 2, 0.5), vector(0, 0, 0));
    const value = solver.evaluate(vector(-1, 0, 0), 'gradient');
    const products = solver.sketch(vector(-1, 0, 0), sketch.directions, 2);
    const evaluated = { work: 'evaluate', problem: 0, points: [value.ok && value.value], ownFit: null };
    expect(reply.work).toEqual([
      { ...evaluated, sketch: null },
      { work: 'proximal', problems: [{ problem: 0, ...(point.ok ? point.value : {}) }] },
      { ...evaluated, sketch: products.ok && products.value },
    ]);
  });

  test('the survey needs no scaling and brings the allowance', async () => {
    const { answerer } = await siteInMemory({ policy: { ...OPEN_POLICY, curvatureMost: 3 } });
    answerer.prepare(prepareOf('r1', specification(), null));
    const [survey] = answered(await answerer.answer(askOf('r1', 1, { work: 'survey' }))).work;
    expect(survey).toMatchObject({
      rowsUsed: 60,
      rowsDropped: 2,
      columns: ['age_years', 'pressure_bar'],
      allowance: { curvatureMost: 3, numbersMost: null },
    });
    expect(codeOf(await answerer.answer(askOf('r1', 2, gradient)))).toBe('dimension-wrong');
  });

  test('come in the order of the asks', async () => {
    const { answerer } = await siteInMemory();
    const runs = ['r1', 'r2', 'r3'];
    for (const run of runs) answerer.prepare(prepareOf(run));
    const order: string[] = [];
    await Promise.all(
      runs.map(async (run) => {
        await answerer.answer(askOf(run, 1, gradient));
        order.push(run);
      }),
    );
    expect(order).toEqual(runs);
  });

  test('an ask in the making is not started twice', async () => {
    const { answerer, events } = await siteInMemory();
    answerer.prepare(prepareOf('r1'));
    const twice = [answerer.answer(first), answerer.answer(structuredClone(first))];
    expect(answerer.open).toBe(1);
    const [one, other] = await Promise.all(twice);
    expect(other).toBe(one);
    expect(events.filter(({ event }) => event === 'answered')).toHaveLength(1);
  });

  test('the table is read once for runs on the same columns, and again when none is left', async () => {
    const { answerer, reads } = await siteInMemory();
    const penalised = specification(['penalty: [{kind: ridge, lambda: 0.1}]']);
    answerer.prepare(prepareOf('r1'));
    answerer.prepare(prepareOf('r2', penalised));
    await answerer.answer(askOf('r1', 1, gradient));
    await answerer.answer(askOf('r2', 1, gradient));
    expect(reads).toHaveLength(1);
    answerer.forget('r1');
    answerer.forget('r2');
    answerer.prepare(prepareOf('r3'));
    await answerer.answer(askOf('r3', 1, gradient));
    expect(reads).toHaveLength(2);
  });
});

describe('vectors left out', () => {
  test('are those of the asks named: the answer is that to the ask in full', async () => {
    const { answerer } = await siteInMemory();
    answerer.prepare(prepareOf('r1'));
    const start = pointOf(await answerer.answer(first));
    const short = await answerer.answer(lean());
    const fresh = await siteInMemory();
    fresh.answerer.prepare(prepareOf('r1'));
    const long = await fresh.answerer.answer(lean({ diagonal: vector(1, 2, 0.5), start }));
    expect(pointOf(short)).toEqual(pointOf(long));
  });

  test('a worker started again refuses memory-missing, then answers in full and takes the next one lean', async () => {
    const before = await siteInMemory();
    before.answerer.prepare(prepareOf('r1'));
    const start = pointOf(await before.answerer.answer(first));
    const expected = pointOf(await before.answerer.answer(lean()));

    const { answerer } = await siteInMemory({ file: before.file });
    answerer.prepare(prepareOf('r1'));
    expect(codeOf(await answerer.answer(lean()))).toBe('memory-missing');
    const full = lean({ diagonal: vector(1, 2, 0.5), start });
    expect(pointOf(await answerer.answer(full))).toEqual(expected);
    const next = askOf('r1', 3, proximal(fullProblem({ diagonal: null, start: null, startAsk: 2 })));
    expect(codeOf(await answerer.answer(next))).toBe('answered');
  });

  test('a diagonal that serves many rounds is not forgotten', async () => {
    const { answerer } = await siteInMemory();
    answerer.prepare(prepareOf('r1'));
    await answerer.answer(first);
    for (let ask = 2; ask < 12; ask++) {
      const work = proximal(fullProblem({ diagonal: null, start: null, startAsk: ask - 1 }));
      expect(codeOf(await answerer.answer(askOf('r1', ask, work)))).toBe('answered');
    }
  });

  test('memory is bounded: what does not fit is asked for in full', async () => {
    const { answerer } = await siteInMemory({ bounds: { memoryNumbersMost: 6 } });
    answerer.prepare(prepareOf('r1'));
    const problems = [0, 1, 2].map((problem) => fullProblem({ problem }));
    expect(codeOf(await answerer.answer(askOf('r1', 1, proximal(...problems))))).toBe('answered');
    expect(codeOf(await answerer.answer(lean()))).toBe('memory-missing');
  });

  test('another scaling makes what was remembered useless', async () => {
    const { answerer } = await siteInMemory();
    answerer.prepare(prepareOf('r1'));
    await answerer.answer(first);
    answerer.prepare(prepareOf('r1', specification(), { ...SCALING, scale: vector(5, 1) }));
    expect(codeOf(await answerer.answer(lean()))).toBe('memory-missing');
  });
});

describe('the ledger', () => {
  test('has the line on disk before the answer is there', async () => {
    const { answerer, file } = await siteInMemory();
    answerer.prepare(prepareOf('r1'));
    await answerer.answer(first);
    const read = readLedger(file.text, file.name);
    expect(read.ok && read.value.records).toMatchObject([
      { run: 'r1', ask: 1, kinds: ['proximal'], numbers: 4, digest: prepareOf('r1').digest },
    ]);
  });

  test('nothing leaves when it cannot be written', async () => {
    const { answerer, file } = await siteInMemory();
    file.append = async () => fail('state-unwritable', 'No space is left on /srv/harrowmere.');
    answerer.prepare(prepareOf('r1'));
    const reply = await answerer.answer(first);
    expect(codeOf(reply)).toBe('state-unwritable');
    expect(JSON.stringify(reply)).not.toContain('/srv');
  });

  test('a repeated ask has one answer and counts once, after a restart too', async () => {
    const before = await siteInMemory();
    before.answerer.prepare(prepareOf('r1'));
    const once = pointOf(await before.answerer.answer(first));
    const again = pointOf(await before.answerer.answer(first));
    const { answerer, file } = await siteInMemory({ file: before.file });
    answerer.prepare(prepareOf('r1'));
    const restarted = pointOf(await answerer.answer(first));
    expect([again, restarted]).toEqual([once, once]);
    expect(answerer.departed('r1')).toMatchObject({ asks: 1, numbers: 4 });
    expect(file.text.trimEnd().split('\n')).toHaveLength(1);
  });

  test.each<[string, Ask]>([
    ['another centre', askOf('r1', 1, proximal(fullProblem({ center: vector(-1, 0.1, 1e-300) })))],
    ['other work', askOf('r1', 1, gradient)],
  ])('the same ask with %s is refused, after a restart too', async (_name, changed) => {
    const before = await siteInMemory();
    before.answerer.prepare(prepareOf('r1'));
    await before.answerer.answer(first);
    expect(codeOf(await before.answerer.answer(changed))).toBe('ask-changed');
    const { answerer } = await siteInMemory({ file: before.file });
    answerer.prepare(prepareOf('r1'));
    expect(codeOf(await answerer.answer(changed))).toBe('ask-changed');
  });

  test('the same ask under another scaling is other content', async () => {
    const { answerer } = await siteInMemory();
    answerer.prepare(prepareOf('r1'));
    await answerer.answer(askOf('r1', 1, gradient));
    answerer.prepare(prepareOf('r1', specification(), { ...SCALING, scale: vector(5, 1) }));
    expect(codeOf(await answerer.answer(askOf('r1', 1, gradient)))).toBe('ask-changed');
  });

  test('a repeated survey is a repeat although the scaling is known by now', async () => {
    const { answerer } = await siteInMemory();
    answerer.prepare(prepareOf('r1', specification(), null));
    await answerer.answer(askOf('r1', 1, { work: 'survey' }));
    answerer.prepare(prepareOf('r1'));
    expect(codeOf(await answerer.answer(askOf('r1', 1, { work: 'survey' })))).toBe('answered');
    expect(answerer.departed('r1').asks).toBe(1);
  });
});

describe('refusals', () => {
  test('curvature is spent over a restart', async () => {
    const policy = { ...OPEN_POLICY, curvatureMost: 1 };
    const before = await siteInMemory({ policy });
    before.answerer.prepare(prepareOf('r1'));
    await before.answerer.answer(askOf('r1', 1, curvature));
    const { answerer } = await siteInMemory({ policy, file: before.file });
    answerer.prepare(prepareOf('r1'));
    expect(codeOf(await answerer.answer(askOf('r1', 1, curvature)))).toBe('answered');
    expect(codeOf(await answerer.answer(askOf('r1', 2, curvature)))).toBe('policy-curvature');
    expect(codeOf(await answerer.answer(askOf('r1', 3, gradient)))).toBe('answered');
  });

  test('numbers over the limit do not leave, and nothing is recorded', async () => {
    const { answerer, file } = await siteInMemory({ policy: { ...OPEN_POLICY, numbersMost: 3 } });
    answerer.prepare(prepareOf('r1'));
    expect(codeOf(await answerer.answer(first))).toBe('policy-numbers');
    expect(file.text).toBe('');
  });

  test('a column the policy keeps is refused before the table is read', async () => {
    const { answerer, reads } = await siteInMemory({ policy: { ...OPEN_POLICY, columns: ['breaks'] } });
    answerer.prepare(prepareOf('r1'));
    expect(codeOf(await answerer.answer(first))).toBe('policy-column');
    expect(reads).toHaveLength(0);
  });

  test('an approval counts from the next ask on, and so does taking it back', async () => {
    const approved = new Set<string>();
    const { answerer } = await siteInMemory({
      policy: { ...OPEN_POLICY, approvals: 'listed' },
      approved: async () => succeed(approved),
    });
    answerer.prepare(prepareOf('r1'));
    expect(codeOf(await answerer.answer(first))).toBe('policy-approval');
    approved.add(prepareOf('r1').digest);
    expect(codeOf(await answerer.answer(first))).toBe('answered');
    approved.clear();
    expect(codeOf(await answerer.answer(askOf('r1', 2, gradient)))).toBe('policy-approval');
  });

  test('too few rows: the count itself does not leave', async () => {
    const { answerer } = await siteInMemory({ policy: { ...OPEN_POLICY, rowsLeast: 61 } });
    answerer.prepare(prepareOf('r1'));
    const reply = await answerer.answer(askOf('r1', 1, { work: 'survey' }));
    expect(reply).toMatchObject({ kind: 'refusal', code: 'policy-rows' });
    expect(JSON.stringify(reply)).not.toContain('60');
  });

  test("a row's value stays in the worker's log", async () => {
    const { answerer, events } = await siteInMemory({
      readTable: async () =>
        fail('column-not-numeric', 'Found "12 mm old" in row 4711.', {
          where: { row: 4711, column: 'age_years' },
        }),
    });
    answerer.prepare(prepareOf('r1'));
    const reply = await answerer.answer(first);
    expect(reply).toMatchObject({ code: 'column-not-numeric', run: 'r1', ask: 1 });
    expect(JSON.stringify(reply)).toContain('age_years');
    expect(JSON.stringify(reply)).not.toMatch(/4711|12 mm old/);
    expect(JSON.stringify(events)).toContain('12 mm old');
  });

  test('a table that was mended is read again', async () => {
    let broken = true;
    const { answerer } = await siteInMemory({
      readTable: async () => (broken ? fail('table-missing', 'There is no table.') : succeed(TABLE)),
    });
    answerer.prepare(prepareOf('r1'));
    expect(codeOf(await answerer.answer(first))).toBe('table-missing');
    broken = false;
    expect(codeOf(await answerer.answer(first))).toBe('answered');
  });

  test('a specification that is not what its digest says', async () => {
    const { answerer } = await siteInMemory();
    const other = digestOf(canonicalText(specification(['penalty: [{kind: ridge, lambda: 1}]'])));
    answerer.prepare({ ...prepareOf('r1'), digest: other });
    expect(codeOf(await answerer.answer(first))).toBe('frame-malformed');
  });

  test('a specification that does not name this site', async () => {
    const { answerer } = await siteInMemory({ site: 'oakhythe' });
    answerer.prepare(prepareOf('r1'));
    const reply = await answerer.answer(first);
    expect(codeOf(reply)).toBe('site-unknown');
  });

  test('a run that was not prepared, or was forgotten, or had to make room', async () => {
    const { answerer } = await siteInMemory({ bounds: { runsMost: 2 } });
    expect(codeOf(await answerer.answer(first))).toBe('run-unknown');
    for (const run of ['r1', 'r2', 'r3']) answerer.prepare(prepareOf(run));
    expect(codeOf(await answerer.answer(first))).toBe('run-unknown');
    expect(codeOf(await answerer.answer(askOf('r3', 1, gradient)))).toBe('answered');
    answerer.forget('r3');
    expect(codeOf(await answerer.answer(askOf('r3', 2, gradient)))).toBe('run-unknown');
  });

  test.each<[string, Partial<typeof SCALING>]>([
    ['a column that is not there', { kept: [0, 2] }],
    ['a column twice', { kept: [1, 1] }],
    ['a scale of zero', { scale: vector(1, 0) }],
    ['a centre too few', { center: vector(1) }],
  ])('a scaling with %s', async (_name, wrong) => {
    const { answerer } = await siteInMemory();
    answerer.prepare(prepareOf('r1', specification(), { ...SCALING, ...wrong }));
    expect(codeOf(await answerer.answer(first))).toBe('dimension-wrong');
  });

  test('asks beyond the queue are turned away at once', async () => {
    const { answerer } = await siteInMemory({ bounds: { asksMost: 2 } });
    const runs = ['r1', 'r2', 'r3'];
    for (const run of runs) answerer.prepare(prepareOf(run));
    const replies = await Promise.all(runs.map((run) => answerer.answer(askOf(run, 1, gradient))));
    expect(replies.map(codeOf)).toEqual(['answered', 'answered', 'internal']);
  });

  test('a defect becomes a refusal that says nothing of the machine', async () => {
    const { answerer, events } = await siteInMemory({
      readTable: async () => {
        throw new Error('cannot open /home/custodian/pipes.csv');
      },
    });
    answerer.prepare(prepareOf('r1'));
    const reply = await answerer.answer(first);
    expect(codeOf(reply)).toBe('internal');
    expect(JSON.stringify(reply)).not.toContain('/home');
    expect(JSON.stringify(events)).toContain('/home/custodian');
  });

  test('a run that ends gives up the answer in the making', async () => {
    let release = (): void => undefined;
    const held = new Promise<void>((resolve) => {
      release = resolve;
    });
    let entered = (): void => undefined;
    const inside = new Promise<void>((resolve) => {
      entered = resolve;
    });
    const { answerer } = await siteInMemory({
      pause: () => {
        entered();
        return held;
      },
    });
    answerer.prepare(prepareOf('r1'));
    const reply = answerer.answer(first);
    await inside;
    answerer.forget('r1');
    release();
    expect(codeOf(await reply)).toBe('run-cancelled');
  });
});

describe('work at the point found', () => {
  const spec = specification(['report: [sandwich, margins, compare-sites, fit-quality]']);
  const policy = {
    ...OPEN_POLICY,
    leave: [...OPEN_POLICY.leave, 'site-estimates', 'residual-bins'] as const,
  };
  const point = vector(-1, 0.1, 0.05);
  const works: Work[] = [
    { work: 'scores', problem: 0, point, meat: true, clustered: false },
    { work: 'site-fit', problem: 0, start: point },
    { work: 'margins', problem: 0, point, settings: [{ set: 'slope', column: 'age_years' }] },
    { work: 'quality', problem: 0, point, edges: vector(-1, 0), inverse: null, leverageHigh: 0.1 },
  ];

  test('is answered in order and goes into the ledger by its kinds', async () => {
    const { answerer, file } = await siteInMemory({ policy: { ...policy, leave: [...policy.leave] } });
    answerer.prepare(prepareOf('r1', spec));
    const reply = answered(await answerer.answer(askOf('r1', 1, ...works)));
    expect(reply.work.map(({ work }) => work)).toEqual(['scores', 'site-fit', 'margins', 'quality']);
    expect(checkAnswer(askOf('r1', 1, ...works), reply, 3)).toBeNull();
    const [line] = readLines(file.text);
    expect([...line.kinds].sort()).toEqual(['curvature', 'gradients', 'residual-bins', 'site-estimates']);
  });

  test('is refused where the policy lets no such kind leave', async () => {
    const { answerer } = await siteInMemory();
    answerer.prepare(prepareOf('r1', spec));
    expect(codeOf(await answerer.answer(askOf('r1', 1, works[1])))).toBe('policy-kind');
    expect(codeOf(await answerer.answer(askOf('r1', 2, works[3])))).toBe('policy-kind');
  });

  test('margins are refused where the specification asks for none', async () => {
    const { answerer } = await siteInMemory();
    answerer.prepare(prepareOf('r1'));
    expect(codeOf(await answerer.answer(askOf('r1', 1, works[2])))).toBe('not-supported');
  });

  test('an intercept of its own needs the whole site', async () => {
    const { answerer } = await siteInMemory({ shard: { index: 1, of: 2 } });
    answerer.prepare(prepareOf('r1', specification(['intercept: per-site'])));
    expect(codeOf(await answerer.answer(askOf('r1', 1, { work: 'survey' })))).toBe('not-supported');
  });

  test('a part is asked by its fold, and its answers add up to those of all rows', async () => {
    const folds = ['choose: {folds: 3, seed: 7}', 'penalty: [{kind: lasso, lambda: [0.1, 0.2]}]'];
    const { answerer } = await siteInMemory();
    answerer.prepare(prepareOf('r1', specification(folds)));
    const parts = [null, '1', '2', '3'].map(
      (fold): Work => ({ ...gradient, part: fold === null ? null : { fold, side: 'held-out' } }),
    );
    const values = answered(await answerer.answer(askOf('r1', 1, ...parts))).work.map((item) =>
      item.work === 'evaluate' ? item.points[0].value : Number.NaN,
    );
    expect(values[1] + values[2] + values[3]).toBeCloseTo(values[0], 12);
    const training = answered(
      await answerer.answer(askOf('r1', 2, { ...gradient, part: { fold: '2', side: 'training' } })),
    ).work[0];
    if (training.work !== 'evaluate') expect.unreachable();
    expect(training.points[0].value).toBeCloseTo(values[1] + values[3], 12);
  });
});

const readLines = (text: string) => {
  const read = readLedger(text, 'castlefen.ledger');
  if (!read.ok) expect.unreachable(read.failure.message);
  return read.value.records;
};
